"""The analysis bank in NumPy: blocked, for machines without the compiled engine.

Samples enter a linear buffer behind the last P*M - 1 of the stream. A frame's window is P rows of
M samples of that buffer; the rows, weighted by the prototype, add up to one row (the fold), which
a DFT turns into a frame. Rows are added oldest first for every frame alike, and all DFTs run
through one plan of fixed size, so the bits do not depend on how the stream is cut.
"""

import numpy as np

from chanbank._engine.convert import to_working
from chanbank._engine.dft import BatchDft
from chanbank._engine.rotor import Rotor, times
from chanbank._engine.threads import Crew

__all__ = ["NumpyAnalysisEngine"]

# Samples folded and transformed at a time: both buffers stay in the second-level cache.
_BLOCK_SAMPLES = 1 << 15


class NumpyAnalysisEngine:
    name = "numpy"

    def __init__(self, spec):
        self.spec = spec
        channels = spec.channels
        self.rows = -(-len(spec.taps) // channels)
        self.window = self.rows * channels
        self.complex_work = not spec.real or spec.turn != 0
        real_dtype = np.float32 if spec.dtype == np.complex64 else np.float64
        self.work_dtype = spec.dtype if self.complex_work else np.dtype(real_dtype)
        self.weights = _row_weights(spec.taps, self.rows, channels, real_dtype, self.complex_work)
        self.rotor = Rotor(spec.turn) if spec.turn else None
        self.batch = max(1, _BLOCK_SAMPLES // channels)
        kind = "forward" if self.complex_work else "real"
        self.crew = Crew(lambda: _Member(channels, self.batch, spec.dtype, kind), spec.workers)
        self.reset(0, 1)

    def reset(self, first_sample, antennas):
        self.position = first_sample
        self.chunk = max(self.window, 4 * _BLOCK_SAMPLES)
        self.buffer = np.zeros((antennas, self.window - 1 + self.chunk), self.work_dtype)
        self.filled = self.window - 1  # samples in the buffer, the newest of them at position - 1

    def get_state(self):
        held = self.buffer[:, self.filled - (self.window - 1) : self.filled]
        return self.position, held.copy()

    def set_state(self, state):
        position, held = state
        self.reset(position, len(held))
        self.buffer[:, : self.window - 1] = held

    def push(self, samples, out, zero=0.0, scale=1.0):
        """Take samples (antennas, n), or (antennas, 2n) interleaved integers; fill `out`.

        With one antenna, both may lack that axis.
        """
        if samples.ndim == 1:
            samples, out = samples[None], out[None]
        per_sample = 2 if samples.dtype.kind in "iu" and not self.spec.real else 1
        count = samples.shape[1] // per_sample
        done = frames = 0
        while done < count:
            take = min(count - done, self.chunk)
            self._make_room(take)
            target = self.buffer[:, self.filled : self.filled + take]
            piece = samples[:, done * per_sample : (done + take) * per_sample]
            to_working(piece, target, zero, scale)
            if self.rotor is not None:
                phases = self.rotor.values(self.position, take).astype(self.spec.dtype)
                times(target, phases, target)
            frames += self._advance(take, out, frames)
            done += take

    def push_zeros(self, count, out):
        """Take `count` zero samples; once the window holds only zeros, frames are zeros too."""
        busy = min(count, self.window - 1)
        frames = 0
        done = 0
        while done < busy:
            take = min(busy - done, self.chunk)
            self._make_room(take)
            self.buffer[:, self.filled : self.filled + take] = 0
            frames += self._advance(take, out, frames)
            done += take
        self.position += count - busy
        _frames_of(out, self.spec, frames, None)[...] = 0

    def _make_room(self, count):
        if self.filled + count > self.buffer.shape[1]:
            keep = self.window - 1
            self.buffer[:, :keep] = self.buffer[:, self.filled - keep : self.filled].copy()
            self.filled = keep

    def _advance(self, count, out, written):
        """Frames of the `count` samples just placed behind `filled`; returns how many."""
        hop = self.spec.hop
        first = -(-self.position // hop)
        frames = -(-(self.position + count) // hop) - first
        # The window of frame n starts window - 1 samples before sample n*hop.
        start = self.filled - (self.window - 1) + first * hop - self.position
        jobs = [
            (antenna, index, min(self.batch, frames - index))
            for antenna in range(len(self.buffer))
            for index in range(0, frames, self.batch)
        ]

        def run(member, mine):
            for antenna, index, size in mine:
                member.frames(self, antenna, start + index * hop, first + index, size)
                _deliver(self.spec, member.dft.target[:size], out[antenna], written + index)

        self.crew.run(run, jobs)
        self.filled += count
        self.position += count
        return frames


class _Member:
    """The buffers and the plan of one worker."""

    def __init__(self, channels, batch, dtype, kind):
        self.dft = BatchDft(channels, batch, dtype, kind, room=1)
        self.wide = np.empty((batch, 2 * channels), self.dft.source.dtype)

    def frames(self, engine, antenna, start, first, size):
        """Fold and transform frames first .. first + size - 1, whose windows begin at `start`."""
        spec, channels = engine.spec, engine.spec.channels
        line = engine.buffer[antenna]
        width = line.itemsize
        windows = np.lib.stride_tricks.as_strided(
            line[start:],
            (size, engine.rows, channels),
            (spec.hop * width, channels * width, width),
            writeable=False,
        )
        source = self.dft.source[:size]
        # Sample t of a frame goes to point t mod M: with absolute phase that is the mixer's
        # rotation, a circular shift by the window's first sample, at no cost in arithmetic.
        if not spec.rotate or spec.hop == channels:
            # The same shift for every frame, by one: a window begins one sample after a multiple
            # of M. The row's last point runs over its end and is fetched back to its start.
            over = self.dft.wide[:size]
            shift = 1 % channels
            _fold(windows, engine.weights, over[:, shift : shift + channels])
            over[:, :shift] = over[:, channels : channels + shift]
        else:
            wide = self.wide[:size]
            _fold(windows, engine.weights, wide[:, :channels])
            wide[:, channels:] = wide[:, :channels]
            residue = (np.arange(size) * (spec.hop % channels)) % channels
            shifts = (residue + (first * spec.hop - engine.window + 1) % channels) % channels
            turned = np.lib.stride_tricks.sliding_window_view(wide, channels, axis=1)
            source[...] = turned[np.arange(size), channels - shifts]
        self.dft.execute()
        if engine.rotor is not None and not spec.rotate:
            turn = engine.spec.turn * spec.hop
            phases = np.conj(_frame_rotor(engine, turn).values(first, size))
            frames = self.dft.target[:size]
            times(frames, phases.astype(spec.dtype)[:, None], frames)


def _frame_rotor(engine, turn):
    if not hasattr(engine, "frame_rotor"):
        engine.frame_rotor = Rotor(turn % 1)
    return engine.frame_rotor


def _row_weights(taps, rows, channels, real_dtype, complex_work):
    """Time-reversed taps, (P, M), each doubled for I and Q where the fold runs on floats."""
    padded = np.zeros(rows * channels)
    padded[: len(taps)] = taps
    weights = padded[::-1].reshape(rows, channels).astype(real_dtype)
    return np.ascontiguousarray(np.repeat(weights, 2 if complex_work else 1, axis=1))


def _fold(windows, weights, target):
    """target[f, m] = sum_p windows[f, p, m] * weights[p, m], rows oldest first."""
    if windows.dtype.kind == "c":
        windows = _as_reals(windows)
        target = _as_reals(target)
    if windows.shape[2] > 8:
        np.einsum("fpm,pm->fm", windows, weights, out=target)
        return
    # A narrow fold: einsum would make the sum over rows its inner loop, whose order of addition
    # depends on the number of frames.
    np.multiply(windows[:, 0], weights[0], out=target)
    for row in range(1, windows.shape[1]):
        target += windows[:, row] * weights[row]


def _as_reals(array):
    """A complex array with contiguous last axis as twice as many reals (also when strided)."""
    real = array.real.dtype
    return np.lib.stride_tricks.as_strided(
        array.view(real) if array.flags.c_contiguous else array.real,
        (*array.shape[:-1], 2 * array.shape[-1]),
        (*array.strides[:-1], real.itemsize),
        writeable=array.flags.writeable,
    )


def _frames_of(out, spec, start, stop):
    if spec.channel_major:
        return out[..., start:stop]
    return out[..., start:stop, :]


def _deliver(spec, frames, out, start):
    """Copy finished frames (count, bins) to their place in one antenna's output."""
    place = _frames_of(out, spec, start, start + len(frames))
    if spec.columns is not None:
        frames = frames[:, spec.columns]
    place[...] = frames.T if spec.channel_major else frames
