"""One page about one bank."""

import os

from chanbank._checks import Boolean, Instance, Optional, PathLike, Text, checked, wrong_value
from chanbank._files import refuse_existing, whole_file
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.present import report_heading, value_text
from chanbank.metrics.report import BankReport
from chanbank.plots.prototype import plot_channels, plot_prototype
from chanbank.plots.report import plot_distortion, plot_error, plot_leakage
from chanbank.plots.style import INK, SHADE, style_context

__all__ = ["summary_sheet"]

_TABLE = (
    "passband_ripple", "scalloping_loss", "enbw", "bandwidth_3db", "highest_sidelobe",
    "stopband_level", "adjacent_leakage_ratio", "alternate_leakage_ratio", "adjacent_tone",
    "total_leakage", "alias_worst", "alias_mean", "image_rejection", "distortion_ripple",
    "alias_transfer_peak", "reconstruction_error", "reconstruction_error_peak",
    "synthesis_stopband", "noise_gain", "frame_ratio", "multiplications", "additions", "latency",
    "latency_seconds", "state",
)  # fmt: skip
_FORMATS = (".pdf", ".png")


@checked(
    report=Instance(BankReport),
    path=Optional(PathLike()),
    title=Text(),
    overwrite=Boolean(),
)
def summary_sheet(report, path=None, *, title="", overwrite=False):
    """Everything about one bank on one A4 page, on screen or in a file.

    The prototype's response and taps, the channel and its neighbours, the leakage matrix, levels
    over channels or (with a synthesis prototype) distortion and aliases, and the worst of every
    figure in a table.

    Parameters
    ----------
    report : BankReport
    path : path, optional
        Where to save the page, ending in .pdf or .png; written whole or not at all.
    title : str, default ""
        Heading; by default the prototype's label.
    overwrite : bool, default False
        Replace a file that exists.

    Returns
    -------
    matplotlib.figure.Figure
        Not shown, and not known to pyplot.

    Raises
    ------
    TypeError, ValueError
        Not a report; a path with another ending.
    FileExistsError
        The file exists and `overwrite` is False.
    OSError
        The file cannot be written; nothing is left behind.

    Examples
    --------
    >>> import os, tempfile
    >>> from chanbank import ChannelPlan, bank_report, summary_sheet, window_prototype
    >>> report = bank_report(ChannelPlan(16e3, 16, 12), window_prototype(16, 8, "hamming"))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     page = summary_sheet(report, os.path.join(folder, "bank.pdf"))
    ...     os.listdir(folder)
    ['bank.pdf']
    """
    ending = None
    if path is not None:
        ending = os.path.splitext(os.fspath(path))[1].lower()
        if ending not in _FORMATS:
            raise wrong_value("path", "a path that ends in .pdf or .png", path)
        refuse_existing(path, overwrite)
    from matplotlib.figure import Figure

    with style_context():
        page = Figure(figsize=(8.27, 11.69), layout="constrained")
        page.get_layout_engine().set(w_pad=0.1, h_pad=0.06)
        # A band of the page for each row, so that no legend narrows the others' pictures.
        rows = page.subfigures(5, 1, height_ratios=(0.16, 1.0, 1.0, 0.95, 1.45))
        name = title or report.prototype.label or "filter bank"
        rows[0].text(0.02, 0.35, name, fontsize=14, fontweight="bold", color=INK)
        left, right = rows[1].subplots(1, 2)
        occupied = float(report.occupied_bandwidth.max() / report.plan.spacing)
        plot_prototype(report.prototype, ax=left, plan=report.plan, occupied=occupied)
        plot_prototype(report.prototype, ax=right, view="taps")
        left, right = rows[2].subplots(1, 2)
        plot_channels(report.plan, report.prototype, ax=left)
        plot_leakage(report, ax=right)
        (plot_error if report.system is None else plot_distortion)(report, ax=rows[3].subplots())
        _write_table(rows[4].subplots(), report)
        _settle(page, rows)
    if path is not None:
        kind = ending[1:]
        # Neither file carries the time it was made: the same report gives the same bytes.
        metadata = {"CreationDate": None} if kind == "pdf" else {"Software": None}
        with style_context(), whole_file(path, overwrite=overwrite) as file:
            page.savefig(file, format=kind, metadata=metadata)
    return page


def _settle(page, rows):
    """Fix the layout, in round numbers: its solver's last digits differ from call to call."""
    page.draw_without_rendering()
    page.set_layout_engine("none")
    for row in rows:
        box = row.bbox_relative
        box.p0, box.p1 = box.p0.round(6), box.p1.round(6)
    for ax in page.axes:
        ax.set_position([round(number, 6) for number in ax.get_position().bounds])


def _write_table(ax, report):
    """The heading's lines and the worst of every figure held, in two columns of text."""
    ax.set_axis_off()
    look = {"fontsize": 7.5, "va": "top"}
    lines = report_heading(report)
    for number, text in enumerate(lines):
        ax.text(0.0, 1.0 - 0.05 * number, text, color=INK if number else SHADE, **look)
    held = [name for name in _TABLE if report[name].present]
    rows = -(-len(held) // 2)
    top = 1.0 - 0.05 * len(lines) - 0.05
    step = min(0.055, top / max(1, rows))
    for number, name in enumerate(held):
        figure, definition = report[name], DEFINITIONS[name]
        left = 0.0 if number < rows else 0.54
        height = top - step * (number % rows)
        unit = "" if definition.unit == "s" else definition.unit
        value = value_text(figure.worst, definition.unit)
        ax.text(left, height, definition.title, color=INK, **look)
        ax.text(left + 0.36, height, value, color=INK, ha="right", **look)
        ax.text(left + 0.37, height, unit, color=SHADE, **look)
