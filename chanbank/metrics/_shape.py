"""Figures that are the same for every channel of a bank: they follow from the taps alone."""

import numpy as np

from chanbank.metrics._spectrum import Curve, Response, band_nodes, comb, scan_whole
from chanbank.metrics.figures import RISE

__all__ = ["Shape", "alias_levels", "decibels"]


def decibels(power):
    """10 log10 of a power ratio; -inf for an exact zero."""
    with np.errstate(divide="ignore"):
        return 10 * np.log10(power)


class Shape:
    """The response of one prototype, scanned once and asked many times. Powers, not dB."""

    def __init__(self, taps, channels):
        self.taps, self.channels = taps, channels
        self.response = Response(taps, channels)
        # A lobe is M/L spacings wide: sixteen points each.
        self.curve = Curve(self.response.power, channels / len(taps) / 16)
        self.grid, self.power = scan_whole(taps, channels)
        self.centre = float(taps.sum()) ** 2

    def at(self, frequencies):
        return self.response.power(frequencies)

    def noise_bandwidth(self):
        return self.channels * float((self.taps**2).sum()) / self.centre

    def width(self, factor):
        """Full width where the power first falls to `factor` of the centre's; None if never."""
        below = np.flatnonzero(self.power < factor * self.centre)
        if not len(below):
            return None
        stop = below[0]
        return 2 * self.curve.crossing(
            factor * self.centre, float(self.grid[max(0, stop - 1)]), float(self.grid[stop])
        )

    def beyond(self, edge):
        """Largest power from `edge` to half the sample rate; None where that is empty."""
        if edge >= self.channels / 2:
            return None
        inside = self.grid > edge
        points = np.concatenate([[edge], self.grid[inside]])
        values = np.concatenate([self.at([edge]), self.power[inside]])
        return self.curve.maximum(edge, self.channels / 2, scan=(points, values))[1]

    def sidelobe(self):
        """Largest power beyond the first minimum outside the -6 dB point; None without one."""
        below = np.flatnonzero(self.power < 0.25 * self.centre)
        if not len(below):
            return None
        rest = self.power[below[0] :]
        valleys = np.flatnonzero((rest[1:-1] <= rest[:-2]) & (rest[1:-1] < rest[2:]))
        ahead = np.maximum.accumulate(rest[::-1])[::-1]
        valleys = valleys[ahead[1 + valleys] > RISE * rest[1 + valleys]]
        if not len(valleys):
            return None
        start = below[0] + 1 + valleys[0]
        scan = self.grid[start:], self.power[start:]
        return self.curve.maximum(float(self.grid[start]), self.channels / 2, scan=scan)[1]

    def extremes(self, low, high):
        return self.curve.minimum(low, high)[1], self.curve.maximum(low, high)[1]

    def delay_spread(self, half):
        """Largest less smallest group delay within `half` spacings of the centre, in samples."""
        index = np.arange(len(self.taps))
        if np.array_equal(self.taps, self.taps[::-1]):
            return 0.0
        ramp = Response(self.taps * index, self.channels)

        def delay(points):
            return (ramp(points) / self.response(points)).real

        step = self.channels / len(self.taps) / 32
        curve = Curve(delay, step)
        return curve.maximum(0.0, half)[1] - curve.minimum(0.0, half)[1]


def alias_levels(taps, channels, hop, half):
    """Worst and mean alias over the wanted band of `half` spacings either side, as powers.

    The worst is the largest over phi of sum over r != 0 of abs(H(phi + r M / D))^2 over
    abs(H(phi))^2; the mean is the ratio of the two band integrals. With real taps both are even
    in phi, so half the band is enough.
    """
    if hop == 1:
        return 0.0, 0.0
    nodes, weights = band_nodes(taps, channels, 0.0, half)
    wanted, folded = _sums(taps, channels, hop, nodes)
    mean = float(weights @ folded / (weights @ wanted))

    def ratio(points):
        own, others = _sums(taps, channels, hop, points)
        with np.errstate(divide="ignore"):
            return others / own

    # Sixteen points a lobe, then two zooms of four on the best three: a lobe is close to half a
    # sine wave, and 1/512 of it off the top costs less than 1e-4 dB.
    step = channels / len(taps) / 16
    return Curve(ratio, step, rounds=2).maximum(0.0, half)[1], mean


def _sums(taps, channels, hop, points):
    wanted, folded = np.empty(len(points)), np.empty(len(points))
    for first, power in comb(taps, channels, hop, points):
        last = first + len(power)
        wanted[first:last] = power[:, 0]
        folded[first:last] = power[:, 1:].sum(axis=1)
    return wanted, folded
