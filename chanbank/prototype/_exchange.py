"""The exchange algorithm for minimax linear-phase filters of moderate length.

A symmetric filter of L taps has the amplitude A(w) = q(w) p(cos w): q = 1 and p of degree
(L - 1)/2 for odd L, q = cos(w/2) and p of degree L/2 - 1 for even L. Parks and McClellan, IEEE
Trans. Circuit Theory 19(2), 1972; with barycentric interpolation it holds up to some thousand taps
(Filip, ACM Trans. Math. Software 43(1), 2016).
"""

from dataclasses import dataclass

import numpy as np

__all__ = ["Band", "Exchange", "exchange"]

_DENSITY = 20
_ITERATIONS = 60
_POLISHES = 6


@dataclass(frozen=True)
class Band:
    """low <= f <= high in channel spacings: amplitude `wanted` to within level(f) delta.

    level(f) = level (low/f)^slope, so slope 1 lets the ripple fall by 6 dB an octave.
    """

    low: float
    high: float
    wanted: float
    level: float = 1.0
    slope: float = 0.0

    def levels(self, f):
        if not self.slope:
            return np.full(np.shape(f), self.level)
        return self.level * (self.low / np.asarray(f)) ** self.slope


@dataclass(frozen=True)
class Exchange:
    """A minimax solution: taps, delta, and the extremal frequencies with the errors there."""

    taps: np.ndarray
    delta: float
    extremes: np.ndarray
    errors: np.ndarray


def exchange(length, channels, bands, start=None, *, rough=False):
    """The minimax filter of `length` taps, or None where the exchange does not settle.

    `channels` need not be an integer: it is only the sample rate in channel spacings. `start` may
    hold the extremes of a solution with nearly the same bands. `rough` stops at the grid: delta to
    some thousandths, and no taps.
    """
    odd = length % 2
    count = (length + 1) // 2 + 1
    f, wanted, level, band = _grid(bands, count, channels, odd)
    if len(f) < count + 1:
        return None
    w = 2 * np.pi * f / channels
    shape = np.ones_like(w) if odd else np.cos(w / 2)
    x, target, weight = np.cos(w), wanted / shape, shape / level
    at = np.unique(np.round(np.linspace(0, len(f) - 1, count)).astype(int))
    if start is not None and len(start) == count:
        near = np.unique(np.clip(np.searchsorted(f, start), 0, len(f) - 1))
        at = near if len(near) == count else at
    for _ in range(_ITERATIONS):
        fit = _Levelled(x[at], target[at], weight[at])
        error = weight * (target - fit(x))
        error[at] = fit.delta * (-1.0) ** np.arange(len(at))
        if not np.isfinite(error).all():
            return None
        chosen = _extremes(error, band, count)
        if chosen is None:
            return None
        peak = np.abs(error[chosen])
        if not np.isfinite(peak).all() or fit.delta == 0:
            return None
        if peak.max() - peak.min() <= 1e-6 * peak.max() or np.array_equal(chosen, at):
            if rough:
                return Exchange(None, float(peak.mean()), f[chosen], error[chosen] * level[chosen])
            found = _polished(length, channels, bands, f[chosen], band[chosen])
            if found is None:
                # Rounding moved the peaks past each other: the grid's own solution stands.
                swing = error[chosen] * level[chosen]
                found = Exchange(_taps(fit, length), float(peak.mean()), f[chosen], swing)
            # The proof: nowhere on the grid does the weighted error exceed that of the reference.
            error = weight * (target - _amplitude(found.taps, x) / shape)
            limit = found.delta * 1.01 + 1e-14 * weight
            return found if (np.abs(error) <= limit).all() else None
        at = chosen
    return None


def _grid(bands, count, channels, odd):
    """Frequencies in proportion to the bands' widths, dense at the edges; edges included."""
    total = sum(band.high - band.low for band in bands)
    parts = []
    for number, band in enumerate(bands):
        points = max(24, round(_DENSITY * count * (band.high - band.low) / total))
        f = np.linspace(band.low, band.high, points)
        if not odd:
            # Even lengths are zero at half the sample rate whatever is wanted there.
            f = f[f < channels / 2 * (1 - 1e-9 - 0.1 / (_DENSITY * count))]
        parts.append((f, np.full(len(f), band.wanted), band.levels(f), np.full(len(f), number)))
    return (np.concatenate(column) for column in zip(*parts, strict=True))


class _Levelled:
    """The polynomial that misses its targets by +-delta in turn, evaluated barycentrically."""

    def __init__(self, x, target, weight):
        scale = 4 / (x.max() - x.min())
        gaps = (x[:, None] - x[None, :]) * scale
        np.fill_diagonal(gaps, 1.0)
        logs = -np.log(np.abs(gaps)).sum(axis=1)
        signs = np.prod(np.sign(gaps), axis=1)
        bary = signs * np.exp(logs - logs.max())
        turns = (-1.0) ** np.arange(len(x))
        self.delta = float((bary * target).sum() / (bary * turns / weight).sum())
        values = target - turns * self.delta / weight
        # One point fewer than the reference determines the polynomial: drop the last.
        self.x, self.values = x[:-1], values[:-1]
        self.bary = bary[:-1] * gaps[:-1, -1]

    def __call__(self, x):
        result = np.empty(len(x))
        for start in range(0, len(x), 4096):
            gap = x[start : start + 4096, None] - self.x[None, :]
            hit = np.abs(gap) < 1e-15
            with np.errstate(divide="ignore", invalid="ignore"):
                share = self.bary / gap
                part = (share @ self.values) / share.sum(axis=1)
            rows = hit.any(axis=1)
            part[rows] = self.values[hit[rows].argmax(axis=1)]
            result[start : start + 4096] = part
        return result


def _polished(length, channels, bands, f, band):
    """The solution with every extreme moved from its grid point to the true peak beside it."""
    odd = length % 2
    low = np.array([b.low for b in bands])[band]
    high = np.array([min(b.high, channels / 2 * (1 if odd else 1 - 1e-9)) for b in bands])[band]
    wanted = np.array([b.wanted for b in bands])[band]

    def local(f):
        w = 2 * np.pi * f / channels
        shape = np.ones_like(w) if odd else np.cos(w / 2)
        level = np.empty_like(f)
        for number, b in enumerate(bands):
            level[band == number] = b.levels(f[band == number])
        return np.cos(w), wanted / shape, shape / level, level

    for _ in range(_POLISHES):
        x, target, weight, level = local(f)
        fit = _Levelled(x, target, weight)
        # Three points around each extreme, a tenth of the way to its neighbours.
        near = np.minimum(np.diff(f, prepend=-f[1]), np.diff(f, append=2 * f[-1] - f[-2] + 1e-12))
        step = 0.1 * np.abs(near)
        size = []
        for shift in (-step, 0.0, step):
            x, target, weight, _ = local(np.clip(f + shift, 0.0, channels / 2 * (1 - 1e-9)))
            size.append(np.abs(weight * (target - fit(x))))
        bend = size[0] - 2 * size[1] + size[2]
        move = np.where(bend < 0, 0.5 * (size[0] - size[2]) / np.where(bend < 0, bend, -1), 0.0)
        move = np.where(bend < 0, np.clip(move, -1, 1), np.sign(size[2] - size[0]))
        f = np.clip(f + move * step, low, high)
        if not np.isfinite(f).all() or (np.diff(f) <= 0).any():
            return None
    x, target, weight, level = local(f)
    fit = _Levelled(x, target, weight)
    turns = fit.delta * (-1.0) ** np.arange(len(f))
    return Exchange(_taps(fit, length), abs(fit.delta), f, turns * level)


def _extremes(error, band, count):
    """`count` grid points where the error peaks with alternating sign, or None."""
    size = np.abs(error)
    first = np.r_[True, band[1:] != band[:-1]]
    last = np.r_[first[1:], True]
    up = first | (np.r_[0.0, size[:-1]] <= size) | (np.r_[0.0, error[:-1]] * error < 0)
    down = last | (np.r_[size[1:], 0.0] < size) | (np.r_[error[1:], 0.0] * error < 0)
    at = []
    for point in np.flatnonzero(up & down):
        if at and error[point] * error[at[-1]] > 0:
            if size[point] > size[at[-1]]:
                at[-1] = point
        else:
            at.append(point)
    while len(at) > count:
        if len(at) == count + 1 or size[at[0]] < size[at[-1]]:
            drop_first = size[at[0]] < size[at[-1]]
            at.pop(0 if drop_first else -1)
            continue
        at.pop(-1)
    return np.array(at) if len(at) == count else None


def _taps(fit, length):
    """Taps from the amplitude at L equally spaced frequencies."""
    k = np.arange(length // 2 + 1)
    w = 2 * np.pi * k / length
    shape = np.ones_like(w) if length % 2 else np.cos(w / 2)
    spectrum = fit(np.cos(w)) * shape * np.exp(-1j * np.pi * k * (length - 1) / length)
    return np.fft.irfft(spectrum, length)


def _amplitude(taps, x):
    """The zero-phase amplitude at x = cos w, by Chebyshev sums of the symmetric taps."""
    length = len(taps)
    half = length // 2
    if length % 2:
        return np.polynomial.chebyshev.chebval(
            x, np.concatenate([taps[half : half + 1], 2 * taps[half + 1 :]])
        )
    # cos((k + 1/2) w) = T_(2k+1)(cos(w/2))
    odd = np.zeros(length)
    odd[1::2] = 2 * taps[half:]
    return np.polynomial.chebyshev.chebval(np.sqrt(np.maximum(0.0, (1 + x) / 2)), odd)
