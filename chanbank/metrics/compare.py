"""Several designs side by side."""

import html

import numpy as np

from chanbank._checks import Boolean, OwnCheck, checked, wrong_type, wrong_value
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.formula import bank_report
from chanbank.metrics.present import value_text
from chanbank.metrics.report import BankReport
from chanbank.prototype.boxcar import boxcar_prototype

__all__ = ["ReportComparison", "compare_reports"]

_SHOWN = [
    name
    for name, definition in DEFINITIONS.items()
    if not name.endswith(("_lower", "_upper")) or definition.scope == "bank"
]


@checked(
    reports=OwnCheck(
        "a non-empty sequence of BankReport", (3, TypeError), ([], ValueError), ([3], TypeError)
    ),
    labels=OwnCheck(
        "None or one text per report", ("one", TypeError), ([3], TypeError), (3, TypeError)
    ),
    bare_dft=Boolean(),
)
def compare_reports(reports, *, labels=None, bare_dft=False):
    """Put several designs side by side: the worst value of every figure, and the cost of each.

    Parameters
    ----------
    reports : sequence of BankReport
        One or more; their plans may differ.
    labels : sequence of str, optional
        Headings; by default the prototypes' labels, with the taps per branch where they repeat.
    bare_dft : bool, default False
        Add the bare DFT on the first report's plan, with its occupied bandwidth.

    Returns
    -------
    ReportComparison
        Prints as a table, renders in a notebook, exports to a dict.

    Raises
    ------
    TypeError, ValueError
        Not a sequence of reports, or labels that are not one text per report.

    Examples
    --------
    >>> from chanbank import ChannelPlan, bank_report, compare_reports, window_prototype
    >>> plan = ChannelPlan(1.6e6, 64, 48)
    >>> report = bank_report(plan, window_prototype(64, 12, ("kaiser", 8.0)))
    >>> both = compare_reports([report], bare_dft=True)
    >>> both.labels, both["adjacent_leakage_ratio"].round(1).tolist()
    (('kaiser 8', 'bare DFT'), [37.8, 12.1])
    """
    reports = _checked_reports(reports)
    headings = _checked_labels(labels, reports)
    if bare_dft:
        first = reports[0]
        plan = first.plan
        reports.append(
            bank_report(
                plan,
                boxcar_prototype(plan.channels),
                occupied_bandwidth=first.occupied_bandwidth,
                dtype=first.dtype,
            )
        )
        headings.append("bare DFT")
    return ReportComparison(tuple(reports), tuple(headings))


def _checked_reports(reports):
    accepted = "a non-empty sequence of BankReport"
    if isinstance(reports, BankReport) or not hasattr(reports, "__iter__"):
        raise wrong_type("reports", accepted, reports)
    held = list(reports)
    for report in held:
        if not isinstance(report, BankReport):
            raise wrong_type("reports", accepted, report)
    if not held:
        raise wrong_value("reports", accepted, reports)
    return held


def _checked_labels(labels, reports):
    if labels is None:
        names = [_label(report) for report in reports]
        return [
            name if names.count(name) == 1 else f"{name} x {report.prototype.taps_per_branch}"
            for name, report in zip(names, reports, strict=True)
        ]
    accepted = f"one text for each of the {len(reports)} reports"
    if isinstance(labels, str) or not hasattr(labels, "__iter__"):
        raise wrong_type("labels", accepted, labels)
    held = list(labels)
    if not all(isinstance(label, str) for label in held):
        raise wrong_type("labels", accepted, labels)
    if len(held) != len(reports):
        raise wrong_value("labels", accepted, labels)
    return held


def _aligned(cell, width):
    """To the right, with the mark of the best outside the column of digits."""
    return cell.rjust(width) if cell.endswith("*") else (cell + " ").rjust(width)


def _label(report):
    prototype = report.prototype
    return prototype.label or f"{report.plan.channels} channels"


class ReportComparison:
    """Reports side by side; made by `compare_reports`.

    Attributes
    ----------
    reports : tuple of BankReport
    labels : tuple of str

    Examples
    --------
    See `compare_reports`.
    """

    def __init__(self, reports, labels):
        self.reports, self.labels = reports, labels

    def __getitem__(self, name):
        """The worst value of a figure in each report, NaN where absent."""
        worst = [report[name].worst for report in self.reports]
        return np.array([np.nan if value is None else value for value in worst])

    @property
    def saving(self):
        """For each report, real operations of one down-converter per channel over the bank's own
        (NaN for measured reports, which count no cost)."""
        apart = self["converter_multiplications"] + self["converter_additions"]
        return apart / (self["multiplications"] + self["additions"])

    def _rows(self):
        """Cells (title, unit, one per report); the best of a row ends in *."""
        head = [
            ("channels", "", [str(r.plan.channels) for r in self.reports]),
            ("hop", "samples", [str(r.plan.hop) for r in self.reports]),
            ("oversampling", "", [f"{r.plan.oversampling:.4g}" for r in self.reports]),
            ("taps per branch", "", [str(r.prototype.taps_per_branch) for r in self.reports]),
            ("found by", "", [r.method for r in self.reports]),
        ]
        yield from head
        for name in _SHOWN:
            definition, values = DEFINITIONS[name], self[name]
            if np.isnan(values).all():
                continue
            unit = "" if definition.unit == "s" else definition.unit
            cells = [value_text(value, definition.unit) for value in values]
            if definition.better and len(values) > 1 and not np.isnan(values).any():
                best = values.min() if definition.better == "lower" else values.max()
                if (values != best).any():
                    marks = ["*" if value == best else "" for value in values]
                    cells = [cell + mark for cell, mark in zip(cells, marks, strict=True)]
            yield definition.title, unit, cells
        saving = self.saving
        if not np.isnan(saving).all():
            cells = ["-" if np.isnan(s) else f"{s:.3g} times" for s in saving]
            yield "work saved against M converters", "", cells

    def table(self):
        """The comparison as text; the best of each row is marked with *.

        Returns
        -------
        str

        Examples
        --------
        >>> from chanbank import ChannelPlan, bank_report, boxcar_prototype, compare_reports
        >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
        >>> print(compare_reports([report]).table().splitlines()[6])
        passband ripple                  dB             2.42
        """
        rows = [("figure (worst channel)", "", list(self.labels)), *self._rows()]
        title = max(len(row[0]) for row in rows)
        unit = max(len(row[1]) for row in rows)
        width = [1 + max(len(row[2][i]) for row in rows) for i in range(len(self.labels))]
        lines = [
            f"{name.ljust(title)}  {of.ljust(unit)}  "
            + "  ".join(_aligned(cell, w) for cell, w in zip(cells, width, strict=True))
            for name, of, cells in rows
        ]
        return "\n".join(lines)

    def __str__(self):
        return self.table()

    def __repr__(self):
        return f"ReportComparison({', '.join(map(repr, self.labels))})"

    def _repr_html_(self):
        head = "".join(f"<th scope='col'>{html.escape(label)}</th>" for label in self.labels)
        parts = [f"<table><tr><th>figure (worst channel)</th><th>unit</th>{head}</tr>"]
        for name, unit, cells in self._rows():
            shown = [
                f"<b>{html.escape(c[:-1])}</b>" if c.endswith("*") else html.escape(c)
                for c in cells
            ]
            parts.append(
                f"<tr><td style='text-align:left'>{html.escape(name)}</td>"
                f"<td style='text-align:left'>{html.escape(unit)}</td>"
                + "".join(f"<td style='text-align:right'>{cell}</td>" for cell in shown)
                + "</tr>"
            )
        return "\n".join([*parts, "</table>"])

    def to_dict(self):
        """The comparison as a dict that JSON can hold: labels, figures with units, and the
        reports' own dicts.

        Returns
        -------
        dict

        Examples
        --------
        >>> from chanbank import ChannelPlan, bank_report, boxcar_prototype, compare_reports
        >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
        >>> compare_reports([report]).to_dict()["labels"]
        ['boxcar']
        """
        return {
            "labels": list(self.labels),
            "figures": {
                name: {
                    "unit": DEFINITIONS[name].unit,
                    "worst": [float(v) if np.isfinite(v) else None for v in self[name]],
                }
                for name in DEFINITIONS
            },
            "reports": [report.to_dict() for report in self.reports],
        }
