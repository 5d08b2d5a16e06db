"""Noise power in one channel's output, for banks too large to be swept line by line.

The noise is periodic with equal lines of random phase, and is run from several sample phases of
the hop at once: lines that fold onto each other then meet in other phases each time, and most of
the chance in their sum cancels.
"""

import numpy as np
import scipy.fft

__all__ = ["BIN_WIDTH", "folded_power", "noise_power"]

_FRAMES, _PHASES, _DRAWS = 512, 4, 3
BIN_WIDTH = 1 / _FRAMES  # in cycles per frame


def _runs(driver, column, keep):
    """Frames (phases, N) of a channel for each draw; `keep` says which lines are present."""
    hop, skip = driver.hop, driver.settle()
    period = _FRAMES * hop
    present = keep(np.arange(period) / period)
    for _ in range(_DRAWS):
        turns = driver.rng.random(period, np.float32) * np.float32(2 * np.pi)
        spectrum = np.exp(1j * turns)
        spectrum *= present
        signal = scipy.fft.ifft(spectrum, overwrite_x=True) * np.sqrt(period)
        frames = np.empty((_PHASES, _FRAMES), np.complex128)
        for phase in range(_PHASES):
            late = np.roll(signal, -(phase * hop) // _PHASES)
            fed = np.resize(late, skip * hop + period)[None]
            frames[phase] = driver.frames(fed, skip, _FRAMES, [column])[0, :, 0]
        yield frames


def noise_power(driver, column, keep):
    """Mean output power for noise of unit density on the lines kept, and its standard error."""
    parts = [np.mean(np.abs(frames) ** 2) for frames in _runs(driver, column, keep)]
    return float(np.mean(parts)), float(np.std(parts, ddof=1) / np.sqrt(len(parts)))


def folded_power(driver, column, keep, low, high):
    """The same, counting only output frequencies low..high (cycles per sample of the input)."""
    # The share of each bin, one step wide, that lies in the band, in steps around its middle.
    bins = np.arange(_FRAMES) - 0.5 * (low + high) * _FRAMES * driver.hop
    away = np.abs(np.mod(bins + _FRAMES / 2, _FRAMES) - _FRAMES / 2)
    inside = np.clip(0.5 * (high - low) * _FRAMES * driver.hop - away + 0.5, 0.0, 1.0)
    parts = []
    for frames in _runs(driver, column, keep):
        spectrum = np.abs(scipy.fft.fft(frames, axis=1)) ** 2 / _FRAMES**2
        parts.append((spectrum @ inside).mean())
    return float(np.mean(parts)), float(np.std(parts, ddof=1) / np.sqrt(len(parts)))
