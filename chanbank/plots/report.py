"""Pictures of a report: the leakage matrix, transfers over frequency, figures over channels."""

import numpy as np

from chanbank._checks import Instance, OwnCheck, checked, wrong_type, wrong_value
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.report import BankReport
from chanbank.plots.style import AX, MAP, hertz_axis, level_limits, line, new_axes, tidy

__all__ = ["plot_distortion", "plot_error", "plot_leakage"]

_MOST_ROWS = 128
_FIGURES = ("total_leakage", "alias_worst", "adjacent_leakage_ratio", "image_rejection")


@checked(
    report=Instance(BankReport),
    ax=AX,
    channels=OwnCheck(
        "None or a non-empty sequence of output channels", (3, TypeError), ([-1], ValueError)
    ),
)
def plot_leakage(report, *, ax=None, channels=None):
    """Draw the leakage matrix: what reaches each output from the signal of each channel.

    Row k, column j: 10 log10 of P[k, j] / P[k, k], the power of channel j's signal in output k
    over the power of channel k's own.

    Parameters
    ----------
    report : BankReport
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    channels : sequence of int, optional
        Channels to show, in this order; by default all (the first 128 of more), or those tested
        by a measured report.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        Not a report; channels that do not exist.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> from chanbank import ChannelPlan, bank_report, plot_leakage, window_prototype
    >>> report = bank_report(ChannelPlan(16e3, 16, 12), window_prototype(16, 8, "hamming"))
    >>> plot_leakage(report).get_xlabel()
    'signal in channel'
    """
    count = report.plan.output_channels
    outputs, inputs = report.channels, np.arange(count)
    if channels is not None:
        outputs = inputs = _chosen(channels, report)
    outputs, inputs = outputs[:_MOST_ROWS], inputs[:_MOST_ROWS]
    level = report.leakage.matrix_db(outputs, inputs)
    ax = new_axes(ax, (5.2, 4.2))
    shown = level[np.isfinite(level)]
    off = np.sort(shown[shown < -0.01])
    low = max(-160.0, 10 * np.floor(float(off[len(off) // 50]) / 10)) if len(off) else -10.0
    image = ax.imshow(
        np.clip(np.nan_to_num(level, nan=low, neginf=low), low, 0.0),
        cmap=MAP,
        vmin=low,
        vmax=0.0,
        origin="lower",
        aspect="auto",
        interpolation="nearest",
    )
    for axis, labels in ((ax.xaxis, inputs), (ax.yaxis, outputs)):
        ticks = np.unique(np.linspace(0, len(labels) - 1, min(len(labels), 9)).round().astype(int))
        axis.set_ticks(ticks, [str(int(labels[t])) for t in ticks])
    bar = ax.figure.colorbar(image, ax=ax, extend="min")
    bar.set_label("level (dB, own signal 0)")
    tidy(ax, title="leakage between channels", x="signal in channel", y="output", legend=None)
    ax.grid(False)
    return ax


def _chosen(channels, report):
    accepted = "a non-empty sequence of channels that the report holds"
    if isinstance(channels, (str, bytes)) or not hasattr(channels, "__iter__"):
        raise wrong_type("channels", accepted, channels)
    chosen = np.asarray(list(channels))
    if (
        chosen.dtype.kind not in "iu"
        or not len(chosen)
        or not np.isin(chosen, report.channels).all()
    ):
        raise wrong_value("channels", accepted, channels)
    return chosen


@checked(report=Instance(BankReport), ax=AX)
def plot_distortion(report, *, ax=None):
    """Draw distortion, alias transfers and error of the pair over one channel spacing.

    With T_l the transfers from frequency f to f + l M/D spacings: abs(T_0)^2, abs(T_0 - 1)^2, the
    sum and the largest of abs(T_l)^2 for l != 0, and the error abs(T_0 - 1)^2 + sum, all in dB.
    They repeat with every channel.

    Parameters
    ----------
    report : BankReport
        With a synthesis prototype.
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        Not a report, or one without a synthesis prototype.

    References
    ----------
    P. P. Vaidyanathan, Multirate Systems and Filter Banks, 1993, ch. 5.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> from chanbank import ChannelPlan, bank_report, dual_prototype, plot_distortion
    >>> from chanbank import window_prototype
    >>> plan, h = ChannelPlan(16e3, 16, 8), window_prototype(16, 4, "hamming")
    >>> ax = plot_distortion(bank_report(plan, h, dual_prototype(plan, h)))
    >>> ax.get_ylabel()
    'level (dB, signal 0)'
    """
    system = report.system
    if system is None:
        raise ValueError(
            "report must be made with a synthesis prototype to draw distortion and aliases; "
            "bank_report(plan, prototype, synthesis_prototype) makes one"
        )
    ax = new_axes(ax)
    # From half a spacing below a centre to half a spacing above.
    order = np.argsort((system.frequencies + 0.5) % 1.0)
    frequency = (system.frequencies[order] + 0.5) % 1.0 - 0.5
    curves = {
        "distortion |T0|": np.abs(system.distortion) ** 2,
        "distortion |T0 - 1|": np.abs(system.distortion - 1) ** 2,
        "aliases, sum": system.alias_sum,
        "largest alias": system.alias_peak,
    }
    levels = []
    for number, (label, power) in enumerate(curves.items()):
        with np.errstate(divide="ignore"):
            level = 10 * np.log10(power[order])
        if np.isfinite(level).any():
            levels.append(level)
            ax.plot(frequency, level, label=label, **line(number, bold=number == 0))
    white = report.reconstruction_error
    if white is not None and np.isfinite(white):
        levels.append([white])
        ax.axhline(white, label="error, white input", **line(4))
    ax.set_xlim(-0.5, 0.5)
    ax.set_ylim(*level_limits(levels))
    tidy(
        ax,
        title=f"through both banks, pair delay {system.pair_delay} samples",
        x="frequency from a channel's centre (channel spacings)",
        y="level (dB, signal 0)",
        legend="beside",
    )
    return ax


@checked(
    report=Instance(BankReport),
    ax=AX,
    figures=OwnCheck(
        "names of figures of the channels, in dB", (3, TypeError), (["speed"], ValueError)
    ),
)
def plot_error(report, *, ax=None, figures=_FIGURES):
    """Draw figures of the channels over their centre frequencies, all as levels in dB.

    A ratio or rejection of R dB is drawn at -R dB: the lower, the better, for every line.

    Parameters
    ----------
    report : BankReport
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    figures : sequence of str, default total leakage, worst alias, adjacent leakage, image
        Names of figures of the channels in dB. Those the report does not hold are left out.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        Not a report; a name that is not a figure of the channels in dB; none of them held.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> from chanbank import ChannelPlan, bank_report, plot_error, window_prototype
    >>> plan = ChannelPlan(16e3, 16, 12, real=True)
    >>> ax = plot_error(bank_report(plan, window_prototype(16, 8, "hamming")))
    >>> len(ax.lines)
    4
    """
    names = _figure_names(figures)
    held = [name for name in names if report[name].present]
    if not held:
        reasons = "; ".join(f"{name}: {report[name].reason()}" for name in names)
        raise ValueError(f"figures must name some that the report holds; absent: {reasons}")
    ax = new_axes(ax)
    frequency = report.plan.frequencies[report.channels]
    order = np.argsort(frequency)
    levels = []
    for number, name in enumerate(held):
        definition, values = DEFINITIONS[name], report[name].values[order]
        level = -values if definition.better == "higher" else values
        levels.append(level)
        look = line(number)
        if len(order) <= 64:
            look |= {"marker": "osv^D*"[number % 6], "markersize": 3.5}
        ax.plot(
            frequency[order],
            np.where(np.isfinite(level), level, np.nan),
            label=definition.title,
            **look,
        )
    white = report.reconstruction_error
    if white is not None and np.isfinite(white):
        levels.append([white])
        ax.axhline(white, label="reconstruction error", **line(len(held)))
    ax.set_ylim(*level_limits(levels, top=0.0))
    hertz_axis(ax.xaxis, "channel centre")
    tidy(ax, title="levels over channels (lower is better)", y="level (dB)", legend="beside")
    return ax


def _figure_names(figures):
    accepted = "a non-empty sequence of names of figures of the channels in dB"
    if isinstance(figures, str) or not hasattr(figures, "__iter__"):
        raise wrong_type("figures", accepted, figures)
    names = list(figures)
    known = [n for n, d in DEFINITIONS.items() if d.scope == "channel" and d.unit == "dB"]
    if not names or any(name not in known for name in names):
        raise wrong_value("figures", f"some of {', '.join(known)}", figures)
    return names
