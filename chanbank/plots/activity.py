"""When each channel is busy: a ribbon for each channel, as wide as it is loud."""

import numpy as np

from chanbank._checks import Instance, Integer, Optional, Real, checked
from chanbank.analysis.activity import Activity
from chanbank.plots.style import AX, INK, PALE, SHADE, new_axes, tidy

__all__ = ["plot_activity"]


@checked(
    activity=Instance(Activity),
    ax=AX,
    threshold_db=Real(unit="decibels"),
    most=Integer(1, 256),
    span_db=Optional(Real(above=0)),
)
def plot_activity(activity, *, ax=None, threshold_db=10.0, most=32, span_db=None):
    """Draw power over time as ribbons: each channel a lane, its ribbon as wide as it is loud.

    The dark ribbon is the mean power of a block, 10 log10 P, above the noise estimate; the pale
    one around it the block's strongest burst. A silent channel is a thin line. A ribbon that
    fills its lane is `span_db` above the noise.

    Parameters
    ----------
    activity : Activity
        From `measure_activity`.
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    threshold_db : float, default 10.0
        Which channels count as active, as in `Activity.active`.
    most : int, default 32
        Lanes drawn at most, 1 to 256: all channels where they fit, else the active ones, else the
        active ones that are busy longest. The title says which.
    span_db : float, optional
        dB above the noise of a full lane; by default what the strongest burst drawn needs.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range.

    Examples
    --------
    >>> import matplotlib, numpy as np
    >>> matplotlib.use("Agg")
    >>> import chanbank as cb
    >>> rng = np.random.default_rng(3)
    >>> x = rng.standard_normal(8000) + 1j * rng.standard_normal(8000)
    >>> x[3000:5000] += 8 * np.exp(2j * np.pi * 0.25 * np.arange(2000))
    >>> import tempfile, os
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "quay")
    ...     _ = cb.write_sigmf(path, (x / 16).astype("complex64"), sample_rate=8e3)
    ...     bank = cb.AnalysisBank(cb.ChannelPlan(8e3, 8, 6), cb.window_prototype(8, 6, "hann"))
    ...     activity = cb.measure_activity(cb.open_recording(path), bank)
    >>> cb.plot_activity(activity).get_xlabel()
    'time (s)'
    """
    chosen, head = _lanes(activity, threshold_db, most)
    ax = new_axes(ax, (6.8, 1.3 + 0.18 * len(chosen)))
    noise = activity.noise_power_db
    mean = _above(activity.power[:, chosen], noise)
    peak = np.maximum(mean, _above(activity.peak[:, chosen], noise))
    span = span_db or max(10.0, float(np.ceil(peak.max() / 10) * 10))
    edges, take = _edges(activity)
    for lane in range(len(chosen)):
        ax.axhline(lane, color=PALE, linewidth=0.6, zorder=1)
        for level, colour, order in ((peak, PALE, 2), (mean, INK, 3)):
            half = 0.46 * np.clip(np.append(level[:, lane], 0.0)[take] / span, 0.0, 1.0)
            ax.fill_between(
                edges, lane - half, lane + half, color=colour, linewidth=0, zorder=order
            )
    step = max(1, -(-len(chosen) // 24))
    ticks = np.arange(0, len(chosen), step)
    labels = [_megahertz(activity.frequencies[chosen[t]], activity) for t in ticks]
    ax.set_yticks(ticks, labels)
    ax.set_xlim(edges[0], edges[-1])
    ax.set_ylim(-0.8, len(chosen) - 0.2)
    unit = "MHz" if _in_megahertz(activity) else "kHz"
    tidy(ax, title=head, x="time (s)", y=f"channel centre ({unit})", legend=None)
    ax.grid(False)
    # Below the axis, where neither the title nor the ribbons are.
    ax.annotate(
        f"full lane: {span:g} dB above the noise\ndark: mean, pale: strongest burst",
        (1.0, 0.0),
        xycoords="axes fraction",
        xytext=(0, -19),
        textcoords="offset points",
        ha="right",
        va="top",
        fontsize=7,
        color=SHADE,
    )
    return ax


def _lanes(activity, threshold_db, most):
    """Which channels to draw, from the lowest frequency up, and the title that says so."""
    count = len(activity.channels)
    chosen = np.arange(count)
    head = f"activity of {count} channels"
    if count > most:
        active = np.flatnonzero(np.isin(activity.channels, activity.active(threshold_db)))
        chosen, head = active, f"the {len(active)} active of {count} channels"
        if not len(active):
            chosen = np.argsort(activity.peak_power_db)[::-1][:most]
            head = f"the {most} loudest of {count} channels, none active"
        elif len(active) > most:
            busy = np.argsort(activity.duty(threshold_db)[active], kind="stable")[::-1]
            chosen = active[busy[:most]]
            head = f"the {most} busiest of {len(active)} active channels ({count} in all)"
    return chosen[np.argsort(activity.frequencies[chosen], kind="stable")], head


def _above(power, noise_db):
    """dB above the noise; 0 within a dB of it, and where there is no power or no estimate."""
    with np.errstate(divide="ignore", invalid="ignore"):
        level = 10 * np.log10(power) - noise_db
    return np.where(np.isfinite(level) & (level > 1.0), level, 0.0)


def _edges(activity):
    """Corners of the ribbons in time, and the block each belongs to (-1 for a gap)."""
    starts = activity.times
    stops = starts + activity.frames / activity.channel_rate
    edges, take = [], []
    for block, (start, stop) in enumerate(zip(starts, stops, strict=True)):
        if edges and start > edges[-1] + 0.5 / activity.channel_rate:
            edges += [edges[-1], start]
            take += [-1, -1]
        edges += [start, stop]
        take += [block, block]
    return np.array(edges), np.array(take)


def _in_megahertz(activity):
    return float(np.abs(activity.frequencies).max()) >= 1e6


def _megahertz(frequency, activity):
    scale, digits = (1e6, 4) if _in_megahertz(activity) else (1e3, 2)
    return f"{frequency / scale:.{digits}f}"
