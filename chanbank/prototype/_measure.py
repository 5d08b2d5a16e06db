"""What a design really does: levels and ripples read off its own frequency response.

Every design function proves its result here, so that none rests on a formula alone.
"""

import numpy as np
import scipy.fft

from chanbank.prototype.prototype import _response

__all__ = [
    "amplitude_grid",
    "band_extremes",
    "decibels",
    "local_peaks",
    "stopband_peak",
    "stopband_ripples",
    "summit",
]

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


def stopband_peak(taps, channels, edge, high=None, levels=None):
    """Largest abs(H) from `edge` to `high` (default: half the sample rate), over abs(H(0)).

    With `levels`, a function of frequency, the largest abs(H) / levels(f).
    """
    return float(stopband_ripples(taps, channels, edge, high, levels).max())


def stopband_ripples(taps, channels, edge, high=None, levels=None, also=None):
    """Heights of all peaks from `edge` to `high`, both ends included, over abs(H(0)).

    `also` holds further frequencies to look at, such as inner band edges.
    """
    high = channels / 2 if high is None else min(high, channels / 2)
    # The lobes next to the edge of a minimax design are narrow and want a grid of their own.
    near = min(high, edge + 4 * channels / len(taps))
    f = edge + (near - edge) * np.linspace(0, 1, 321) ** 2
    close = np.abs(_response(taps, channels, f))
    shape = np.ones_like(f) if levels is None else levels(f)
    top = close / shape
    at = np.flatnonzero((top[1:-1] >= top[:-2]) & (top[1:-1] > top[2:])) + 1
    heights = [top[at], top[[0]]]
    if near < high:
        grid, amplitude = amplitude_grid(taps, channels)
        where, height = local_peaks(grid, amplitude)
        keep = (where > f[-2]) & (where <= high)
        where, height = where[keep], height[keep]
        ends = np.append(high, [] if also is None else also)
        where = np.concatenate([where, ends])
        height = np.concatenate([height, np.abs(_response(taps, channels, ends))])
        heights.append(height if levels is None else height / levels(where))
    else:
        heights.append(top[[-1]])
    return np.concatenate(heights) / abs(taps.sum())


def band_extremes(taps, channels, low, high):
    """Smallest and largest abs(H) over low <= f <= high, over abs(H(0))."""
    lobes = (high - low) * len(taps) / channels
    count = int(np.ceil(16 * lobes)) + 9
    amplitude = np.abs(_response(taps, channels, np.linspace(low, high, count)))
    scale = abs(taps.sum())
    return -summit(-amplitude) / scale, summit(amplitude) / scale


def summit(values):
    """The largest value of an evenly sampled smooth curve, by parabolas through its local tops."""
    left, mid, right = values[:-2], values[1:-1], values[2:]
    bend = left - 2 * mid + right
    top = (mid >= left) & (mid >= right) & (bend < 0)
    tops = mid[top] - (left[top] - right[top]) ** 2 / (8 * bend[top])
    return float(max(values[0], values[-1], tops.max(initial=-np.inf)))
