"""Where a synthesis prototype may have taps, which delay goes with that, and how long is enough."""

import math

import numpy as np

from chanbank.synthesis._least_stopband import LeastStopband

__all__ = ["Support", "sufficient_taps_per_branch", "symmetric_about"]


class Support:
    """Where g may have taps, and the delay that goes with it."""

    def __init__(self, prototype, channels, per_branch, pair_delay=None):
        self.taps, self.channels = prototype.taps, channels
        self.full = per_branch * channels
        self.start, self.length = 0, self.full
        twice = round(2 * prototype.delay)
        mirror = symmetric_about(prototype.taps, twice)
        if pair_delay is not None:
            last = prototype.length + self.full - 2
            if pair_delay > last:
                raise ValueError(
                    "pair_delay must satisfy pair_delay <= (taps of h) + (taps of g) - 2; got "
                    f"{pair_delay} > {prototype.length} + {self.full} - 2 = {last}"
                )
            self.delay = pair_delay
        elif mirror and (twice + self.full - 1) % 2:
            # Half a sample apart: g is symmetric about QM/2, its first tap zero.
            self.start, self.length = 1, self.full - 1
            self.delay = (twice + self.full) // 2 - 1
        else:
            self.delay = round(prototype.delay + (self.full - 1) / 2)
        self.mirrored = mirror and 2 * self.delay == twice + self.length - 1

    def problem(self, hop, edge, trim=0):
        """The convex problem, on a support shorter by `trim` taps at each end."""
        return LeastStopband(
            self.taps,
            self.channels,
            hop,
            self.length - 2 * trim,
            self.delay - trim,
            edge,
            self.mirrored,
        )

    def thinned(self, hop, edge, step):
        """The same problem on every `step`-th tap: one of `step` interleaved copies of it."""
        first = self.delay % step
        return LeastStopband(
            self.taps[first::step] * step,
            self.channels // step,
            hop // step,
            -(-self.length // step),
            self.delay // step,
            edge,
        )

    def solvable(self, hop):
        return _solvable(self.taps, self.channels, hop, self.length, self.delay)

    def placed(self, taps):
        """(taps of g from index 0, pair delay)."""
        out = np.zeros(self.full)
        out[self.start : self.start + self.length] = taps
        return out, self.delay + self.start


def symmetric_about(taps, twice):
    """Whether taps[i] == taps[twice - i], beyond the ends counted as zero."""
    low, high = max(0, twice - len(taps) + 1), min(len(taps) - 1, twice)
    if high < low:
        return False
    slack = 1e-12 * np.abs(taps).max()
    window = taps[low : high + 1]
    outside = np.concatenate([taps[:low], taps[high + 1 :]])
    return bool(
        np.abs(window - window[::-1]).max() <= slack and not (np.abs(outside) > slack).any()
    )


def _solvable(taps, channels, hop, length, delay):
    """Whether no tau has more conditions than unknowns."""
    nonzero = np.flatnonzero(taps)
    first, last = int(nonzero[0]), int(nonzero[-1])
    tau = np.arange(hop)
    unknowns = (length - 1 - tau) // hop + 1
    low = min(0, -((delay - first) // channels))
    high = max(0, (last + length - 1 - delay) // channels)
    conditions = np.zeros(hop, int)
    for shift in range(low, high + 1):
        begin = max(0, delay + shift * channels - last)
        end = min(length - 1, delay + shift * channels - first)
        reached = begin + (tau - begin) % hop <= end
        if shift == 0 and not reached.all():
            return False
        conditions += reached
    return bool((conditions <= unknowns).all())


def sufficient_taps_per_branch(channels, hop, prototype):
    """The least Q for which exact duals exist for a generic h, or None at critical sampling."""
    branches = prototype.taps_per_branch
    if hop == channels:
        return branches if branches == 1 else None
    bound = max(1, math.ceil((branches - 1) / (channels / hop - 1)) - 1)
    for per_branch in range(bound, bound + 2 * branches + 4):
        if Support(prototype, channels, per_branch).solvable(hop):
            return per_branch
    return bound + 2 * branches + 4
