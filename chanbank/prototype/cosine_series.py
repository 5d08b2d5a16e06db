"""Prototypes as short cosine series: a few numbers that give the taps at any number of channels.

h(t) = sum over k < K of a_k cos(2 pi k (t / P - 1/2)), 0 <= t <= P, t in channel periods (M
samples): symmetric about P/2, and a lowpass whose shape does not depend on M.
"""

import numpy as np

__all__ = ["half_sample_taps", "series_values", "whole_sample_taps"]


def series_values(coefficients, taps_per_branch, times):
    """h(t) for times in channel periods; 0 outside 0..P.

    The cosines of multiples of one angle are Chebyshev polynomials of its cosine, summed by
    Clenshaw's recurrence: K multiplications a tap and no cosine but the first.
    """
    times = np.asarray(times, float)
    angle = np.cos(2 * np.pi * (times / taps_per_branch - 0.5))
    values = np.polynomial.chebyshev.chebval(angle, coefficients)
    return np.where((times >= 0) & (times <= taps_per_branch), values, 0.0)


def half_sample_taps(coefficients, taps_per_branch, channels):
    """The PM taps at t = (i + 1/2) / M: symmetric over the full length."""
    length = taps_per_branch * channels
    half = series_values(
        coefficients, taps_per_branch, (np.arange((length + 1) // 2) + 0.5) / channels
    )
    return np.concatenate([half, half[: length // 2][::-1]])


def whole_sample_taps(coefficients, taps_per_branch, channels):
    """The PM taps at t = i / M, the first set to zero: symmetric about PM/2."""
    length = taps_per_branch * channels
    half = series_values(coefficients, taps_per_branch, np.arange(1, length // 2 + 1) / channels)
    return np.concatenate([[0.0], half, half[: (length - 1) // 2][::-1]])
