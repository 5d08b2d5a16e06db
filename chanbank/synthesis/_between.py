"""A prototype between its taps."""

import numpy as np

from chanbank.prototype.cosine_series import series_values

__all__ = ["between_taps"]

_REACH = 32  # taps on each side
_BETA = 20.0  # Kaiser window: 200 dB of rejection beyond 0.4 cycles per tap


def between_taps(prototype, positions):
    """g at any real positions in samples (tap i at position i); 0 outside.

    A prototype that is a cosine series is evaluated as one; any other is interpolated by a
    Kaiser-windowed sinc, which leaves a lowpass of up to 0.3 cycles per sample alone.
    """
    positions = np.asarray(positions, float)
    nearest = np.round(positions)
    if np.array_equal(nearest, positions):
        return _taps_at(prototype.taps, nearest.astype(np.int64))
    design = prototype.design
    if "series" in design:
        start, channels = design["series_start"], prototype.channels
        times = (positions + start) / channels
        inside = (positions > -start - 1e-9) & (positions < prototype.length - 1 + start + 1e-9)
        values = series_values(design["series"], prototype.length // channels, times)
        return np.where(inside, values, 0.0)
    base = np.floor(positions).astype(np.int64)
    part = positions - base
    out = np.zeros(positions.shape)
    for step in range(1 - _REACH, _REACH + 1):
        away = part - step
        window = np.i0(_BETA * np.sqrt(np.maximum(0, 1 - (away / _REACH) ** 2))) / np.i0(_BETA)
        out += _taps_at(prototype.taps, base + step) * np.sinc(away) * window
    return out


def _taps_at(taps, index):
    inside = (index >= 0) & (index < len(taps))
    return np.where(inside, taps[np.where(inside, index, 0)], 0.0)
