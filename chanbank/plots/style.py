"""The one look of every picture: ink, line patterns, shades, and how axes are made.

Colours are those of M. Okabe and K. Ito, "Color Universal Design" (2008), told apart by readers
with any colour vision; lines also differ in pattern and lightness, so that grey print and
photocopies keep them apart. Maps use cividis (J. R. Nunez, C. R. Anderton and R. S. Renslow, PLoS
ONE 13(7), 2018), whose lightness rises evenly.
"""

import numpy as np

from chanbank._checks import OwnCheck

__all__ = [
    "AX",
    "FAINT",
    "INK",
    "MAP",
    "PALE",
    "RC",
    "SHADE",
    "hertz_axis",
    "level_limits",
    "line",
    "new_axes",
    "style_context",
    "tidy",
]

INK = "#1a1a1a"
SHADE = "#5f5f5f"
FAINT = "#9a9a9a"
PALE = "#c9c9c9"
MAP = "cividis"
_COLOURS = (INK, "#0072b2", "#d55e00", "#009e73", "#cc79a7", "#e69f00")
_PATTERNS = ("-", (0, (6, 2)), (0, (2, 1.5)), (0, (7, 1.5, 1.5, 1.5)), (0, (1, 1)), (0, (10, 3)))

RC = {
    "font.size": 9.0,
    "axes.titlesize": 10.0,
    "axes.titlelocation": "left",
    "axes.labelsize": 9.0,
    "axes.edgecolor": SHADE,
    "axes.labelcolor": INK,
    "axes.linewidth": 0.7,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.color": SHADE,
    "ytick.color": SHADE,
    "xtick.labelcolor": INK,
    "ytick.labelcolor": INK,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "legend.fontsize": 8.0,
    "legend.frameon": False,
    "figure.dpi": 110.0,
    "savefig.dpi": 150.0,
    "pdf.fonttype": 42,
}

# The rule of every `ax` parameter.
AX = OwnCheck("None or Matplotlib Axes", (3, TypeError), ("axes", TypeError))


def style_context():
    """A context in which new figures take this look."""
    import matplotlib

    return matplotlib.rc_context(RC)


def new_axes(ax, size=(6.4, 3.6)):
    """The Axes given, or one of a new figure of this look."""
    if ax is not None:
        if not hasattr(ax, "plot") or not hasattr(ax, "figure"):
            raise TypeError(f"ax must be {AX.accepted}; got {ax!r} ({type(ax).__name__})")
        return ax
    import matplotlib.pyplot as plt

    with style_context():
        ax = plt.subplots(figsize=size, layout="constrained")[1]
        interactive = plt.isinteractive()
    # A notebook's backend turns this on with the first figure, and the context would turn it off
    # again: the reader's own figures would no longer show.
    plt.matplotlib.interactive(interactive)
    return ax


def line(index, *, bold=False):
    """Colour, pattern and width of the index-th line of a picture."""
    return {
        "color": _COLOURS[index % len(_COLOURS)],
        "linestyle": _PATTERNS[index % len(_PATTERNS)],
        "linewidth": 1.8 if bold else 1.1,
    }


def tidy(ax, *, title, x="", y, legend="best"):
    """Labels, a faint grid behind, and the legend where there is something to tell apart.

    `legend` is a place as Matplotlib names it, "beside" for right of the Axes, or None.
    """
    ax.set_title(title, loc="left", fontsize=10)
    if x:
        ax.set_xlabel(x)
    ax.set_ylabel(y)
    ax.grid(True, color=PALE, linewidth=0.4, alpha=0.7)
    ax.set_axisbelow(True)
    if legend and ax.get_legend_handles_labels()[0]:
        look = {"fontsize": 7.5, "handlelength": 3.2, "frameon": False}
        if legend == "beside":
            ax.legend(loc="center left", bbox_to_anchor=(1.0, 0.5), **look)
        else:
            look |= {"frameon": True, "edgecolor": "none", "framealpha": 0.85}
            ax.legend(loc=legend, **look)
    return ax


def hertz_axis(axis, label, *, ticks=5):
    """Plain numbers in Hz, kHz, MHz or GHz on an axis of frequencies, with the unit in its label.

    The unit follows the larger limit of the axis: call it once the limits stand.
    """
    from matplotlib.ticker import FuncFormatter, MaxNLocator

    largest = max(abs(edge) for edge in axis.get_view_interval())
    units = ((1e9, "GHz"), (1e6, "MHz"), (1e3, "kHz"))
    scale, unit = next(((s, u) for s, u in units if largest >= s), (1.0, "Hz"))
    axis.set_major_locator(MaxNLocator(ticks))
    axis.set_major_formatter(FuncFormatter(lambda value, place: f"{value / scale:.10g}"))
    axis.set_label_text(f"{label} ({unit})")


def level_limits(levels, *, top=5.0, deepest=-320.0):
    """Limits of a dB axis that show all levels but exact zeros."""
    held = np.concatenate([np.ravel(level) for level in levels])
    held = held[np.isfinite(held)]
    low = float(held.min()) if len(held) else -10.0
    high = float(held.max()) if len(held) else 0.0
    return max(deepest, 10 * np.floor((low - 3) / 10)), max(top, 10 * np.ceil((high + 1) / 10))
