"""What a search found: the designs, the reasons, the trade-off."""

import html

import numpy as np

from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.present import value_text

__all__ = ["DesignSearch"]

_HEAD = ("method", "M", "D", "P", "ops/sample", "latency ms", "memory KiB", "margin dB")


class DesignSearch:
    """The outcome of `find_designs`; prints as a table.

    Attributes
    ----------
    specification : Specification
    designs : tuple of Design
        Those that keep every limit and that no other one beats or equals in cost, latency, memory
        and margin together; cheapest first. Empty when the specification is infeasible.
    tried : tuple of Design
        Every candidate that was judged, cheapest first.
    reason : str
        Why the next cheaper candidate than ``designs[0]`` fails, or, without designs, which limit
        must give and by how much.

    Examples
    --------
    See `find_designs`.
    """

    def __init__(self, specification, tried):
        self.specification = specification
        self.tried = tuple(sorted(tried, key=_order))
        self.designs = tuple(_undominated([d for d in self.tried if d.passed]))
        self.reason = self._next_cheaper() if self.designs else self._infeasible()

    @property
    def feasible(self):
        """Whether any design keeps every limit."""
        return bool(self.designs)

    @property
    def best(self):
        """The cheapest design, or None."""
        return self.designs[0] if self.designs else None

    def _next_cheaper(self):
        best = self.designs[0]
        cheaper = [d for d in self.tried if not d.passed and d.cost < best.cost]
        if not cheaper:
            return f"Nothing cheaper than {best.name} was left to try."
        rival = max(cheaper, key=lambda d: (d.cost, d.margin))
        return f"The next cheaper one, {rival.name}, fails: {_faults(rival)}."

    def _infeasible(self):
        """Which limit alone must give, and to what; else the nearest miss."""
        if not self.tried:
            return "No design could be made for this specification."
        alone = {}
        for design in self.tried:
            names = {line.name for line in design.failures}
            if len(names) == 1:
                alone.setdefault(names.pop(), []).append(design)
        offers = []
        for name in sorted(alone):
            best = max(alone[name], key=lambda d: _shortfall(d.failures[0]))
            offers.append(f"{_give(best.failures[0])} (then {best.name})")
        if offers:
            return "No design keeps every limit. One limit alone must give: " + "; or ".join(offers)
        near = min(self.tried, key=lambda d: (len(d.failures), -sum(map(_shortfall, d.failures))))
        parts = "; and ".join(_give(line) for line in near.failures)
        return (
            "No design keeps every limit, nor with one of them given up. Nearest: "
            f"{parts} ({near.name})"
        )

    def tradeoff(self):
        """The numbers of the trade-off picture, one entry for each candidate.

        Returns
        -------
        dict
            Arrays ``cost`` (real operations per input sample), ``latency`` (seconds), ``memory``
            (bytes), ``margin`` (dB), ``passed`` and ``chosen`` (bool), and the lists ``method``
            and ``name``; in the order of ``tried``.

        Examples
        --------
        See `find_designs`.
        """
        chosen = {id(d) for d in self.designs}
        return {
            "cost": np.array([d.cost for d in self.tried]),
            "latency": np.array([d.latency for d in self.tried]),
            "memory": np.array([d.memory for d in self.tried]),
            "margin": np.array([d.margin for d in self.tried]),
            "passed": np.array([d.passed for d in self.tried], dtype=bool),
            "chosen": np.array([id(d) in chosen for d in self.tried], dtype=bool),
            "method": [d.method for d in self.tried],
            "name": [d.name for d in self.tried],
        }

    def table(self):
        """The designs as text, cheapest first, with the reason below.

        Examples
        --------
        See `find_designs`.
        """
        rows = [_HEAD, *(_row(d) for d in self.designs)]
        if not self.designs:
            return self.reason
        width = [max(len(row[i]) for row in rows) for i in range(len(_HEAD))]
        lines = [
            row[0].ljust(width[0])
            + "".join("  " + cell.rjust(w) for cell, w in zip(row[1:], width[1:], strict=True))
            for row in rows
        ]
        return "\n".join([*lines, self.reason])

    def __str__(self):
        return self.table()

    def __repr__(self):
        return f"DesignSearch({len(self.designs)} designs of {len(self.tried)} tried)"

    def _repr_html_(self):
        rows = [
            "<tr>" + "".join(f"<td>{html.escape(cell)}</td>" for cell in _row(d)) + "</tr>"
            for d in self.designs
        ]
        head = "<tr>" + "".join(f"<th>{cell}</th>" for cell in _HEAD) + "</tr>"
        table = f"<table>{head}{''.join(rows)}</table>" if rows else ""
        return table + f"<p>{html.escape(self.reason)}</p>"

    def to_dict(self):
        """The search as a dict that JSON can hold: designs, their checks, and the reason.

        Examples
        --------
        See `find_designs`.
        """
        return {
            "specification": repr(self.specification),
            "reason": self.reason,
            "tried": len(self.tried),
            "designs": [
                {
                    "method": d.method,
                    "channels": d.plan.channels,
                    "hop": d.plan.hop,
                    "taps_per_branch": d.taps_per_branch,
                    "cost": d.cost,
                    "latency": d.latency,
                    "memory": d.memory,
                    "margin": d.margin,
                    "check": d.check.to_dict(),
                }
                for d in self.designs
            ],
        }


def _order(design):
    return design.cost, design.latency, design.memory, -design.margin, design.name


def _undominated(designs):
    """Those that no other design beats or equals in all four respects; `designs` are in order."""
    kept = []
    for design in designs:
        mine = design.cost, design.latency, design.memory, -design.margin
        for other in kept:
            theirs = other.cost, other.latency, other.memory, -other.margin
            if all(a <= b for a, b in zip(theirs, mine, strict=True)):
                break
        else:
            kept.append(design)
    return kept


def _row(design):
    return (
        design.method,
        str(design.plan.channels),
        str(design.plan.hop),
        str(design.taps_per_branch),
        f"{design.cost:.1f}",
        f"{design.latency * 1e3:.4g}",
        f"{design.memory / 1024:.1f}",
        f"{design.margin:.2f}",
    )


def _shown(value, name):
    unit = DEFINITIONS[name].unit
    if unit == "s":
        return f"{value * 1e3:.4g} ms"
    return f"{value_text(value, unit)} {unit}".rstrip()


def _limit(line):
    if line.low is not None and (line.high is None or line.value is None or line.value < line.low):
        return f"at least {_shown(line.low, line.name)}"
    return f"at most {_shown(line.high, line.name)}"


def _faults(design):
    parts = []
    for line in design.failures:
        title = DEFINITIONS[line.name].title
        if line.value is None:
            parts.append(f"{title} is absent ({line.reason})")
        else:
            parts.append(f"{title} is {_shown(line.value, line.name)}, not {_limit(line)}")
    return "; ".join(parts)


def _give(line):
    title = DEFINITIONS[line.name].title
    if line.value is None:
        return f"{title} cannot be had ({line.reason})"
    return (
        f"{title}, {_limit(line)}, must give to {_shown(line.value, line.name)} "
        f"(by {_shown(abs(line.margin), line.name)})"
    )


def _shortfall(line):
    """How far a limit is missed, comparable between figures: in dB, or relative in dB."""
    if line.value is None:
        return -np.inf
    if DEFINITIONS[line.name].unit == "dB":
        return min(0.0, line.margin)
    bound = line.low if line.low is not None and line.value < line.low else line.high
    return -abs(20 * np.log10(max(line.value, 1e-300) / max(bound, 1e-300)))
