"""Equal ripples in closed form: minimax lowpass filters of any length.

Let w = 2 pi f / M and cosh(s/2) = cos(w/2) / cos(ws/2), ws the stopband edge: s = i theta, theta
from 0 to 2 pi, on the stopband, and s real on the passband. For n = (L - 1)/2 and any G that is
real on the real axis and analytic inside the unit circle,

    A(w) = (X(s) + X(-s)) / 2,    X(s) = exp(n s) G(exp(-s))

is, up to the coefficients of G beyond 2n, the amplitude of a symmetric filter of L taps, and
abs(G) is the height of its stopband ripples. A Blaschke product of K zeros has abs(G) constant on
the whole circle, so all ripples are equal whatever the zeros are; the K zeros and the level then
make K + 1 equal ripples in the passband. K depends on taps per branch and not on M: ten unknowns
describe a million taps. The dropped coefficients are of the order of delta^2 and less.

With v = tanh(s/2), v^2 = (sin(ws/2)^2 - sin(w/2)^2) / cos(w/2)^2, a zero at v = u is the factor
(u - v)/(u + v); g = u fs / sin(ws/2), about sqrt(fs^2 - f^2) for a zero at frequency f, hardly
depends on M. K = 0 is the Dolph-Chebyshev array. Products of this kind solve weighted extremal
problems in N. I. Achieser, Theory of Approximation, 1956, appendix A. A factor
((1 - b)/(1 - b z))^p, b > 0, makes the ripples fall off as

    abs(G) = delta (S(fs)/S(f))^p,   S(f)^2 = sin(pi f/M)^2 + sinh(pi a/M)^2,

p times 6 dB an octave from f = a upwards.
"""

from dataclasses import dataclass, replace

import numpy as np
import scipy.fft

__all__ = ["EqualRipple", "ripple_levels", "solve_ripples"]

_ROUNDS = 60


def ripple_levels(f, channels, stopband, knee, slope):
    """Height of the ripples at f over their height at the stopband edge."""
    if not slope:
        return np.ones(np.shape(f))
    floor = np.sinh(np.pi * knee / channels) ** 2
    edge = np.sin(np.pi * stopband / channels) ** 2 + floor
    return (edge / (np.sin(np.pi * np.asarray(f) / channels) ** 2 + floor)) ** (slope / 2)


@dataclass(frozen=True)
class EqualRipple:
    """A filter of `length` taps by its zeros g (channel spacings; complex ones with conjugates).

    `channels` is the sample rate in channel spacings, any number; `level` is log delta; `knee`
    and `slope` are a and p of the module's text.
    """

    length: float
    channels: float
    stopband: float
    zeros: np.ndarray
    level: float
    knee: float = 0.0
    slope: float = 0.0

    def mapped(self, f):
        """v and s for f below the stopband edge."""
        half = np.pi / self.channels
        square = np.sin(half * (self.stopband - f)) * np.sin(half * (self.stopband + f))
        root = np.sqrt(np.maximum(square, 0.0))
        return root / np.cos(half * f), 2 * np.arcsinh(root / np.cos(half * self.stopband))

    def scale(self):
        """u / g."""
        return np.sin(np.pi * self.stopband / self.channels) / self.stopband

    def parts(self, f):
        """X(s) and X(-s) for real f below the stopband edge."""
        v, s = self.mapped(f)
        log = (self.length - 1) / 2 * s + 0j
        for u in self.scale() * self.zeros:
            log = log + np.log((u - v) / (u + v))
        ahead, behind = self.level + log, self.level - log
        if self.slope:
            pole = self._pole()
            ahead = ahead + self.slope * np.log(np.expm1(-pole) / np.expm1(-pole - s))
            behind = behind + self.slope * np.log(np.expm1(-pole) / np.expm1(-pole + s))
        return np.exp(ahead).real, np.exp(behind).real

    def _pole(self):
        half = np.pi / self.channels
        square = np.sinh(half * self.knee) ** 2 + np.sin(half * self.stopband) ** 2
        return 2 * np.arcsinh(np.sqrt(square) / np.cos(half * self.stopband))

    def amplitude(self, f):
        """A at f from 0 to channels/2, in closed form."""
        f = np.asarray(f, dtype=float)
        result = np.empty(f.shape)
        stop = f > self.stopband
        ahead, behind = self.parts(f[~stop])
        result[~stop] = 0.5 * (ahead + behind)
        half = np.pi / self.channels
        f = f[stop]
        rise = np.sqrt(np.sin(half * (f - self.stopband)) * np.sin(half * (f + self.stopband)))
        fall = np.cos(half * f)
        theta = 2 * np.arctan2(rise, fall)
        phase = (self.length - 1) / 2 * theta
        for u in self.scale() * self.zeros:
            phase += np.angle((u * fall - 1j * rise) / (u * fall + 1j * rise))
        height = np.exp(self.level)
        if self.slope:
            pole = self._pole()
            phase -= self.slope * np.angle(-np.expm1(-pole - 1j * theta))
            height = height * ripple_levels(f, self.channels, self.stopband, self.knee, self.slope)
        result[stop] = height * np.cos(phase)
        return result

    def taps(self):
        """The L taps, from the amplitude at L equally spaced frequencies; not normalised."""
        k = np.arange(self.length // 2 + 1)
        amplitude = self.amplitude(k * (self.channels / self.length))
        turn = np.exp(-1j * np.pi * k * (self.length - 1) / self.length)
        return scipy.fft.irfft(amplitude * turn, self.length)


def solve_ripples(start, passband, reference, signs, pair, free):
    """Move zeros and level of `start` until the passband error alternates; None if it does not.

    `reference` are K + 1 passband frequencies (in order) where A - 1 has the signs `signs`.
    `pair(u)` gives log delta and log of the passband deviation for the one free number u, and
    `pair.slopes` their derivatives; u starts at `free`. Returns the model, the reference and u.
    """
    f = np.array(reference)
    grid = np.linspace(0.0, passband, 64 * (len(f) + 2) + 1)
    model = replace(start, level=pair(free)[0])
    for _ in range(_ROUNDS):
        deviation = np.exp(pair(free)[1])
        if not deviation < 1:
            return None
        ahead, behind = model.parts(f)
        value = 0.5 * (ahead + behind)
        if not np.isfinite(value).all() or (value <= 0).any():
            return None
        miss = np.log((1 + signs * deviation) / value)
        worst = np.abs(miss).max() / deviation
        if worst < 1e-2:
            moved = _extremes(model, f, signs, grid)
            # A reference off by e of a ripple misses its height by 5 e^2; noise in the error
            # moves its peaks by the root of itself.
            slack = max(2e-3, 2 * np.sqrt(1e-13 / deviation))
            still = np.abs(moved - f).max() < slack * passband / len(f)
            f = moved
            if still and worst < max(1e-7, 2e-13 * len(f) / deviation):
                return (model, f, free) if _within(model, grid, deviation) else None
            ahead, behind = model.parts(f)
            value = 0.5 * (ahead + behind)
            miss = np.log((1 + signs * deviation) / value)
        pull = 0.5 * (ahead - behind) / value
        model, free = _step(model, pair, free, f, pull, miss, signs * deviation)
        if model is None:
            return None
    return None


def _within(model, grid, deviation):
    """Whether no error between the reference points is larger: the reference was complete."""
    ahead, behind = model.parts(grid)
    return np.abs(0.5 * (ahead + behind) - 1).max() <= deviation * (1 + 1e-3) + 1e-12


def _step(model, pair, free, f, pull, miss, swing):
    """One Newton step, shortened where it would leave the range.

    Zeros move in pairs with sum p and product q, so that two real ones may meet and become
    conjugates, and back; of an odd number the largest real one moves alone, by its logarithm.
    """
    v, _ = model.mapped(f)
    v = v / model.scale()
    real = np.sort(model.zeros[model.zeros.imag == 0].real)
    single = real[-1:] if len(real) % 2 else real[:0]
    paired = real[: len(real) - len(single)]
    upper = model.zeros[model.zeros.imag > 0]
    p = np.concatenate([paired[::2] + paired[1::2], 2 * upper.real])
    q = np.concatenate([paired[::2] * paired[1::2], np.abs(upper) ** 2])
    minus, plus = [np.square(v) + sign * np.outer(p, v) + q[:, None] for sign in (-1, 1)]
    columns = [*(pull * -v * (1 / minus + 1 / plus) * p[:, None])]
    columns += [*(pull * (1 / minus - 1 / plus) * q[:, None])]
    columns += [pull * 2 * v * g / (g * g - v * v) for g in single]
    dlevel, ddeviation = pair.slopes(free)
    columns.append(dlevel - ddeviation * swing / (1 + swing))
    step = np.linalg.lstsq(np.stack(columns, axis=1), miss, rcond=None)[0]
    step *= min(1.0, 0.5 / max(np.abs(step[:-1]).max(initial=0.0), abs(step[-1]) / 4, 1e-300))
    if not np.isfinite(step).all():
        return None, free
    count = len(p)
    p, q = p * (1 + step[:count]), q * (1 + step[count : 2 * count])
    root = np.sqrt(p * p / 4 - q + 0j)
    zeros = np.concatenate([p / 2 + root, p / 2 - root, single * np.exp(step[2 * count : -1])])
    free = free + step[-1]
    return replace(model, zeros=zeros, level=pair(free)[0]), free


def _extremes(model, f, signs, grid):
    """The reference moved to the nearby peaks of the error, by parabolas through a fine grid."""
    ahead, behind = model.parts(grid)
    error = 0.5 * (ahead + behind) - 1
    edges = np.concatenate([[grid[0]], 0.5 * (f[1:] + f[:-1]), [grid[-1]]])
    moved = f.copy()
    for i, sign in enumerate(signs):
        lo, hi = np.searchsorted(grid, edges[i : i + 2])
        at = lo + int(np.argmax(sign * error[lo : hi + 1]))
        if at in (0, len(grid) - 1):
            moved[i] = grid[at]
            continue
        left, mid, right = error[at - 1 : at + 2]
        bend = left - 2 * mid + right
        shift = 0.5 * (left - right) / bend if bend else 0.0
        moved[i] = grid[at] + np.clip(shift, -1, 1) * (grid[1] - grid[0])
    return moved
