"""Band-limited noise through an analysis bank, line by line.

The noise is periodic: equal lines of random phase, T = N D samples to a period. Lines that fill
1/D of the band fall in separate bins of N output frames, so one period gives every channel's
response to each of them; D such runs cover the band, and sums over lines are powers of
band-limited noise.
"""

import numpy as np
import scipy.fft
from scipy.interpolate import CubicSpline

from chanbank.metrics.figures import RISE

__all__ = ["Band", "Lines", "sweep", "sweep_size"]

# Lines per lobe of the response (1/L wide), and per channel spacing at least.
_PER_LOBE, _PER_SPACING = 32, 256


def sweep_size(driver):
    """Frames N in one period, so that T = N D lines are close enough."""
    lines = max(_PER_LOBE * driver.length, _PER_SPACING * driver.channels)
    return scipy.fft.next_fast_len(-(-lines // driver.hop))


def sweep(driver, columns, blocks):
    """Responses of some channels to all lines of some blocks.

    Block r holds the lines m = r N .. (r + 1) N - 1 at m / T cycles per sample. Returns
    complex128 (columns, T), NaN where no block was run.
    """
    size, hop = sweep_size(driver), driver.hop
    period, skip = size * hop, driver.settle()
    responses = np.full((len(columns), period), np.nan, np.complex128)
    for block in blocks:
        phases = np.exp(2j * np.pi * driver.rng.random(size))
        spectrum = np.zeros(period, np.complex128)
        spectrum[block * size : (block + 1) * size] = phases
        # Unit power: the rounding of the bank then is at its floor for every line.
        signal = scipy.fft.ifft(spectrum) * (period / np.sqrt(size))
        fed = np.resize(signal, skip * hop + period)[None]
        frames = driver.frames(fed, skip, size, columns)[0]
        bins = scipy.fft.fft(frames, axis=0).T / np.sqrt(size)
        # Frame n = skip + i starts the transform; bin b is line r N + b since r N n / N is whole.
        late = np.exp(-2j * np.pi * ((np.arange(size) * skip) % size) / size)
        responses[:, block * size : (block + 1) * size] = bins * (late / phases)
    return responses


class Band:
    """Weights that integrate a function given on lines over an interval."""

    def __init__(self, low, high, period):
        """From `low` to `high` in cycles per sample; line m sits at m / period."""
        a, b = low * period, high * period
        first, last = int(np.floor(a)), int(np.ceil(b))
        self.first = first
        self.lines = np.arange(first, last + 1)
        self.head, self.tail = a - first, last - b
        size = len(self.lines)
        self.weights = (
            _cubic_weights(size, self.head, self.tail)
            if size >= 10
            else _straight_weights(size, self.head, self.tail)
        ) / period
        self.lines %= period

    def integral(self, values):
        """Along the last axis of values over all lines."""
        return values[..., self.lines] @ self.weights

    def inside(self, values):
        """Values at the two ends (interpolated in dB) and at the lines between, last axis."""
        held = values[..., self.lines]
        tiny = np.finfo(float).tiny
        logs = np.log(np.maximum(held, tiny))
        left = logs[..., 0] * (1 - self.head) + logs[..., 1] * self.head
        right = logs[..., -1] * (1 - self.tail) + logs[..., -2] * self.tail
        ends = np.exp(np.stack([left, right], axis=-1))
        return np.concatenate([ends[..., :1], held[..., 1:-1], ends[..., 1:]], axis=-1)


def _straight_weights(size, head, tail):
    """Integral of the straight lines between values, `head` and `tail` cut off the ends."""
    weights = np.ones(size)
    weights[0] = weights[-1] = 0.5
    weights[0] -= head - head**2 / 2
    weights[1] -= head**2 / 2
    weights[-1] -= tail - tail**2 / 2
    weights[-2] -= tail**2 / 2
    return weights


def _cubic_weights(size, head, tail):
    """The same to fourth order: Gregory's rule between the second lines from either end, and a
    cubic through four lines over what is left of the first and last step. A band edge on the
    skirt of a filter falls by a factor within a few lines: straight lines cost 0.05 dB there.
    """
    weights = np.zeros(size)
    weights[1:-1] = 1.0
    for at, part in ((slice(None), 1 - head), (slice(None, None, -1), 1 - tail)):
        end = weights[at]
        end[1:4] += np.array([3 / 8, 7 / 6, 23 / 24]) - 1.0
        end[:4] -= _ENDS @ (-part) ** np.arange(4, -1, -1)
    return weights


# Integrals of the Lagrange polynomials on -1, 0, 1, 2, from 0 on: coefficients of x^4 .. x^0.
_ENDS = np.array(
    [
        np.polyint(np.poly(roots) / np.polyval(np.poly(roots), place))
        for place, roots in (
            (-1, [0, 1, 2]),
            (0, [-1, 1, 2]),
            (1, [-1, 0, 2]),
            (2, [-1, 0, 1]),
        )
    ]
)


class Lines:
    """Powers of the swept channels against frequency, and the questions put to them."""

    def __init__(self, responses, driver, columns):
        self.responses, self._bands = responses, {}
        self.power = responses.real**2 + responses.imag**2
        self.period = responses.shape[1]
        self.fold = self.period // driver.hop
        self.channels = driver.channels
        self.centres = driver.plan.normalised_frequencies[driver.outputs[columns]]

    def band(self, low, high):
        """A `Band` between two frequencies in cycles per sample."""
        if (low, high) not in self._bands:
            self._bands[low, high] = Band(low, high, self.period)
        return self._bands[low, high]

    def shifted(self, row):
        """Offsets from a channel's centre in spacings, increasing, and its powers there."""
        lines = np.arange(self.period) / self.period
        offset = (lines - self.centres[row] + 0.5) % 1.0 - 0.5
        order = np.argsort(offset)
        return offset[order] * self.channels, self.power[row, order]

    def aliases(self, row):
        """On all lines, the sum over r != 0 of the power at line + r N."""
        folded = self.power[row].reshape(-1, self.fold)
        total = np.empty_like(folded)
        # Sums without the own line, not differences: prefix and suffix sums over r.
        before = np.zeros(self.fold)
        for r in range(len(folded)):
            total[r] = before
            before = before + folded[r]
        after = np.zeros(self.fold)
        for r in range(len(folded) - 1, -1, -1):
            total[r] += after
            after = after + folded[r]
        return total.ravel()

    def centre_power(self, row):
        """Power at the line nearest to the centre, before any tone has run."""
        offset, power = self.shifted(row)
        return power[np.abs(offset).argmin()]

    def crossings(self, row, factor, reference):
        """Offsets below and above the centre where the power first falls to factor * reference."""
        offset, power = self.shifted(row)
        middle = int(np.abs(offset).argmin())
        found = []
        for step in (-1, 1):
            index = np.arange(middle, -1 if step < 0 else len(offset), step)
            below = np.flatnonzero(~(power[index] >= factor * reference))
            if not len(below) or below[0] == 0 or np.isnan(power[index[below[0]]]):
                return None
            here, last = index[below[0]], index[below[0] - 1]
            level = np.log(factor * reference)
            a, b = np.log(power[last]), np.log(max(power[here], np.finfo(float).tiny))
            share = (level - a) / (b - a)
            found.append(float(abs(offset[last] + share * (offset[here] - offset[last]))))
        return found

    def first_minima(self, row):
        """Offsets of the first minima outside the -6 dB points, below and above."""
        crossings = self.crossings(row, 0.25, self.centre_power(row))
        if crossings is None:
            return None
        offset, power = self.shifted(row)
        found = []
        for sign, start in zip((-1, 1), crossings, strict=True):
            side = np.flatnonzero(sign * offset > start)
            side = side[np.argsort(sign * offset[side])]
            levels = power[side]
            valleys = np.flatnonzero((levels[1:-1] <= levels[:-2]) & (levels[1:-1] < levels[2:]))
            ahead = np.maximum.accumulate(levels[::-1])[::-1]
            valleys = valleys[ahead[1 + valleys] > RISE * levels[1 + valleys]]
            if not len(valleys):
                return None
            found.append(float(abs(offset[side[1 + valleys[0]]])))
        return found

    def delay_spread(self, row, band):
        """Spread of the slope of the phase, from a spline through the complex responses: a zero
        near the band turns the phase within a step, but not the response."""
        lines = np.arange(band.first - 4, band.first + len(band.lines) + 4)
        values = self.responses[row, lines % self.period]
        # The bulk delay turns the phase many times a line: take the mean turn out first.
        mean = np.angle((values[1:] * values[:-1].conj()).sum())
        place = np.arange(len(lines))
        spline = CubicSpline(place, values * np.exp(-1j * mean * place))
        points = np.linspace(4 + band.head, len(lines) - 5 - band.tail, 4 * len(lines))
        slope = (spline(points, 1) / spline(points)).imag * self.period / (2 * np.pi)
        return float(np.ptp(slope))
