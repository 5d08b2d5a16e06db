"""A report as text and as HTML."""

import html

import numpy as np

from chanbank.metrics.figures import DEFINITIONS

__all__ = ["engineering", "html_table", "report_heading", "text_table", "value_text"]

_GROUPS = (
    ("Channel shape", "passband_ripple", "delay_spread"),
    ("Leakage", "adjacent_leakage_ratio_lower", "total_leakage"),
    ("Aliases and images", "alias_worst", "image_rejection"),
    ("Reconstruction", "distortion_ripple", "frame_ratio"),
    ("Cost", "multiplications", "state"),
)
_HEADS = ("figure", "worst", "unit", "channel", "best")
_ZERO = {-np.inf: "exactly 0", np.inf: "no leakage at all"}


def groups():
    """Pairs (heading, names) in the order of the table."""
    names = list(DEFINITIONS)
    for heading, first, last in _GROUPS:
        yield heading, names[names.index(first) : names.index(last) + 1]


def value_text(value, unit):
    """One number as a reader wants it; "-" for none."""
    if value is None or np.isnan(value):
        return "-"
    if np.isinf(value):
        return _ZERO[value]
    if unit == "dB":
        # An uncertainty or a ripple of millionths of a dB is a zero to a reader.
        return f"{value:.2f}" if abs(value) >= 0.005 else f"{value:.2g}"
    if unit == "bytes":
        return f"{value:,.0f}"
    if unit == "samples":
        return f"{value:.6g}"
    if unit == "s":
        return engineering(value, "s")
    return f"{value:.5g}"


def engineering(value, unit):
    """A value with a unit prefix: 25 kHz, 3.2 ms."""
    if value == 0:
        return f"0 {unit}"
    prefixes = {9: "G", 6: "M", 3: "k", 0: "", -3: "m", -6: "u", -9: "n"}
    power = next((p for p in prefixes if abs(value) >= 10.0**p), -9)
    return f"{value / 10.0**power:.6g} {prefixes[power]}{unit}"


def report_heading(report):
    """The lines that say what the report is about."""
    plan, prototype = report.plan, report.prototype
    how = "by formula" if report.method == "formula" else f"measured, {report.dtype}"
    kind = "real" if plan.real else "complex"
    lines = [
        f"Bank report {how}",
        f"{plan.channels} channels of {engineering(plan.spacing, 'Hz')}, hop {plan.hop} "
        f"(oversampling {plan.oversampling:.4g}), {engineering(plan.sample_rate, 'S/s')} {kind}"
        + (f", offset {plan.offset:g}" if plan.exact_offset else ""),
        "analysis " + _prototype_text(prototype),
    ]
    if report.synthesis_prototype is not None:
        lines.append(
            "synthesis "
            + _prototype_text(report.synthesis_prototype)
            + f", pair delay {report.system.pair_delay} samples"
        )
    bands, edges = report.occupied_bandwidth, report.stopband_edge
    lines.append(
        f"occupied bandwidth {_range(bands, lambda v: engineering(v, 'Hz'))} "
        f"({_range(bands / plan.spacing, lambda v: f'{v:.4g}')} spacings), "
        f"stopband from {_range(edges, lambda v: f'{v:.4g}')} spacings"
    )
    if report.method == "measured":
        lines.append(
            f"{len(report.channels)} channels tested with noise, {len(report.tones)} tones run; "
            f"rounding floor {report.floor_db:.0f} dB"
        )
    return lines


def _prototype_text(prototype):
    name = f"{prototype.label!r}, " if prototype.label else ""
    return f"prototype {name}{prototype.length} taps, {prototype.taps_per_branch} per branch"


def _range(values, show):
    low, high = float(values.min()), float(values.max())
    return show(low) if low == high else f"{show(low)} to {show(high)}"


def _row(report, name):
    """Cells of one figure, or None when it is absent throughout."""
    figure = report[name]
    definition = figure.definition
    if not figure.present or _same_as_worse(report, name):
        return None
    unit = definition.unit
    worst, best = figure.worst, figure.best
    cells = [definition.title, value_text(worst, unit), unit if unit != "s" else "", "", ""]
    if figure.values.ndim and not _alike(figure.values):
        cells[3] = str(int(report.channels[figure.worst_position]))
        cells[4] = value_text(best, unit)
    elif figure.values.ndim:
        cells[3] = "all" if not figure.absent.any() else "all others"
    if figure.uncertainty is not None:
        cells[1] += f" +- {figure.uncertainty:.1g}"
    return cells


def _same_as_worse(report, name):
    """Whether one side's figure adds nothing to the line of the worse side."""
    base = name.removesuffix("_lower").removesuffix("_upper")
    if base == name:
        return False
    sides = np.stack([report[base + side].values for side in ("_lower", "_upper")])
    both = sides[:, ~np.isnan(sides).any(axis=0)]
    return bool((np.abs(both[0] - both[1]) < 0.005).all()) if np.isfinite(both).all() else False


def _alike(values):
    """Equal in all channels but for rounding."""
    held = values[~np.isnan(values)]
    if np.isinf(held).any():
        return bool((held == held[0]).all())
    return bool(np.ptp(held) <= 1e-6 * max(1.0, np.abs(held).max()))


def _absences(report):
    """Lines (title, reason) for everything that is absent somewhere."""
    lines = []
    for name, definition in DEFINITIONS.items():
        figure = report[name]
        if not figure.absent.any():
            continue
        if not figure.present:
            lines.append((definition.title, figure.reason() or ""))
            continue
        by_reason = {}
        for position in np.flatnonzero(figure.absent):
            text = figure.reason(int(position)) or ""
            by_reason.setdefault(text, []).append(str(int(report.channels[position])))
        for text, places in by_reason.items():
            shown = ", ".join(places[:4]) + (f" and {len(places) - 4} more" * (len(places) > 4))
            lines.append((f"{definition.title}, channel {shown}", text))
    return lines


def text_table(report, *, absent=True):
    """The report for a terminal, some 80 columns wide."""
    rows = [(None, _HEADS)]
    for heading, names in groups():
        cells = [row for name in names if (row := _row(report, name)) is not None]
        if cells:
            rows.append((heading, None))
            rows += [(None, row) for row in cells]
    width = [max(len(row[i]) for _, row in rows if row) for i in range(len(_HEADS))]
    lines = report_heading(report) + [""]
    for heading, row in rows:
        if row is None:
            lines.append(heading)
            continue
        title, worst, unit, channel, best = (
            row[0].ljust(width[0]),
            row[1].rjust(width[1]),
            row[2].ljust(width[2]),
            row[3].rjust(width[3]),
            row[4].rjust(width[4]),
        )
        lines.append(f"  {title}  {worst} {unit}  {channel}  {best}".rstrip())
    if absent and (missing := _absences(report)):
        lines += ["Absent"] + [f"  {title}: {reason}" for title, reason in missing]
    if report.notes:
        lines += ["Notes"] + [f"  {note}" for note in report.notes]
    return "\n".join(lines)


def html_table(report):
    """The report as a self-contained HTML fragment."""
    head, *about = report_heading(report)
    parts = ["<div>", f"<p><b>{html.escape(head)}</b><br>"]
    parts += ["<br>".join(html.escape(line) for line in about), "</p>", "<table>"]
    parts.append("<tr>" + "".join(f"<th scope='col'>{text}</th>" for text in _HEADS) + "</tr>")
    for heading, names in groups():
        rows = [(name, row) for name in names if (row := _row(report, name)) is not None]
        if rows:
            parts.append(
                f"<tr><th colspan='{len(_HEADS)}' style='text-align:left'>{heading}</th></tr>"
            )
        for name, row in rows:
            text = html.escape(DEFINITIONS[name].text, quote=True)
            parts.append(
                f"<tr title=\"{text}\"><td style='text-align:left'>{html.escape(row[0])}</td>"
                + "".join(f"<td style='text-align:right'>{html.escape(c)}</td>" for c in row[1:])
                + "</tr>"
            )
    parts.append("</table>")
    for label, lines in (
        ("Absent", [f"{title}: {reason}" for title, reason in _absences(report)]),
        ("Notes", report.notes),
    ):
        if lines:
            items = "".join(f"<li>{html.escape(line)}</li>" for line in lines)
            parts.append(f"<details><summary>{label}</summary><ul>{items}</ul></details>")
    parts.append("</div>")
    return "\n".join(parts)
