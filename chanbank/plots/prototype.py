"""Pictures of one prototype and of the channels it makes."""

import numpy as np

from chanbank._checks import Choice, Instance, Integer, Optional, Real, checked
from chanbank.metrics.bands import same_channels
from chanbank.plan import ChannelPlan
from chanbank.plots.style import AX, PALE, SHADE, hertz_axis, line, new_axes, tidy
from chanbank.prototype.prototype import Prototype

__all__ = ["plot_channels", "plot_prototype"]

_FLOOR_DB = -200.0
_PER_LOBE = 24  # points of a curve for each lobe of the response


@checked(
    prototype=Instance(Prototype),
    ax=AX,
    view=Choice("response", "taps"),
    plan=Optional(Instance(ChannelPlan)),
    occupied=Real(above=0),
    spacings=Optional(Real(above=0)),
)
def plot_prototype(prototype, *, ax=None, view="response", plan=None, occupied=0.8, spacings=None):
    """Draw a prototype: its response with the bands marked, or its taps branch row by branch row.

    The response is 20 log10 of abs(H(f) / H(0)), H(f) = sum_i h[i] exp(-2j pi f i / M).

    Parameters
    ----------
    prototype : Prototype
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    view : {"response", "taps"}, default "response"
        The response in dB against frequency in channel spacings, or h[i] against time in channel
        periods (M samples), each row of M taps, one of every branch, set apart.
    plan : ChannelPlan, optional
        Also marks where aliases of the wanted band begin, at M/D - occupied/2 spacings.
    occupied : float, default 0.8
        Two-sided occupied bandwidth in channel spacings, above 0: the wanted band and its
        neighbours are shaded.
    spacings : float, optional
        How far to draw the response; by default 4 spacings, or half the sample rate.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a plan of another number of channels.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> from chanbank import kaiser_prototype, plot_prototype
    >>> h = kaiser_prototype(64, stopband_db=80, passband=0.4, stopband=0.6)
    >>> ax = plot_prototype(h)
    >>> ax.get_xlabel()
    'frequency (channel spacings)'
    """
    if plan is not None:
        same_channels("prototype", plan, prototype)
    ax = new_axes(ax)
    name = prototype.label or "prototype"
    head = f"{name}: {prototype.length} taps, {prototype.taps_per_branch} per branch"
    if view == "taps":
        return _draw_taps(ax, prototype)
    reach = min(4.0, prototype.channels / 2) if spacings is None else spacings
    grid = np.linspace(0, reach, 1 + int(np.ceil(_PER_LOBE * reach * prototype.taps_per_branch)))
    level = _level(prototype, grid)
    _shade_bands(ax, occupied, int(np.floor(reach + occupied / 2)), reach)
    ax.plot(grid, level, **line(0))
    ax.axhline(-6.0206, color=SHADE, linewidth=0.6)
    ax.annotate(
        "-6 dB", (0, -6.0206), xytext=(3, -9), textcoords="offset points", fontsize=7, color=SHADE
    )
    if plan is not None:
        edge = plan.oversampling - occupied / 2
        if edge < reach:
            ax.axvline(edge, label="aliases reach the wanted band", **line(2))
    ax.set_xlim(0, reach)
    ax.set_ylim(_floor(level), 5)
    return tidy(
        ax,
        title=head,
        x="frequency (channel spacings)",
        y="level (dB, channel centre 0)",
        legend="upper right",
    )


def _draw_taps(ax, prototype):
    channels = prototype.channels
    time = np.arange(prototype.length) / channels
    # In units of 1/M: a prototype with sum(h) = 1 then peaks near 1 at any number of channels.
    for row in range(0, prototype.taps_per_branch, 2):
        ax.axvspan(row, row + 1, color=PALE, alpha=0.35, linewidth=0)
    ax.axhline(0.0, color=SHADE, linewidth=0.6)
    ax.plot(time, prototype.taps * channels, **line(0))
    ax.axvline(prototype.delay / channels, label="group delay", **line(1))
    ax.set_xlim(0, prototype.taps_per_branch)
    head = "impulse response, in rows of M taps"
    return tidy(ax, title=head, x="time (channel periods of M samples)", y="tap value (1/M)")


def _level(prototype, grid):
    with np.errstate(divide="ignore"):
        return 20 * np.log10(np.abs(prototype.response(grid)) / abs(prototype.taps.sum()))


def _envelope(offset, level):
    """The level with the lobes beyond the main one replaced by the line through their tops."""
    result = level.copy()
    for side in (-1, 1):
        mine = np.flatnonzero(side * offset >= 0)
        mine = mine[np.argsort(side * offset[mine])]
        held = level[mine]
        inner = held[1:-1]
        lows = 1 + np.flatnonzero((inner <= held[:-2]) & (inner < held[2:]) & (inner < -6.0))
        tops = 1 + np.flatnonzero((inner >= held[:-2]) & (inner > held[2:]))
        tops = tops[tops > lows[0]] if len(lows) else tops[:0]
        if len(tops):
            # Nearer than the first of them: its height, below the skirt of the main lobe.
            result[mine] = np.maximum(held, np.interp(np.arange(len(held)), tops, held[tops]))
    return result


def _floor(level):
    held = level[np.isfinite(level)]
    # Nulls are deep and narrow: the picture is about what lies between them.
    typical = np.percentile(held, 8) if len(held) else -60.0
    return float(np.clip(10 * np.floor((typical - 12) / 10), _FLOOR_DB, -30.0))


def _shade_bands(ax, occupied, count, reach):
    for number in range(count + 1):
        low, high = max(0.0, number - occupied / 2), min(reach, number + occupied / 2)
        label = {0: "wanted band", 1: "neighbours' bands"}.get(number)
        look = {"color": PALE, "alpha": 0.9 if number == 0 else 0.35, "linewidth": 0}
        if high > low:
            ax.axvspan(low, high, label=label, **look)


@checked(
    plan=Instance(ChannelPlan),
    prototype=Instance(Prototype),
    ax=AX,
    channel=Optional(Integer(0)),
    neighbours=Integer(0, 16),
)
def plot_channels(plan, prototype, *, ax=None, channel=None, neighbours=2):
    """Draw a channel and its neighbours over each other, on the axis of absolute frequency.

    Channel k passes 20 log10 of abs(H(f - f_k) / H(0)); beyond the main lobe the line through the
    tops of the lobes is drawn, so that five stopbands over each other stay readable.

    Parameters
    ----------
    plan : ChannelPlan
    prototype : Prototype
        For the plan's number of channels.
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    channel : int, optional
        Output channel in the middle; by default the one nearest to the middle of the band.
    neighbours : int, default 2
        Channels drawn on either side, 0 to 16.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a prototype for another number of channels.

    Examples
    --------
    >>> import matplotlib
    >>> matplotlib.use("Agg")
    >>> from chanbank import ChannelPlan, kaiser_prototype, plot_channels
    >>> h = kaiser_prototype(64, stopband_db=80, passband=0.4, stopband=0.6)
    >>> ax = plot_channels(ChannelPlan(1.6e6, 64, 48, center_frequency=158e6), h)
    >>> len(ax.lines)
    5
    """
    same_channels("prototype", plan, prototype)
    count = plan.output_channels
    order = np.argsort(plan.frequencies)
    if channel is None:
        place = count // 2
    elif channel >= count:
        raise ValueError(f"channel must be below {count}, the number of channels; got {channel}")
    else:
        place = int(np.flatnonzero(order == channel)[0])
    ax = new_axes(ax)
    chosen = order[max(0, place - neighbours) : place + neighbours + 1]
    middle = order[place]
    centre = plan.frequencies[middle]
    reach = (neighbours + 1.0) * plan.spacing
    # Two spacings more either side, so that the envelopes reach the ends of the picture.
    wide = reach + 2 * plan.spacing
    size = 1 + int(np.ceil(2 * (neighbours + 3) * _PER_LOBE * prototype.taps_per_branch))
    grid = centre + np.linspace(-wide, wide, size)
    floor = -30.0
    for k in sorted(chosen, key=lambda k: (k == middle, abs(plan.frequencies[k] - centre))):
        offset = (grid - plan.frequencies[k]) / plan.spacing
        level = _envelope(offset, _level(prototype, offset))
        floor = min(floor, _floor(level))
        away = round((plan.frequencies[k] - centre) / plan.spacing)
        look = line(0, bold=True) if k == middle else line(1 + (abs(away) - 1) % 5)
        label = {True: f"channel {k}"}.get(k == middle)
        if away > 0:
            label = f"{away} away"
        ax.plot(grid, level, label=label, **look)
    ax.set_xlim(centre - reach, centre + reach)
    ax.set_ylim(floor, 5)
    hertz_axis(ax.xaxis, "frequency")
    return tidy(
        ax,
        title=f"channel {middle} of {count} and its neighbours",
        y="level (dB, channel centre 0)",
        legend="best",
    )
