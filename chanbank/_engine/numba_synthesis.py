"""The synthesis bank through the compiled run: buffers, plan and workers."""

import math

import numpy as np

from chanbank._engine.buffers import (
    LINE,
    Ring,
    address_or_zero,
    aligned_bytes,
    data_address,
    odd_lines,
    split_factors,
    turn_words,
)
from chanbank._engine.fftw import make_plan
from chanbank._engine.phase import MIX_BLOCK
from chanbank._engine.rotor import unit_circle
from chanbank._engine.sizes import (
    STREAM_BYTES,
    WORKER_SAMPLES,
    block_frames,
    gather_frames,
    slot_frames,
    split_radix,
    tile_bytes,
)
from chanbank._engine.threads import Crew
from chanbank._engine.unfold import SYNTHESIS, synthesis_run

__all__ = ["NumbaSynthesisEngine"]


class NumbaSynthesisEngine:
    name = "numba"

    def __init__(self, spec):
        self.spec = spec
        self.layout = layout = _Layout(spec)
        step = layout.cycle if layout.cycle <= 4 else 0
        self.run = synthesis_run(layout.lane, layout.half, step, layout.radix)
        self.crew = Crew(lambda: _Worker(layout), max(1, spec.workers))
        self.weights = (None, None)
        self.reset(0, 1)

    def reset(self, first_frame, antennas):
        self.frame = first_frame
        self.rings = [self.layout.ring() for _ in range(antennas)]
        self.spare = []

    def get_state(self):
        """The next frame and the rows that reach beyond it, as the NumPy engine keeps them."""
        keep, spec = self.layout.reach - 1, self.spec
        held = np.zeros((len(self.rings), keep, spec.channels), self.layout.ring_dtype)
        for ring, rows in zip(self.rings, held, strict=True):
            for index, frame in enumerate(range(self.frame - keep, self.frame)):
                origin = (frame * spec.hop - spec.delay) % spec.channels
                rows[index] = np.roll(ring.rows[frame % self.layout.ring_rows], -origin)
        return self.frame, held

    def set_state(self, state):
        first_frame, held = state
        self.reset(first_frame, len(held))
        spec = self.spec
        for ring, rows in zip(self.rings, held, strict=True):
            for index, row in enumerate(rows):
                frame = first_frame - len(rows) + index
                origin = (frame * spec.hop - spec.delay) % spec.channels
                ring.rows[frame % self.layout.ring_rows] = np.roll(row, origin)

    def push(self, frames, gains, out):
        """Frames (antennas, n, columns) or (antennas, columns, n) into `out` (antennas, n*hop)."""
        if frames.dtype != self.spec.dtype or not frames.flags.aligned:
            frames = frames.astype(self.spec.dtype)
        self._set_weights(gains)
        first = self.frame
        last = first + frames.shape[2 if self.spec.channel_major else 1]
        stride = frames.strides[1]
        apart = frames.strides[2 if self.spec.channel_major else 1]
        stream = out.nbytes >= STREAM_BYTES and out.flags.aligned
        source, target = data_address(frames), data_address(out)

        def work(worker, jobs):
            for antenna, ring, (begin, start, stop) in jobs:
                self.run(
                    worker.address,
                    ring.address,
                    source + antenna * frames.strides[0] + (begin - first) * apart,
                    stride,
                    target
                    + antenna * out.strides[0]
                    + (start - first) * self.spec.hop * out.itemsize,
                    stream,
                    begin,
                    start,
                    stop,
                )

        samples = (last - first) * self.spec.hop
        if len(self.crew.members) == 1 or samples * len(self.rings) < 2 * WORKER_SAMPLES:
            work(self.crew.members[0], [(a, r, (first, first, last)) for a, r in self._numbered()])
        else:
            self.crew.run(work, self._jobs(first, last))
        self.frame = last

    def _numbered(self):
        return list(enumerate(self.rings))

    def _jobs(self, first, last):
        """The push in parts for the workers: (antenna, ring, (first to take, first hop, last)).

        A part that starts within the push has a ring of its own; it takes the frames that reach
        into its first hop once more, and those from before the push out of the antenna's ring.
        """
        layout = self.layout
        parts = -(-len(self.crew.members) // len(self.rings))
        parts = max(1, min(parts, (last - first) * self.spec.hop // WORKER_SAMPLES))
        marks = [first + (last - first) * part // parts for part in range(parts + 1)]
        while len(self.spare) < (parts - 1) * len(self.rings):
            self.spare.append(layout.ring())
        jobs = []
        for antenna, ring in self._numbered():
            here = ring
            for part in range(parts):
                begin = marks[part]
                if part:
                    here = self.spare.pop(0)
                    begin = max(first, marks[part] - layout.reach + 1)
                    if begin == first:
                        here.copy_from(ring)
                jobs.append((antenna, here, (begin, marks[part], marks[part + 1])))
            used = [job[1] for job in jobs[-parts:]]
            self.spare += used[:-1]
            self.rings[antenna] = used[-1]
        return jobs

    def _set_weights(self, gains):
        """Gains and column weights as one factor for each DFT point."""
        if gains is self.weights[0] and (gains is not None or self.weights[1] is not None):
            return
        spec, factor = self.spec, None
        if gains is not None or spec.column_weights is not None:
            factor = np.ones(spec.column_count, np.complex128)
            for part in (gains, spec.column_weights):
                if part is not None:
                    factor = factor * part
            whole = np.zeros(self.layout.given_stride // spec.dtype.itemsize, spec.dtype)
            whole[self.layout.places // spec.dtype.itemsize] = factor
            factor = whole
        self.weights = (gains, factor)
        for worker in self.crew.members:
            worker.record["weights"] = address_or_zero(factor)


class _Layout:
    """Sizes and constants of one bank, shared by its workers."""

    def __init__(self, spec):
        self.spec = spec
        channels, hop = spec.channels, spec.hop
        self.lane = np.dtype(spec.dtype).itemsize // 2
        self.half = spec.real and not spec.turn
        self.held = 1 if self.half else 2
        self.bins = channels // 2 + 1 if self.half else channels
        self.reach = -(-len(spec.taps) // hop)
        self.cycle = channels // math.gcd(channels, hop)
        float_type = (np.float32, np.float64)[self.lane // 8]
        self.ring_dtype = np.dtype(float_type if self.half else spec.dtype)
        self.row_bytes = channels * self.held * self.lane
        self.row_stride = odd_lines(self.row_bytes)
        self.radix = 1
        if spec.rotate and not self.half:
            self.radix = split_radix(channels, self.row_bytes)
        self.piece_stride = odd_lines(self.bins // self.radix * 2 * self.lane)
        self.given_stride = self.piece_stride
        if self.radix > 1:
            self.given_stride = self.radix * self.piece_stride + LINE
        self.summed_stride = odd_lines(hop * self.held * self.lane)
        self.slot = slot_frames(channels)
        frames = block_frames(self.row_bytes, self.cycle, self.reach)
        if spec.channel_major:
            frames = max(frames, gather_frames(self.row_bytes, 1) // 2)
        self.block = max(self.slot, frames // self.slot * self.slot)
        self.tile = tile_bytes(self.reach, self.cycle, self.radix)
        self.gather = self.block if spec.channel_major else self.slot
        self.ring_rows = self.reach + self.block + self.slot
        self.plan = make_plan(
            channels // self.radix,
            self.slot * self.radix,
            spec.dtype,
            "real-inverse" if self.half else "inverse",
            self.piece_stride,
            self.row_stride if self.radix == 1 else self.piece_stride,
        )
        self.factors = None
        if self.radix > 1:
            self.factors = split_factors(channels, self.radix, self.piece_stride, spec.dtype, 1)
        self.taps, self.tap_stride = _tap_rows(spec.taps, self.reach, hop, self.lane)
        # Where the frames' columns lie in a given row.
        columns = np.arange(self.bins) if spec.columns is None else np.array(spec.columns)
        outer, inner = np.divmod(columns.astype(np.int64), self.radix)
        self.places = inner * self.piece_stride + outer * 2 * self.lane
        self.mixer = None
        if spec.turn:
            back = -spec.turn
            table = unit_circle((back.numerator * t for t in range(MIX_BLOCK)), back.denominator)
            self.mixer = table.astype(spec.dtype)

    def ring(self):
        return Ring(self.ring_rows, self.row_stride, self.row_bytes, self.ring_dtype)


class _Worker:
    """The buffers of one thread, and the record that describes them to compiled code."""

    def __init__(self, layout):
        spec = layout.spec
        gather = -(-layout.gather // layout.slot) * layout.slot
        self.given = aligned_bytes(gather * layout.given_stride)
        self.made = aligned_bytes(layout.slot * max(layout.row_stride, layout.given_stride))
        self.summed = aligned_bytes(layout.block * layout.summed_stride)
        self.records = np.zeros(1, SYNTHESIS)
        self.address = self.records.ctypes.data
        self.record = record = self.records[0]
        for name, value in {
            "channels": spec.channels,
            "hop": spec.hop,
            "rows": layout.reach,
            "cycle": layout.cycle,
            "ring_rows": layout.ring_rows,
            "block": layout.block,
            "tile": layout.tile,
            "gather": layout.gather,
            "slot": layout.slot,
            "held": layout.held,
            "rotate": spec.rotate,
            "channel_major": spec.channel_major,
            "real_part": spec.real and not layout.half,
            "delay": spec.delay,
            "column_count": spec.column_count,
            "columns": 0 if spec.columns is None else layout.places.ctypes.data,
            "taps": address_or_zero(layout.taps),
            "tap_stride": layout.tap_stride,
            "given": address_or_zero(self.given),
            "given_stride": layout.given_stride,
            "made": address_or_zero(self.made),
            "made_stride": layout.row_stride,
            "row_stride": layout.row_stride,
            "summed": address_or_zero(self.summed),
            "summed_stride": layout.summed_stride,
            "piece_stride": layout.piece_stride,
            "factors": address_or_zero(layout.factors),
            "execute": layout.plan.execute,
            "plan": layout.plan.address,
            "mix_table": address_or_zero(layout.mixer),
        }.items():
            record[name] = value
        record["mix_high"], record["mix_low"] = turn_words(-spec.turn)
        record["hop_high"], record["hop_low"] = turn_words(-spec.turn * spec.hop)


def _tap_rows(taps, reach, hop, lane):
    """Row p holds the taps for the p-th oldest frame that reaches a hop."""
    kind = np.float32 if lane == 4 else np.float64
    stride = odd_lines(hop * lane)
    memory = aligned_bytes(reach * stride)
    padded = np.zeros(reach * hop)
    padded[: len(taps)] = taps
    memory.view(kind).reshape(reach, stride // lane)[:, :hop] = padded.reshape(reach, hop)[::-1]
    return memory, stride
