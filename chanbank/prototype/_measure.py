"""What a design really does: levels and ripples read off its own frequency response.

Every design function proves its result here, so that none rests on a formula alone.
"""

import numpy as np
import scipy.fft

from chanbank.prototype.prototype import _response

__all__ = ["amplitude_grid", "band_extremes", "decibels", "local_peaks", "stopband_peak"]

# Grid points per lobe of the response. A lobe is close to half a sine wave; the parabola through
# its three highest points then misses the true peak by less than 1e-4 of it (0.001 dB).
_DENSITY = 8


def decibels(amplitude):
    """20 log10 of an amplitude, -inf for zero."""
    with np.errstate(divide="ignore"):
        return 20 * np.log10(np.abs(amplitude))


def amplitude_grid(taps, channels, density=_DENSITY):
    """abs(H) on a uniform grid from 0 to channels/2 spacings, `density` points to a lobe."""
    size = scipy.fft.next_fast_len(max(64, density * len(taps)), real=True)
    size += size % 2
    amplitude = np.abs(scipy.fft.rfft(taps, size))
    return np.arange(len(amplitude)) * (channels / size), amplitude


def local_peaks(frequencies, amplitude):
    """Every local maximum of a finely sampled curve: positions and heights, by parabolas."""
    inner = amplitude[1:-1]
    at = 1 + np.flatnonzero((inner >= amplitude[:-2]) & (inner > amplitude[2:]))
    left, mid, right = amplitude[at - 1], amplitude[at], amplitude[at + 1]
    bend = left - 2 * mid + right
    shift = np.where(bend < 0, 0.5 * (left - right) / np.where(bend < 0, bend, -1.0), 0.0)
    step = frequencies[1] - frequencies[0] if len(frequencies) > 1 else 0.0
    return frequencies[at] + shift * step, mid - 0.25 * (left - right) * shift


def stopband_peak(taps, channels, edge):
    """Largest abs(H) from `edge` (channel spacings) to half the sample rate, over abs(H(0))."""
    frequencies, amplitude = amplitude_grid(taps, channels)
    where, height = local_peaks(frequencies, amplitude)
    beyond = height[where >= edge]
    ends = np.abs(_response(taps, channels, np.array([edge, channels / 2])))
    return float(max(beyond.max(initial=0.0), ends.max()) / abs(taps.sum()))


def band_extremes(taps, channels, low, high):
    """Smallest and largest abs(H) over low <= f <= high, over abs(H(0))."""
    lobes = (high - low) * len(taps) / channels
    count = int(np.ceil(16 * lobes)) + 9
    amplitude = np.abs(_response(taps, channels, np.linspace(low, high, count)))
    return float(amplitude.min() / abs(taps.sum())), float(amplitude.max() / abs(taps.sum()))
