"""What a search found: cost against latency, every candidate and the choice."""

import numpy as np

from chanbank._checks import Boolean, Choice, Instance, checked
from chanbank.plots.style import AX, FAINT, INK, SHADE, new_axes, tidy
from chanbank.search.result import DesignSearch

__all__ = ["plot_tradeoff"]

_AXES = {
    "cost": ("cost (real operations per input sample)", 1.0),
    "latency": ("latency (ms)", 1e3),
    "memory": ("memory (KiB)", 1 / 1024),
    "margin": ("margin to the limits (dB)", 1.0),
}
_MARKS = "osD^vPX*"


@checked(
    search=Instance(DesignSearch),
    ax=AX,
    x=Choice(*_AXES),
    y=Choice(*_AXES),
    names=Boolean(),
)
def plot_tradeoff(search, *, ax=None, x="cost", y="latency", names=True):
    """Draw all candidates of a search: what each costs, which pass, and which were chosen.

    Filled marks passed, hollow ones failed a limit; the shape says how the prototype was
    designed. The designs that no other beats in every respect are ringed; those that no other
    beats in the two respects drawn are joined.

    Parameters
    ----------
    search : DesignSearch
        From `find_designs`.
    ax : matplotlib.axes.Axes, optional
        Where to draw; by default Axes of a new figure.
    x, y : {"cost", "latency", "memory", "margin"}
        What to draw against what; by default latency over cost.
    names : bool, default True
        Write M, D and P beside the designs that are joined.

    Returns
    -------
    matplotlib.axes.Axes

    Raises
    ------
    TypeError, ValueError
        Not the result of a search, or one without any candidate; an unknown axis.

    Examples
    --------
    See `find_designs`.
    """
    held = search.tradeoff()
    if not len(held["cost"]):
        raise ValueError(f"search must have tried some designs; it says: {search.reason}")
    ax = new_axes(ax, (6.4, 4.0))
    across, up = (held[key] * _AXES[key][1] for key in (x, y))
    methods = sorted(set(held["method"]))
    of = np.array([methods.index(method) for method in held["method"]])
    for number, method in enumerate(methods):
        mark = _MARKS[number % len(_MARKS)]
        for passed, face, edge in ((True, SHADE, SHADE), (False, "none", FAINT)):
            mine = (of == number) & (held["passed"] == passed)
            ax.scatter(across[mine], up[mine], s=26, marker=mark, facecolors=face, edgecolors=edge,
                       linewidths=0.9, zorder=3 if passed else 2)  # fmt: skip
        ax.scatter([], [], s=26, marker=mark, facecolors=SHADE, edgecolors=SHADE, label=method)
    ax.scatter([], [], s=26, marker="o", facecolors="none", edgecolors=FAINT, label="fails a limit")
    chosen = np.flatnonzero(held["chosen"])
    front = _front(chosen, *(-held[key] if key == "margin" else held[key] for key in (x, y)))
    if len(chosen):
        ax.plot(across[front], up[front], color=INK, linewidth=0.8, linestyle=(0, (2, 2)), zorder=1)
        ax.scatter(across[chosen], up[chosen], s=90, facecolors="none", edgecolors=INK,
                   linewidths=1.3, zorder=4, label="not beaten")  # fmt: skip
    # Where margin rises with cost, the room beside a mark is on its left.
    left = "margin" in (x, y)
    if names:
        ax.margins(x=0.3 if left else 0.1)
        for place in front:
            plan = search.tried[place].plan
            text = f"M {plan.channels}, D {plan.hop}, P {search.tried[place].taps_per_branch}"
            ax.annotate(text, (across[place], up[place]), xytext=(-8 if left else 7, 4),
                        textcoords="offset points", ha="right" if left else "left",
                        fontsize=7, color=INK)  # fmt: skip
    for axis, key, values in (("x", x, across), ("y", y, up)):
        # Costs of designs differ by factors: equal factors, equal distances.
        if key != "margin" and values.min() > 0 and values.max() > 4 * values.min():
            getattr(ax, f"set_{axis}scale")("log")
    count, good = len(across), int(held["passed"].sum())
    title = f"{count} designs tried, {good} keep every limit"
    return tidy(ax, title=title, x=_AXES[x][0], y=_AXES[y][0], legend="beside")


def _front(chosen, first, second):
    """Those of the chosen that no other beats in both respects (less is better), in order."""
    front = []
    for place in chosen[np.lexsort((second[chosen], first[chosen]))]:
        if not front or second[place] < second[front[-1]]:
            front.append(place)
    return np.array(front, int)
