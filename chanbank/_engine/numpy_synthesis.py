"""The synthesis bank in NumPy: inverse DFTs of a batch of frames, then weighted overlap-add.

Frame n becomes v_n[m] = sum_k y[n, k] exp(2j pi k m / M), and output sample s = nD + d is

    z[s] = sum_j g[d + jD] v_{n-j}[(s - delay) mod M].

The rows v are kept turned so that their index counts from their own frame's first sample; then
every term is one slice of a row times one slice of the prototype, added oldest frame first.
"""

import numpy as np

from chanbank._engine.dft import BatchDft
from chanbank._engine.rotor import Rotor, times
from chanbank._engine.threads import Crew

__all__ = ["NumpySynthesisEngine"]

_BLOCK_SAMPLES = 1 << 14


class NumpySynthesisEngine:
    name = "numpy"

    def __init__(self, spec):
        self.spec = spec
        channels, hop = spec.channels, spec.hop
        real_dtype = np.float32 if spec.dtype == np.complex64 else np.float64
        self.half = spec.real and spec.turn == 0
        self.work_dtype = np.dtype(real_dtype) if self.half else spec.dtype
        self.reach = -(-len(spec.taps) // hop)  # frames that reach into one hop
        padded = np.zeros(self.reach * hop)
        padded[: len(spec.taps)] = spec.taps
        self.weights = padded.reshape(self.reach, hop).astype(real_dtype)
        self.batch = max(1, _BLOCK_SAMPLES // channels)
        kind = "real-inverse" if self.half else "inverse"
        self.crew = Crew(lambda: _Member(spec, self.batch, kind, self.work_dtype), spec.workers)
        self.mixer = Rotor(spec.turn) if spec.turn else None
        self.frame_mixer = Rotor((spec.turn * hop) % 1) if spec.turn and not spec.rotate else None
        self.block = self.batch * max(1, spec.workers)
        self.reset(0, 1)

    def reset(self, first_frame, antennas):
        self.frame = first_frame
        rows = self.reach - 1 + self.block
        self.history = np.zeros((antennas, rows, self.spec.channels), self.work_dtype)

    def get_state(self):
        return self.frame, self.history[:, : self.reach - 1].copy()

    def set_state(self, state):
        frame, held = state
        self.reset(frame, len(held))
        self.history[:, : self.reach - 1] = held

    def push(self, frames, gains, out):
        """Frames (antennas, n, columns) or (antennas, columns, n) into `out` (antennas, n*hop)."""
        if self.spec.channel_major:
            frames = frames.transpose(0, 2, 1)
        count = frames.shape[1]
        for start in range(0, count, self.block):
            size = min(self.block, count - start)
            place = out[:, start * self.spec.hop : (start + size) * self.spec.hop]
            self._block(frames[:, start : start + size], gains, place)

    def _block(self, frames, gains, out):
        spec, keep = self.spec, self.reach - 1
        antennas, size = frames.shape[:2]
        jobs = [(a, i) for a in range(antennas) for i in range(0, size, self.batch)]

        def transform(member, mine):
            for antenna, index in mine:
                part = frames[antenna, index : index + self.batch]
                rows = self.history[antenna, keep + index : keep + index + len(part)]
                member.rows(self, part, gains, self.frame + index, rows)

        def overlap(member, mine):
            for antenna, index in mine:
                stop = min(index + self.batch, size)
                rows = self.history[antenna, index : keep + stop]
                piece = out[antenna, index * spec.hop : stop * spec.hop]
                member.overlap_add(self, rows, self.frame + index, piece)

        self.crew.run(transform, jobs)
        self.crew.run(overlap, jobs)
        if keep:
            self.history[:, :keep] = self.history[:, size : size + keep].copy()
        self.frame += size


class _Member:
    """The buffers and the plan of one worker."""

    def __init__(self, spec, batch, kind, work_dtype):
        self.dft = BatchDft(spec.channels, batch, spec.dtype, kind)
        self.wide = np.empty((batch, 2 * spec.channels), work_dtype)
        self.sum = np.empty((batch, spec.hop), work_dtype)
        self.term = np.empty((batch, spec.hop), work_dtype)

    def rows(self, engine, frames, gains, first, rows):
        """Inverse DFTs of frames first, first + 1 ..., each turned to its own first sample."""
        spec, size = engine.spec, len(frames)
        source = self.dft.source[:size]
        if spec.columns is not None:
            source[...] = 0
        columns = slice(None) if spec.columns is None else spec.columns
        source[:, columns] = frames
        for factor in (gains, spec.column_weights):
            if factor is not None:
                factor = np.broadcast_to(factor.astype(spec.dtype), frames.shape)
                weighted = np.empty(frames.shape, spec.dtype)
                times(source[:, columns], factor, weighted)
                source[:, columns] = weighted
        if engine.frame_mixer is not None:
            phases = engine.frame_mixer.values(first, size).astype(spec.dtype)[:, None]
            times(source, phases, source)
        self.dft.execute()
        wave, channels = self.dft.target[:size], spec.channels
        wide = self.wide[:size]
        wide[:, :channels] = wave
        wide[:, channels:] = wave
        turned = np.lib.stride_tricks.sliding_window_view(wide, channels, axis=1)
        step = spec.hop % channels if spec.rotate else 0
        origin = (first * step - spec.delay) % channels
        rows[...] = turned[np.arange(size), (np.arange(size) * step + origin) % channels]

    def overlap_add(self, engine, rows, first, out):
        """Each hop of `out` from the `reach` rows that end with its own frame."""
        spec, size = engine.spec, len(rows) - engine.reach + 1
        total, term = self.sum[:size], self.term[:size]
        total[...] = 0
        for age in range(engine.reach - 1, -1, -1):
            frames = rows[engine.reach - 1 - age : engine.reach - 1 - age + size]
            done = 0
            while done < spec.hop:
                column = (age * spec.hop + done) % spec.channels
                take = min(spec.hop - done, spec.channels - column)
                place = slice(done, done + take)
                weights = engine.weights[age, place]
                source = frames[:, column : column + take]
                _scaled(source, weights, term[:, place])
                total[:, place] += term[:, place]
                done += take
        flat = total.reshape(-1)
        if engine.mixer is not None:
            phases = np.conj(engine.mixer.values(first * spec.hop - spec.delay, len(flat)))
            times(flat, phases.astype(spec.dtype), flat)
        out[...] = flat.real if spec.real else flat


def _scaled(source, weights, out):
    """Real weights times rows, complex rows as two real products (no fused arithmetic)."""
    if source.dtype.kind == "c":
        np.multiply(source.real, weights, out=out.real)
        np.multiply(source.imag, weights, out=out.imag)
    else:
        np.multiply(source, weights, out=out)
