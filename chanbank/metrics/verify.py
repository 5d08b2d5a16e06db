"""Two reports of one bank held against each other, and measured tones against coefficients."""

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from chanbank._checks import wrong_type
from chanbank.metrics._spectrum import complex_comb
from chanbank.metrics.figures import DEFINITIONS

__all__ = ["ReportDisagreement", "Verification", "verify_reports"]

# Rounding of one output is near eps (abs(H) + rms of H over channels + norm(h)): a fold of P
# products, a DFT of log2 M stages whose error spreads over all channels, and taps rounded once.
# The mean over frames shares what is systematic, single frames reach further; a pair adds both
# banks' share.
_MEAN_EPSILONS, _FRAME_EPSILONS, _PAIR_EPSILONS, _NOISE_EPSILONS = 8.0, 16.0, 24.0, 12.0

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
class Comparison:
    """One line of a verification.

    Attributes
    ----------
    what : str
        Name of a figure, or of a check of tones.
    compared : int
        Values compared.
    difference : float
        The largest difference found, in `unit`.
    allowed : float
        What was allowed there.
    unit : str
    at : str
        Where it was found.
    agreed : bool
    """

    what: str
    compared: int
    difference: float
    allowed: float
    unit: str
    at: str
    agreed: bool


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
        if measured.tones:
            lines += _compare_tones(measured, known)
        if measured.noise is not None:
            lines.append(_compare_noise(measured, known))
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


def _compare_tones(measured, known):
    """Responses of every tone in every channel and frame against the coefficients."""
    plan = known.plan
    epsilon = float(np.finfo(np.dtype(measured.dtype)).eps)
    taps = known.prototype.taps
    spread = float(np.sqrt((taps**2).sum()))
    checks = {
        "tone responses": [0, 0.0, 1.0, ""],
        "tone frames": [0, 0.0, 1.0, ""],
        "tones through the pair": [0, 0.0, 1.0, ""],
        "pair samples": [0, 0.0, 1.0, ""],
    }

    def note(what, differences, allowed, place):
        entry = checks[what]
        entry[0] += len(differences)
        at = int(np.argmax(differences / allowed))
        if differences[at] / allowed[at] >= entry[1] / entry[2]:
            entry[1:] = [float(differences[at]), float(allowed[at]), place(at)]

    for tone in measured.tones:
        index = plan.dft_index[tone.channels]
        # Exact until the last: the tone in spacings from the nearest centre, -1/2 to 1/2.
        spacings = Fraction(tone.frequency) * plan.channels - plan.exact_offset
        nearest = round(spacings)
        shift = float(spacings - nearest)
        every = next(complex_comb(taps, plan.channels, plan.channels, [shift]))[1]
        every = every[0]
        predicted = every[(nearest - index) % plan.channels]
        level = np.abs(predicted) + np.sqrt(np.mean(np.abs(every) ** 2)) + spread
        if plan.real:
            # A real tone brings its mirror image, which leaves only with cosine and sine together.
            mirrored = -spacings - 2 * plan.exact_offset
            turned = float(mirrored - round(mirrored))
            other = next(complex_comb(taps, plan.channels, plan.channels, [turned]))[1][0]
            level += np.abs(other[(round(mirrored) - index) % plan.channels])
        # A loud channel leaves spurs of a fraction of an epsilon: the DFT's constants are rounded.
        level += np.abs(every).max() / _MEAN_EPSILONS
        # The prediction itself: phases of up to P turns in double precision.
        own = 4 * np.finfo(float).eps * known.prototype.taps_per_branch * np.abs(taps).sum()
        scale = epsilon * level + own / _MEAN_EPSILONS

        def place(at, tone=tone):
            return f"channel {int(tone.channels[at])}, tone {tone.frequency:.9g} cycles/sample"

        note("tone responses", np.abs(tone.responses - predicted), _MEAN_EPSILONS * scale, place)
        note("tone frames", tone.residuals, _FRAME_EPSILONS * scale, place)
        if tone.pair is None or known.system is None:
            continue
        expected = known.system.responses([shift % 1.0])[:, 0]
        gain = 1.0
        if known["noise_gain"].present:
            gain = max(1.0, 10 ** (float(known["noise_gain"].values) / 20))
        allowed = _PAIR_EPSILONS * epsilon * gain * (1 + np.abs(expected).max())

        def phase(at, tone=tone):
            return f"output phase {at}, tone {tone.frequency:.9g} cycles/sample"

        full = np.full(len(expected), allowed)
        note("tones through the pair", np.abs(tone.pair - expected), full, phase)
        note("pair samples", np.array([tone.pair_residual]), full[:1], phase)
    return [
        Comparison(what, count, difference, allowed, "amplitude", at, difference <= allowed)
        for what, (count, difference, allowed, at) in checks.items()
        if count
    ]


def _compare_noise(measured, known):
    """Frames of white noise against the double-precision sum over the coefficients.

    Noise is as loud in every channel, so that the floor is eps norm(h) everywhere: a single tap
    off by a thousandth of the largest stands out at any number of channels.
    """
    noise, plan, taps = measured.noise, known.plan, known.prototype.taps
    channels, hop = plan.channels, plan.hop
    branches = known.prototype.taps_per_branch
    size = branches * channels
    index = np.arange(size)
    turns = np.exp(2j * np.pi * (float(plan.exact_offset % channels) * index / channels))
    weights = np.zeros(size, np.complex128)
    weights[: len(taps)] = taps
    weights *= turns
    samples = np.pad(noise.samples(), [(0, 0), (size, 0)])
    bins = plan.dft_index[noise.channels]
    differences = []
    for frame in range(noise.frames.shape[1]):
        newest = size + (noise.first + frame) * hop
        window = samples[:, newest - size + 1 : newest + 1][:, ::-1] * weights
        folded = window.reshape(len(samples), branches, channels).sum(axis=1)
        expected = np.fft.ifft(folded, axis=1) * channels
        differences.append(np.abs(noise.frames[:, frame] - expected[:, bins]))
    differences = np.array(differences)
    epsilon = float(np.finfo(np.dtype(measured.dtype)).eps)
    # The prediction's own phases, of up to P turns, are rounded to double precision.
    epsilon = _NOISE_EPSILONS * epsilon + 4 * float(np.finfo(float).eps) * branches
    allowed = epsilon * float(np.sqrt((taps**2).sum()))
    frame, antenna, channel = np.unravel_index(differences.argmax(), differences.shape)
    largest = float(differences[frame, antenna, channel])
    return Comparison(
        "noise frames",
        differences.size,
        largest,
        allowed,
        "amplitude",
        f"channel {int(noise.channels[channel])}, antenna {antenna}, frame {noise.first + frame}",
        largest <= allowed,
    )
