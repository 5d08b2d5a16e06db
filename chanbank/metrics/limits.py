"""A specification, and a report held against it."""

import html
import numbers
from dataclasses import dataclass

import numpy as np

from chanbank._checks import Instance, OwnCheck, checked, wrong_type, wrong_value
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.present import value_text
from chanbank.metrics.report import BankReport

__all__ = ["LimitCheck", "LimitLine", "Limits"]


class Limits:
    """Limits on the figures of a report.

    A limit is the worst value allowed: the figure must be at most the limit where lower is better,
    at least the limit where higher is better. A pair (low, high) bounds a figure on both sides;
    None leaves a side open.

    Parameters
    ----------
    **limits : float or (float, float)
        By the names of a report's figures, in their units: ``adjacent_leakage_ratio=60``,
        ``passband_ripple=0.5``, ``latency_seconds=2e-3``, ``multiplications=100``,
        ``enbw=(0.9, 1.1)``.

    Raises
    ------
    TypeError
        No limit at all, a name that no report holds, or a limit that is not a number or a pair.
    ValueError
        A limit that is not finite, a pair the wrong way round or without a bound, or a single
        limit on a figure of which neither side is better.

    Examples
    --------
    >>> from chanbank import ChannelPlan, Limits, bank_report, boxcar_prototype
    >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
    >>> print(Limits(scalloping_loss=4, adjacent_leakage_ratio=40).check(report))
    pass  scalloping loss         3.92 dB   at most 4.00 dB    margin 0.08 dB
    FAIL  adjacent leakage ratio  12.14 dB  at least 40.00 dB  margin -27.86 dB
    1 of 2 limits failed
    """

    @checked(
        call=False,
        limits=OwnCheck("finite numbers or pairs by the names of figures", (3, TypeError)),
    )
    def __init__(self, **limits):
        if not limits:
            raise TypeError(f"Limits needs at least one of {', '.join(DEFINITIONS)}")
        self._bounds = {}
        for name, limit in limits.items():
            if name not in DEFINITIONS:
                raise TypeError(
                    f"Limits has no figure {name!r}; the figures are {', '.join(DEFINITIONS)}"
                )
            self._bounds[name] = _bounds(name, limit)

    @property
    def bounds(self):
        """Name to (low, high), None where a side is open."""
        return dict(self._bounds)

    @checked(report=Instance(BankReport))
    def check(self, report):
        """Hold a report against the limits.

        Parameters
        ----------
        report : BankReport

        Returns
        -------
        LimitCheck
            One line per limit, pass or fail with its margin; prints as a table. A figure that the
            report does not hold fails, with the reason. Of a figure of many channels the worst
            decides.

        Raises
        ------
        TypeError
            Not a report.

        Examples
        --------
        See the class.
        """
        return LimitCheck(
            tuple(_check(report, name, *bounds) for name, bounds in self._bounds.items())
        )

    def __eq__(self, other):
        return self._bounds == other._bounds if isinstance(other, Limits) else NotImplemented

    def __hash__(self):
        return hash(tuple(sorted(self._bounds.items(), key=str)))

    def __repr__(self):
        shown = []
        for name, (low, high) in self._bounds.items():
            better = DEFINITIONS[name].better
            single = {"lower": (low is None, high), "higher": (high is None, low)}.get(better)
            shown.append(f"{name}={single[1] if single and single[0] else (low, high)!r}")
        return f"Limits({', '.join(shown)})"


def _bounds(name, limit):
    accepted = "a finite number, or a pair (low, high) of which one may be None"
    if isinstance(limit, (tuple, list)):
        if len(limit) != 2:
            raise wrong_value(name, accepted, limit)
        low, high = (None if side is None else _number(name, side, accepted) for side in limit)
        if (low is None and high is None) or (low is not None and high is not None and low > high):
            raise wrong_value(name, "a pair with low <= high", limit)
        return low, high
    number = _number(name, limit, accepted)
    better = DEFINITIONS[name].better
    if not better:
        raise wrong_value(name, "a pair (low, high), since neither side is better", limit)
    return (None, number) if better == "lower" else (number, None)


def _number(name, value, accepted):
    if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Real):
        raise wrong_type(name, accepted, value)
    if not np.isfinite(value):
        raise wrong_value(name, accepted, value)
    return float(value)


@dataclass(frozen=True)
class LimitLine:
    """One limit and what a report has.

    Attributes
    ----------
    name : str
    low, high : float or None
        The limit.
    value : float or None
        The deciding value of the report, None when absent.
    channel : int or None
        The channel that decides.
    margin : float or None
        Distance to the limit in the figure's unit, negative when it fails.
    passed : bool
    reason : str
        Why the value is absent, else empty.
    """

    name: str
    low: float | None
    high: float | None
    value: float | None
    channel: int | None
    margin: float | None
    passed: bool
    reason: str = ""

    def _cells(self):
        definition = DEFINITIONS[self.name]
        show = lambda v: _with_unit(v, definition.unit)  # noqa: E731
        if self.low is None:
            limit = f"at most {show(self.high)}"
        elif self.high is None:
            limit = f"at least {show(self.low)}"
        else:
            limit = f"{show(self.low)} to {show(self.high)}"
        verdict = "pass" if self.passed else "FAIL"
        if self.value is None:
            return [verdict, definition.title, "absent", limit, self.reason]
        where = "" if self.channel is None else f", channel {self.channel}"
        value = show(self.value)
        return [verdict, definition.title, value, limit, f"margin {show(self.margin)}{where}"]


def _with_unit(value, unit):
    if np.isinf(value):
        return value_text(value, unit)
    if unit == "s":
        return f"{value:.4g} s"
    return f"{value_text(value, unit)} {unit}".rstrip()


@dataclass(frozen=True)
class LimitCheck:
    """A report held against limits; true when all pass.

    Attributes
    ----------
    lines : tuple of LimitLine
    passed : bool

    Examples
    --------
    See `Limits`.
    """

    lines: tuple

    @property
    def passed(self):
        return all(line.passed for line in self.lines)

    def __bool__(self):
        return self.passed

    def __str__(self):
        rows = [line._cells() for line in self.lines]
        width = [max(len(row[i]) for row in rows) for i in range(5)]
        text = ["  ".join(c.ljust(w) for c, w in zip(row, width, strict=True)) for row in rows]
        failed = sum(not line.passed for line in self.lines)
        count = len(self.lines)
        end = f"{failed} of {count} limits failed" if failed else f"all {count} limits passed"
        return "\n".join(line.rstrip() for line in [*text, end])

    def _repr_html_(self):
        rows = "".join(
            "<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in line._cells()) + "</tr>"
            for line in self.lines
        )
        return f"<table>{rows}</table>"

    def to_dict(self):
        """The check as a dict that JSON can hold.

        Returns
        -------
        dict
            ``passed`` and ``lines``, each with figure, unit, limit, value and margin.

        Examples
        --------
        >>> from chanbank import ChannelPlan, Limits, bank_report, boxcar_prototype
        >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
        >>> Limits(scalloping_loss=4).check(report).to_dict()["passed"]
        True
        """
        return {
            "passed": self.passed,
            "lines": [
                {
                    "figure": line.name,
                    "unit": DEFINITIONS[line.name].unit,
                    "low": line.low,
                    "high": line.high,
                    "value": _finite(line.value),
                    "margin": _finite(line.margin),
                    "channel": line.channel,
                    "passed": line.passed,
                    "reason": line.reason
                    or ("a power that is exactly zero" if _zero(line.value) else ""),
                }
                for line in self.lines
            ],
        }


def _finite(value):
    return value if value is not None and np.isfinite(value) else None


def _zero(value):
    return value is not None and np.isinf(value)


def _check(report, name, low, high):
    figure = report[name]
    if not figure.present:
        return LimitLine(name, low, high, None, None, None, False, figure.reason() or "")
    values = np.atleast_1d(figure.values)
    with np.errstate(invalid="ignore"):
        margins = np.fmin(
            np.inf if low is None else values - low, np.inf if high is None else high - values
        )
    at = int(np.nanargmin(np.where(np.isnan(values), np.nan, margins)))
    alike = not figure.values.ndim or np.nanmax(margins) - margins[at] <= 1e-6
    margin = float(margins[at])
    return LimitLine(
        name,
        low,
        high,
        float(values[at]),
        None if alike else int(report.channels[at]),
        margin,
        margin >= 0,
    )
