"""From a short exchange solution to the zeros that describe it at any length."""

from dataclasses import replace

import numpy as np

from chanbank.prototype._blaschke import EqualRipple, ripple_levels, solve_ripples
from chanbank.prototype._exchange import Band, exchange

__all__ = ["Lowpass", "short_solution", "solve_at"]


class Lowpass:
    """Band edges and the shape of the ripples, in channel spacings; independent of L and M."""

    def __init__(self, passband, stopband, knee, slope):
        self.passband, self.stopband = passband, stopband
        self.knee, self.slope = knee, slope

    def levels(self, f, channels):
        return ripple_levels(f, channels, self.stopband, self.knee, self.slope)

    def counted(self, f, channels):
        """The levels that a measurement holds a design to: not below 80 dB under the edge's."""
        return np.maximum(self.levels(f, channels), 1e-4)

    def bands(self, channels, ratio):
        """Exchange bands with passband ripple = ratio times the stopband ripple at the edge."""
        stop = _Falling(self.stopband, channels / 2, 0.0)
        object.__setattr__(stop, "shape", lambda f: self.levels(f, channels))
        return [Band(0.0, self.passband, 1.0, ratio), stop]


class _Falling(Band):
    def levels(self, f):
        return self.shape(f)


def short_solution(lowpass, length, channels, ratio, near=None, *, rough=False):
    """The exchange solution with this ratio of ripples, or None; `channels` may be fractional.

    `near` is a solution of another ratio, to start from; `rough` as in `exchange`.
    """
    bands = lowpass.bands(channels, ratio)
    if near is not None:
        found = exchange(length, channels, bands, near.extremes, rough=rough)
        if found is not None:
            return found
    return exchange(length, channels, bands, rough=rough)


def _start(lowpass, solution, channels):
    """(model, passband extremes, signs of A - 1 there) of an exchange solution, or None."""
    roots = np.roots(solution.taps)
    roots = roots[np.abs(roots) < 1]
    f = _refined(-1j * np.log(roots) * channels / (2 * np.pi), solution.taps, channels)
    lobe = channels / len(solution.taps)
    f = f[(np.abs(f.imag) > 1e-3 * lobe) | (np.abs(f.real) < lowpass.stopband * (1 - 1e-6))]
    half = np.pi / channels
    square = np.sin(half * lowpass.stopband) ** 2 - np.sin(half * f) ** 2
    scale = np.sin(half * lowpass.stopband) / lowpass.stopband
    g = np.sqrt(square / np.cos(half * f) ** 2) / scale
    real = np.abs(g.imag) < 1e-6 * np.abs(g)
    upper = g[~real & (g.imag > 0)]
    zeros = np.concatenate([g[real].real + 0j, np.stack([upper, upper.conj()], axis=1).ravel()])
    inside = solution.extremes <= lowpass.passband * (1 + 1e-9)
    extremes, signs = solution.extremes[inside], -np.sign(solution.errors[inside])
    if len(zeros) != len(extremes) - 1:
        return None
    model = EqualRipple(
        len(solution.taps),
        channels,
        lowpass.stopband,
        zeros,
        np.log(solution.delta),
        lowpass.knee,
        lowpass.slope,
    )
    return model, extremes, signs


def _refined(f, taps, channels):
    """Zeros improved by Newton on the cosine sum, which is better conditioned than the roots."""
    position = np.arange(len(taps)) - (len(taps) - 1) / 2
    for _ in range(8):
        turn = np.exp(2j * np.pi / channels * np.outer(f, position))
        value, slope = turn @ taps, turn @ (taps * position) * (2j * np.pi / channels)
        step = np.where(slope != 0, value / np.where(slope != 0, slope, 1), 0)
        lobe = channels / len(taps)
        f = f - step * np.minimum(1, 0.2 * lobe / np.maximum(np.abs(step), 1e-300))
    return f


def solve_at(lowpass, solution, short_channels, length, channels, pair):
    """The equal-ripple filter of `length` taps that a short solution leads to, or None.

    Follows the solution from `short_channels` to `channels` in steps of 1/channels^2, to which
    its change is proportional: one step as a rule, more for narrow transitions.
    """
    start = _start(lowpass, solution, short_channels)
    if start is None:
        return None
    model, reference, signs = start
    free = pair.free(np.log(solution.delta))
    ends = short_channels**-2.0, float(channels) ** -2
    ratios = model.length / short_channels, length / channels
    done, step = 0.0, 1.0
    while done < 1:
        part = min(1.0, done + step)
        here = ((1 - part) * ends[0] + part * ends[1]) ** -0.5 if part < 1 else channels
        taps = here * ((1 - part) * ratios[0] + part * ratios[1]) if part < 1 else length
        trial = replace(model, length=taps, channels=here)
        found = _solve(lowpass, trial, reference, signs, pair, free)
        if found is None:
            step /= 2
            if step < 1 / 256:
                return None
            continue
        model, reference, signs, free = found
        done, step = part, 2 * step
    return model


def _solve(lowpass, model, reference, signs, pair, free):
    """The solution with this number of passband ripples, or with one fewer or more.

    One ripple, with one real zero, can come or go at zero frequency between the short filter and
    the long one.
    """
    attempts = [(model, reference, signs)]
    real = np.flatnonzero(model.zeros.imag == 0)
    if len(real) and len(reference) > 1:
        largest = real[np.argmax(model.zeros[real].real)]
        fewer = replace(model, zeros=np.delete(model.zeros, largest))
        attempts.append((fewer, np.append(0.0, reference[2:]), signs[1:]))
    far = 4 * max(lowpass.stopband, np.abs(model.zeros).max(initial=0.0))
    more = replace(model, zeros=np.append(model.zeros, far + 0j))
    first = reference[1] / 2 if len(reference) > 1 else lowpass.passband / 2
    pushed = np.concatenate([[0.0], np.maximum(reference, first)])
    attempts.append((more, pushed, np.append(-signs[0], signs)))
    for trial, f, turns in attempts:
        found = solve_ripples(trial, lowpass.passband, f, turns, pair, free)
        if found is not None:
            return found[0], found[1], turns, found[2]
    return None
