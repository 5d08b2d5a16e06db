"""Two reports of one bank held against each other, and measured tones against coefficients."""

from dataclasses import dataclass

import numpy as np

from chanbank._checks import wrong_type
from chanbank.metrics._kernel_checks import Comparison, kernel_checks
from chanbank.metrics.figures import DEFINITIONS

__all__ = ["ReportDisagreement", "Verification", "verify_reports"]

# Group delays come from differences of phase: absolute slack in samples.
_DELAY_SLACK = 0.05


class ReportDisagreement(ValueError):
    """Two reports of one bank, or a measured tone and the coefficients, disagree.

    Attributes
    ----------
    verification : Verification
        All that was compared.
    """

    def __init__(self, text, verification):
        super().__init__(text)
        self.verification = verification


@dataclass(frozen=True)
class Verification:
    """What `BankReport.verify` compared.

    Attributes
    ----------
    lines : tuple of Comparison
    skipped : tuple of str
        Figures that only one of the reports holds.
    agreed : bool
        Whether every line agreed.
    """

    lines: tuple
    skipped: tuple

    @property
    def agreed(self):
        return all(line.agreed for line in self.lines)

    def __getitem__(self, what):
        for line in self.lines:
            if line.what == what:
                return line
        raise KeyError(what)

    def __str__(self):
        width = max(len(line.what) for line in self.lines)
        rows = [_line_text(line, width) for line in self.lines]
        if self.skipped:
            rows.append("held by one report only: " + ", ".join(self.skipped))
        return "\n".join(rows)


def _line_text(line, width=0):
    return (
        f"{'agrees   ' if line.agreed else 'DISAGREES'} {line.what.ljust(width)}  "
        f"{line.difference:.3g} {line.unit} (allowed {line.allowed:.3g}) at {line.at}, "
        f"{line.compared} compared"
    )


def verify_reports(one, other, *, tolerance_db):
    """See `BankReport.verify`."""
    if not hasattr(other, "figures") or not hasattr(other, "tones"):
        raise wrong_type("other", "a BankReport", other)
    if one.plan != other.plan:
        raise ValueError(f"other must be of the same plan, {one.plan}; got {other.plan}")
    for name in ("occupied_bandwidth", "stopband_edge"):
        if not np.allclose(getattr(one, name), getattr(other, name), rtol=1e-9):
            raise ValueError(f"other must be made with the same {name}")
    floor = 10 ** (max(one.floor_db, other.floor_db) / 20)
    lines, skipped = [], []
    for name in DEFINITIONS:
        line = _compare(name, one, other, tolerance_db, floor)
        if line is None:
            if one[name].present != other[name].present:
                skipped.append(name)
        else:
            lines.append(line)
    for measured, known in ((one, other), (other, one)):
        lines += kernel_checks(measured, known)
    result = Verification(tuple(lines), tuple(skipped))
    if not result.agreed:
        bad = [line for line in result.lines if not line.agreed]
        # Tones first: they say most directly that a kernel, not a figure, is wrong.
        bad.sort(key=lambda line: (line.what in DEFINITIONS, -line.difference / line.allowed))
        text = "\n".join("  " + _line_text(line) for line in bad[:12])
        more = f"\n  and {len(bad) - 12} more" if len(bad) > 12 else ""
        raise ReportDisagreement(f"the reports disagree:\n{text}{more}", result)
    return result


def _compare(name, one, other, tolerance, floor):
    """One figure in both reports, at the channels that both hold."""
    unit = DEFINITIONS[name].unit
    ours, theirs = one[name].values, other[name].values
    places = ["the bank"]
    if ours.ndim:
        common, left, right = np.intersect1d(one.channels, other.channels, return_indices=True)
        ours, theirs = ours[left], theirs[right]
        places = [f"channel {k}" for k in common]
    ours, theirs = np.atleast_1d(ours), np.atleast_1d(theirs)
    both = ~np.isnan(ours) & ~np.isnan(theirs)
    if not both.any():
        return None
    places = [place for place, held in zip(places, both, strict=True) if held]
    difference, allowed, shown = _distance(
        name, unit, ours[both], theirs[both], tolerance, floor, one
    )
    for report in (one, other):
        spread = report[name].uncertainty
        if spread is not None and unit == "dB":
            allowed = np.maximum(allowed, 3 * spread)
    at = int(np.argmax(difference / allowed))
    return Comparison(
        name,
        len(difference),
        float(difference[at]),
        float(allowed[at]),
        shown,
        places[at],
        bool((difference <= allowed).all()),
    )


def _distance(name, unit, ours, theirs, tolerance, floor, report):
    """Differences, what is allowed, and the unit of both."""
    if unit in ("samples", "s", "bytes", "per sample"):
        scale = np.maximum(np.abs(ours), np.abs(theirs))
        epsilon = float(np.finfo(np.dtype(report.dtype)).eps)
        slack = (_DELAY_SLACK + 64 * epsilon * report.prototype.length) * (unit in ("samples", "s"))
        slack = slack / report.plan.sample_rate if unit == "s" else slack
        share = 0.01 if name.endswith("delay_spread") else 1e-4
        return np.abs(ours - theirs), share * scale + slack, unit
    if unit == "dB":
        # A level, whichever sign it is quoted with, as an amplitude below 1.
        a, b = 10 ** (-np.abs(ours) / 20), 10 ** (-np.abs(theirs) / 20)
        with np.errstate(invalid="ignore"):
            difference = np.where(ours == theirs, 0.0, np.abs(ours - theirs))
    else:
        a, b = np.sqrt(np.maximum(ours, 0)), np.sqrt(np.maximum(theirs, 0))
        with np.errstate(divide="ignore", invalid="ignore"):
            difference = np.where(ours == theirs, 0.0, np.abs(10 * np.log10(ours / theirs)))
        if name.startswith("frame"):
            # Below a millionth of B, A is the depth of the deepest of many narrow dips, which a
            # measurement on a grid of frequencies need not meet.
            floor = 1e-3
        if name == "frame_lower":
            floor = floor * np.sqrt(report["frame_upper"].values)
        if name == "frame_ratio":
            # A tiny A is rounding: hold the inverse, which is a level below 1.
            a, b = np.sqrt(1 / ours), np.sqrt(1 / theirs)  # 1 / inf is 0
    # Rounding shifts an amplitude by at most the floor: in dB that is the more, the weaker it is.
    close = np.abs(a - b) <= floor
    difference = np.where(close, np.minimum(difference, tolerance), difference)
    allowed = np.full(len(difference), float(tolerance))
    return difference, allowed, "dB"
