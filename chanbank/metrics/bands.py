"""What figures are about: occupied bands, neighbours and mirror images of a plan's channels."""

import numpy as np

from chanbank._checks import OwnCheck, wrong_type, wrong_value
from chanbank.metrics.figures import DEFINITIONS, Figure

__all__ = [
    "NULL",
    "OCCUPIED",
    "UNMIRRORED",
    "neighbours",
    "occupied_bands",
    "own_mirrors",
    "same_channels",
    "worse_of",
]

# Each distinct bandwidth costs one pass over the prototype.
_MOST_WIDTHS = 64

NULL = "T_0 has a null, where a group delay has no meaning"
UNMIRRORED = "the channels of a real plan mirror each other only at offsets of k/2"

OCCUPIED = OwnCheck(
    "None, a bandwidth in hertz, or one bandwidth for each output channel",
    ("wide", TypeError),
    (0.0, ValueError),
    (float("nan"), ValueError),
    (True, TypeError),
)


def same_channels(name, plan, prototype):
    """Refuse a prototype for another number of channels than the plan's."""
    if prototype.channels != plan.channels:
        raise ValueError(
            f"{name} and plan must have the same number of channels; got a prototype for "
            f"{prototype.channels} and a plan of {plan.channels}"
        )


def occupied_bands(plan, given):
    """The occupied bandwidth in hertz of each output channel."""
    count = plan.output_channels
    if given is None:
        return np.full(count, 0.8 * plan.spacing)
    accepted = (
        f"a bandwidth in hertz, or one for each of the {count} output channels, above 0 and at "
        f"most the channel rate, {plan.channel_rate:.12g} Hz"
    )
    try:
        array = np.asarray(given)
    except ValueError:
        raise wrong_value("occupied_bandwidth", accepted, given) from None
    if array.dtype.kind not in "iuf":
        raise wrong_type("occupied_bandwidth", accepted, given)
    array = array.astype(float)
    inside = (array > 0) & (array <= plan.channel_rate * (1 + 1e-12))
    if array.shape not in ((), (count,)) or not inside.all():
        raise wrong_value("occupied_bandwidth", accepted, given)
    if len(np.unique(array)) > _MOST_WIDTHS:
        raise ValueError(
            f"occupied_bandwidth must hold at most {_MOST_WIDTHS} different bandwidths; "
            f"got {len(np.unique(array))}"
        )
    return np.broadcast_to(array, (count,)).copy()


def neighbours(plan, step):
    """Positions of the channels `step` above each output channel; -1 with a reason where none."""
    count = plan.output_channels
    here = np.arange(count)
    if not plan.real:
        if step % plan.channels == 0:
            return np.full(count, -1), f"with {plan.channels} channels that is the channel itself"
        return (here + step) % plan.channels, ""
    there = here + step
    reason = "no such channel: beyond the band of real samples there is only its mirror image"
    return np.where((there >= 0) & (there < count), there, -1), reason


def own_mirrors(plan):
    """True for each channel of a real plan that is its own mirror image."""
    twice = (2 * (plan.dft_index + plan.exact_offset)) % plan.channels
    return np.array(twice == 0, bool)


def worse_of(name, found):
    """The worse of the two sides; absent only where both are."""
    lower, upper = found[name + "_lower"], found[name + "_upper"]
    pick = np.fmin if DEFINITIONS[name].better == "higher" else np.fmax
    values = pick(lower.values, upper.values)
    reasons = {int(k): lower.reason(int(k)) for k in np.flatnonzero(np.isnan(values))}
    if len(reasons) == len(values) and len(set(reasons.values())) == 1:
        reasons = {None: reasons[0]}
    return Figure(DEFINITIONS[name], values, reasons)
