"""Responses on shifted combs, integrals over bands and refined extremes of one tap array.

Frequencies are in channel spacings: H(f) = sum_i h[i] exp(-2j pi f i / M). Powers are sums of
squared magnitudes, never differences, so that a level 250 dB down keeps its digits.
"""

import numpy as np
import scipy.fft

__all__ = ["Curve", "Response", "band_nodes", "comb", "complex_comb", "scan_whole"]

# Complex numbers held at a time (16 bytes each): 64 MiB.
_BLOCK = 1 << 22

# Points of the scan per lobe of the response (a lobe is M/L spacings wide).
_DENSITY = 16


def comb(taps, channels, count, shifts):
    """Blocks (first, values) of abs(H)^2 on combs, as `complex_comb`."""
    for first, values in complex_comb(taps, channels, count, shifts):
        yield first, values.real**2 + values.imag**2


def complex_comb(taps, channels, count, shifts):
    """Blocks (first, values) of H on combs: values[a, r] at shifts[a] + r * M / count.

    Tap i = p * count + m, so that H there is the DFT over m of exp(-2j pi s m / M) times a sum
    over p: one matrix product and one DFT of `count` points a shift.
    """
    shifts = np.atleast_1d(np.asarray(shifts, float))
    rows = -(-len(taps) // count)
    padded = np.zeros(rows * count)
    padded[: len(taps)] = taps
    padded = padded.reshape(rows, count)
    step = max(1, _BLOCK // count)
    for first in range(0, len(shifts), step):
        near = shifts[first : first + step]
        coarse = _turns(near, channels, np.arange(rows) * count)
        folded = (coarse.real @ padded) + 1j * (coarse.imag @ padded)
        folded *= _turns(near, channels, np.arange(count))
        yield first, scipy.fft.fft(folded, axis=1, overwrite_x=True)


def _turns(frequencies, channels, taps):
    """exp(-2j pi f i / M), the whole spacings of f reduced in integers.

    Rounding then grows with the fraction of a spacing times i / M, some taps per branch, and not
    with f i / M, which is thousands for a long prototype.
    """
    whole = np.rint(frequencies)
    part = (frequencies - whole)[:, None]
    steps = (np.mod(whole, channels).astype(np.int64)[:, None] * (taps % channels)) % channels
    return np.exp(-2j * np.pi * (steps / channels + part * (taps / channels)))


def band_nodes(taps, channels, low, high):
    """Gauss-Legendre nodes and weights that integrate abs(H)^2 from `low` to `high`.

    abs(H)^2 has no component faster than exp(2j pi f (L - 1) / M), pi (high - low) (L - 1) / M
    radians either way of the middle; half as many nodes as radians, and a few dozen, leave less
    than rounding.
    """
    radians = np.pi * (high - low) * len(taps) / channels
    nodes, weights = np.polynomial.legendre.leggauss(
        int(np.ceil(0.5 * radians + radians**0.4)) + 20
    )
    half = 0.5 * (high - low)
    return 0.5 * (low + high) + half * nodes, half * weights


class Response:
    """H at any frequencies, prepared once: tap i = a * step + b needs two short tables of turns."""

    def __init__(self, taps, channels):
        self.channels = channels
        self._step = max(1, int(np.sqrt(len(taps))))
        rows = -(-len(taps) // self._step)
        table = np.zeros(rows * self._step)
        table[: len(taps)] = taps
        self._table = table.reshape(rows, self._step)

    def __call__(self, frequencies):
        frequencies = np.asarray(frequencies, float)
        rows, step = self._table.shape
        coarse = _turns(frequencies, self.channels, np.arange(rows) * step)
        fine = _turns(frequencies, self.channels, np.arange(step))
        real, imag = coarse.real @ self._table, coarse.imag @ self._table
        return np.einsum("fa,fa->f", real + 1j * imag, fine)

    def power(self, frequencies):
        value = self(frequencies)
        return value.real**2 + value.imag**2


class Curve:
    """A smooth function of frequency whose extremes are found by a scan and then by zooming in.

    The scan has a point every `step`; its three best peaks are zoomed in on, `fan` points across
    each at a time, `rounds` times.
    """

    def __init__(self, function, step, *, rounds=4, fan=9):
        self._function, self._step = function, step
        self._rounds, self._fan = rounds, fan

    def maximum(self, low, high, *, scan=None):
        """Where the function is largest in low..high, and its value there.

        `scan` gives points already evaluated. With 8 points or more a lobe, and a lobe close to
        half a sine wave, four rounds of four stop within 1/2000 of a lobe of the top: 1e-6 of it.
        """
        if scan is None:
            count = max(9, int(np.ceil((high - low) / self._step)) + 1)
            points = np.linspace(low, high, count)
            scan = points, self._function(points)
        points, values = scan
        inner = np.concatenate([[-np.inf], values, [-np.inf]])
        peaks = np.flatnonzero((inner[1:-1] >= inner[:-2]) & (inner[1:-1] >= inner[2:]))
        best = peaks[np.argsort(values[peaks])[::-1][:3]]
        where, height = float(points[best[0]]), float(values[best[0]])
        centres = points[best]
        reach = float(np.max(np.diff(points))) if len(points) > 1 else 0.0
        for _ in range(self._rounds if reach > 0 else 0):
            across = np.linspace(-reach, reach, self._fan)
            near = np.clip(centres[:, None] + across, low, high)
            levels = self._function(near.ravel()).reshape(near.shape)
            tops = levels.argmax(axis=1)
            centres = near[np.arange(len(near)), tops]
            reach = 2 * reach / (self._fan - 1)
            winner = int(levels.max(axis=1).argmax())
            if levels[winner].max() > height:
                where, height = float(centres[winner]), float(levels[winner].max())
        return where, height

    def minimum(self, low, high):
        """Where the function is smallest in low..high, and its value there."""
        where, height = Curve(
            lambda f: -self._function(f), self._step, rounds=self._rounds, fan=self._fan
        ).maximum(low, high)
        return where, -height

    def crossing(self, level, low, high):
        """The point of low..high where the function, above `level` at low, falls to it."""
        for _ in range(9):
            points = np.linspace(low, high, 17)
            above = self._function(points) > level
            first = int(np.argmin(above)) if not above.all() else len(points) - 1
            low, high = float(points[max(0, first - 1)]), float(points[first])
        return 0.5 * (low + high)


def scan_whole(taps, channels):
    """abs(H)^2 on a uniform grid from 0 to M/2 spacings, sixteen points or more a lobe."""
    size = scipy.fft.next_fast_len(max(512, _DENSITY * len(taps)), real=True)
    size += size % 2
    spectrum = scipy.fft.rfft(taps, size)
    return np.arange(len(spectrum)) * (channels / size), spectrum.real**2 + spectrum.imag**2
