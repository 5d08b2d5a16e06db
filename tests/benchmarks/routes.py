"""The ways to split a band that the benchmark sets side by side, each as a callable."""

import numpy as np
import pyfftw
import scipy.fft
import scipy.signal

from chanbank import AnalysisBank, ChannelPlan, Prototype

__all__ = [
    "Case",
    "fftw_batched",
    "fftw_in_cache",
    "mixers",
    "short_time_fft",
    "strided_einsum",
]


def aligned(shape, dtype):
    """An array on a cache line, its pages touched."""
    array = pyfftw.empty_aligned(shape, dtype, n=64)
    array.fill(0)
    return array


class Case:
    """One geometry with its input, its result array and its bank."""

    def __init__(self, channels, hop, taps_per_branch, samples, *, real=False, **options):
        self.channels, self.hop, self.real = channels, hop, real
        self.samples = samples // hop * hop
        generator = np.random.default_rng(channels + hop + taps_per_branch)
        length = channels * taps_per_branch
        window = scipy.signal.windows.kaiser(length, 9.0)
        sinc = np.sinc((np.arange(length) - (length - 1) / 2) / channels)
        self.taps = window * sinc / np.sum(window * sinc)
        self.rows = taps_per_branch
        plan = ChannelPlan(1.0, channels, hop, real=real)
        self.bank = AnalysisBank(plan, Prototype(self.taps, channels), **options)
        self.dtype = self.bank.dtype
        lane = np.float32 if self.dtype == np.complex64 else np.float64
        self.input = aligned(self.samples, lane if real else self.dtype)
        floats = self.input.view(lane)
        # A short random stretch repeated: the arithmetic does not look at the values.
        stretch = generator.standard_normal(min(len(floats), 1 << 16)).astype(lane)
        for start in range(0, len(floats), len(stretch)):
            floats[start : start + len(stretch)] = stretch[: len(floats) - start]
        self.frames = self.samples // hop
        columns = channels // 2 + 1 if real else channels
        channel_major = options.get("layout") == "channels"
        shape = (columns, self.frames) if channel_major else (self.frames, columns)
        self.output = aligned(shape, self.dtype)

    def push(self):
        self.bank.push(self.input, out=self.output)

    def error(self):
        """Largest error of some frames against direct sums, over sum(abs(h)) * max(abs(x))."""
        start = self.bank.next_sample
        self.bank.reset()
        self.push()
        generator = np.random.default_rng(1)
        wide = self.input.astype(np.float64 if self.real else np.complex128)
        worst = 0.0
        for frame in generator.integers(0, self.frames, 6):
            times = frame * self.hop - np.arange(len(self.taps))
            inside = times >= 0
            weighted = wide[times[inside]] * self.taps[inside]
            for column in generator.integers(0, self.output.shape[1], 6):
                turns = (column * times[inside]) % self.channels / self.channels
                exact = np.sum(weighted * np.exp(-2j * np.pi * turns))
                worst = max(worst, abs(self.output[frame, column] - exact))
        del start
        return float(worst / np.sum(np.abs(self.taps)) / np.max(np.abs(wide)))


def fftw_batched(case):
    """The DFTs alone: one FFTW plan over all frames, same arrays, measured planning."""
    width = case.input.itemsize
    frames = (case.samples - case.channels) // case.hop + 1
    windows = np.lib.stride_tricks.as_strided(
        case.input, (frames, case.channels), (case.hop * width, width)
    )
    held = case.input.copy()
    plan = pyfftw.FFTW(windows, case.output[:frames], axes=(1,), flags=("FFTW_MEASURE",))
    case.input[...] = held  # planning overwrites
    return plan.execute


def fftw_in_cache(case):
    """The DFTs given the bank's own treatment: blocks in cache, its stores, no fold."""
    from treated import transform_rows

    return transform_rows(case)


def strided_einsum(case):
    """The plain NumPy route: einsum over a strided view of the windows, scipy.fft over rows."""
    width = case.input.itemsize
    frames = (case.samples - len(case.taps)) // case.hop + 1
    windows = np.lib.stride_tricks.as_strided(
        case.input,
        (frames, case.rows, case.channels),
        (case.hop * width, case.channels * width, width),
    )
    weights = case.taps[::-1].reshape(case.rows, case.channels).astype(case.input.real.dtype)

    def run():
        return scipy.fft.fft(np.einsum("fpm,pm->fm", windows, weights), axis=1)

    return run


def short_time_fft(case, samples):
    """scipy.signal.ShortTimeFFT with the prototype as its window, on `samples` samples."""
    transform = scipy.signal.ShortTimeFFT(
        case.taps.astype(np.float32), case.hop, 1.0, fft_mode="twosided"
    )
    return lambda: transform.stft(case.input[:samples])


def mixers(case, samples, channels):
    """One mixer and scipy.signal.upfirdn for each of a few channels, on `samples` samples."""
    part = case.input[:samples]
    taps = case.taps.astype(np.float32)
    time = np.arange(samples)

    def run():
        for channel in channels:
            turns = (time * channel) % case.channels / case.channels
            oscillator = np.exp(-2j * np.pi * turns).astype(np.complex64)
            scipy.signal.upfirdn(taps, part * oscillator, 1, case.hop)

    return run
