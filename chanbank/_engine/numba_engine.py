"""The analysis bank through the compiled run: buffers, plan and workers."""

import math

import numpy as np

from chanbank._engine.buffers import (
    HEAD,
    LINE,
    Ring,
    address_or_zero,
    aligned_bytes,
    odd_lines,
    real_factors,
    split_factors,
    turn_words,
)
from chanbank._engine.driver import ANALYSIS, analysis_run
from chanbank._engine.fftw import make_plan
from chanbank._engine.move import STRIP_COLUMNS
from chanbank._engine.phase import MIX_BLOCK
from chanbank._engine.rotor import unit_circle
from chanbank._engine.sizes import (
    STREAM_BYTES,
    WORKER_SAMPLES,
    block_frames,
    frames_together,
    gather_frames,
    slot_frames,
    split_radix,
    tile_bytes,
)
from chanbank._engine.stage import FORMATS, ZEROS
from chanbank._engine.threads import Crew

__all__ = ["NumbaAnalysisEngine"]


class NumbaAnalysisEngine:
    name = "numba"

    def __init__(self, spec):
        self.spec = spec
        self.layout = layout = _Layout(spec)
        step = layout.step if layout.step <= 3 else 0
        self.run = analysis_run(layout.lane, not layout.paired, step, layout.radix)
        self.forms = _forms(spec.real)
        self.alone = spec.workers < 2
        self.hop, self.channel_major = spec.hop, spec.channel_major
        self.crew = Crew(lambda: _Worker(layout), max(1, spec.workers))
        self.reset(0, 1)

    def reset(self, first_sample, antennas):
        self.position = first_sample
        self.rings = [self.layout.ring() for _ in range(antennas)]
        self.spare = []

    def get_state(self):
        """The position and the samples that later frames need, as the NumPy engine keeps them."""
        count = self.layout.window - 1
        held = np.empty((len(self.rings), count), self.layout.ring_dtype)
        for ring, line in zip(self.rings, held, strict=True):
            for part, place in self._history(ring):
                line[part] = place
        return self.position, held

    def set_state(self, state):
        position, held = state
        self.reset(position, len(held))
        for ring, line in zip(self.rings, held, strict=True):
            for part, place in self._history(ring):
                place[...] = line[part]

    def _history(self, ring):
        """The last window - 1 samples, as pairs (slice of them, view of the ring)."""
        layout, channels = self.layout, self.spec.channels
        first = time = self.position - layout.window + 1
        while time < self.position:
            row, column = divmod(time, channels)
            count = min(channels - column, self.position - time)
            place = ring.rows[row % layout.ring_rows, column : column + count]
            yield slice(time - first, time - first + count), place
            time += count

    def push(self, samples, out, zero=0.0, scale=1.0):
        """Take samples (antennas, n), or (antennas, 2n) interleaved integers; fill `out`.

        With one antenna, both may lack that axis.
        """
        code, given, numbers = self.forms[samples.dtype]
        if not samples.flags.aligned:
            samples = samples.copy()
        form = (code, given, samples, zero, scale)
        self._push(form, samples.shape[-1] // numbers, out)

    def push_zeros(self, count, out):
        """Take `count` zero samples; once the window holds only zeros, frames are zeros too."""
        hop, layout = self.spec.hop, self.layout
        busy = min(count, layout.window + self.spec.channels)
        frames = -(-(self.position + busy) // hop) - -(-self.position // hop)
        form = (ZEROS, layout.held, out, 0.0, 1.0)  # no samples are read
        self._push(form, busy, out)
        if count > busy:
            self.reset(self.position + count - busy, len(self.rings))
            rest = out[:, :, frames:] if self.spec.channel_major else out[:, frames:]
            rest[...] = 0

    def _push(self, form, count, out):
        origin, hop = self.position, self.hop
        end = origin + count
        part = (origin, end, -(-origin // hop), -(-end // hop))
        if len(self.rings) == 1 and (self.alone or count < 2 * WORKER_SAMPLES):
            self._run(self.crew.members[0], self.rings[0], form, origin, 0, out, 0, part)
        else:
            self._deal(form, origin, out, part)
        self.position = end

    def _run(self, worker, ring, form, origin, samples_offset, out, out_offset, part):
        """One compiled call: samples and frames `part`, some bytes into the push's arrays."""
        code, given, samples, zero, scale = form
        begin, end, first, last = part
        frame_stride, column_stride = out.strides[-2:]
        if self.channel_major:
            frame_stride, column_stride = column_stride, frame_stride
        self.run(
            worker.address,
            ring.address,
            code,
            given,
            id(samples) + HEAD,
            samples_offset,
            origin,
            zero,
            scale,
            id(out) + HEAD,
            out_offset,
            frame_stride,
            column_stride,
            out.nbytes >= STREAM_BYTES and out.flags.aligned,
            begin,
            end,
            first,
            last,
        )

    def _deal(self, form, origin, out, part):
        """Antennas and stretches of frames to the workers, on threads."""
        samples, first = form[2], part[2]
        samples_apart = samples.strides[0] if samples.ndim == 2 else 0
        out_apart = out.strides[0] if out.ndim == 3 else 0
        frame_stride = out.strides[-1 if self.spec.channel_major else -2]

        def work(worker, jobs):
            for antenna, ring, part in jobs:
                there = antenna * out_apart + (part[2] - first) * frame_stride
                self._run(worker, ring, form, origin, antenna * samples_apart, out, there, part)

        self.crew.run(work, self._jobs(*part))

    def _jobs(self, origin, end, first, last):
        """The push in parts for the workers: (antenna, ring, (begin, end, first, last)).

        A part that starts within the push has a ring of its own, filled from the push itself, and
        from the antenna's ring where its first window reaches back before the push. The last
        part's ring carries the stream on.
        """
        hop, layout = self.spec.hop, self.layout
        parts = -(-len(self.crew.members) // len(self.rings))
        parts = max(1, min(parts, (end - origin) // WORKER_SAMPLES, last - first))
        marks = [first + (last - first) * part // parts for part in range(parts + 1)]
        while len(self.spare) < (parts - 1) * len(self.rings):
            self.spare.append(layout.ring())
        jobs = []
        for antenna, ring in enumerate(self.rings):
            here = ring
            for part in range(parts):
                begin = origin
                if part:
                    here = self.spare.pop(0)
                    start = marks[part] * hop - layout.window + 1
                    begin = max(origin, start)
                    if start < origin:
                        here.copy_from(ring)
                stop = end if part == parts - 1 else (marks[part + 1] - 1) * hop + 1
                jobs.append((antenna, here, (begin, stop, marks[part], marks[part + 1])))
            used = [job[1] for job in jobs[-parts:]]
            self.spare += used[:-1]
            self.rings[antenna] = used[-1]
        return jobs


def _forms(real):
    """For each dtype of samples: its code, numbers per sample, array elements per sample."""
    forms = {}
    for name, code in FORMATS.items():
        kind = np.dtype(name)
        given = 1 if real or kind.kind == "f" else 2
        forms[kind] = (code, given, 2 if kind.kind in "iu" and given == 2 else 1)
    return forms


class _Layout:
    """Sizes and constants of one bank, shared by its workers."""

    def __init__(self, spec):
        self.spec = spec
        channels, hop = spec.channels, spec.hop
        self.lane = np.dtype(spec.dtype).itemsize // 2
        self.paired = not spec.real or spec.turn != 0
        self.held = 2 if self.paired else 1
        self.rows = -(-len(spec.taps) // channels)
        self.window = self.rows * channels
        self.ring_dtype = np.dtype(
            spec.dtype if self.paired else (np.float32, np.float64)[self.lane // 8]
        )
        shared = math.gcd(channels, hop)
        self.cycle, self.step = channels // shared, hop // shared
        self.row_bytes = channels * self.held * self.lane
        self.row_stride = odd_lines(self.row_bytes)
        self.turned = not spec.rotate and (hop != channels or spec.turn != 0)
        # A split DFT of real samples is one of half as many complex ones.
        points, self.radix = channels if self.paired else channels // 2, 1
        if not self.turned and self.row_bytes == points * 2 * self.lane:
            self.radix = split_radix(points, self.row_bytes)
        bins = channels if self.paired else channels // 2 + 1
        self.bins_stride = odd_lines(bins * 2 * self.lane)
        self.folded_stride, self.piece_stride = self.row_stride, self.bins_stride
        if self.radix > 1:
            self.piece_stride = odd_lines(points // self.radix * 2 * self.lane)
            self.folded_stride = self.radix * self.piece_stride + LINE
            if self.paired:
                self.bins_stride = self.folded_stride
        self.slot = slot_frames(channels)
        frames = block_frames(self.row_bytes, self.cycle, self.rows)
        self.block = max(self.slot, frames // self.slot * self.slot)
        self.tile = tile_bytes(self.rows, self.step, self.radix)
        self.together = frames_together(self.rows, self.step, min(self.tile, self.row_bytes))
        self.gather = self.slot
        if spec.channel_major:
            self.gather = gather_frames(self.row_bytes, self.block)
        self.ring_rows = self.rows + 2 + -(-(self.block - 1) * hop // channels)
        # Of a split DFT the plan makes all pieces of one frame, which are rows to it.
        self.plan = make_plan(
            channels if self.radix == 1 else points // self.radix,
            self.slot * self.radix,
            spec.dtype,
            "forward" if self.paired or self.radix > 1 else "real",
            self.folded_stride if self.radix == 1 else self.piece_stride,
            self.piece_stride,
        )
        self.factors = self.real_factors = None
        if self.radix > 1:
            self.factors = split_factors(points, self.radix, self.piece_stride, spec.dtype, -1)
            if not self.paired:
                self.real_factors = real_factors(channels, spec.dtype)
        self.taps, self.tap_stride = _tap_rows(spec.taps, self.rows, channels, self.lane)
        self.columns = None
        if spec.columns is not None:
            pieces = self.radix if self.paired else 1
            outer, inner = np.divmod(np.array(spec.columns, np.int64), pieces)
            self.columns = inner * self.piece_stride + outer * 2 * self.lane
        self.mixer = None
        if spec.turn:
            turn = spec.turn
            table = unit_circle((turn.numerator * t for t in range(MIX_BLOCK)), turn.denominator)
            self.mixer = table.astype(spec.dtype)

    def ring(self):
        return Ring(self.ring_rows, self.row_stride, self.row_bytes, self.ring_dtype)


class _Worker:
    """The buffers of one thread, and the record that describes them to compiled code."""

    def __init__(self, layout):
        spec = layout.spec
        self.folded = aligned_bytes(
            -(-layout.block // layout.slot) * layout.slot * layout.folded_stride
        )
        self.bins = aligned_bytes(
            -(-layout.gather // layout.slot) * layout.slot * layout.bins_stride
        )
        self.turned = aligned_bytes(layout.slot * layout.folded_stride) if layout.turned else None
        self.halves = self.line = None
        if layout.real_factors is not None:
            self.halves = aligned_bytes(layout.folded_stride)
            self.line = aligned_bytes(layout.bins_stride)
        strip_stride = odd_lines(layout.gather * 2 * layout.lane)
        self.strip = aligned_bytes(STRIP_COLUMNS * strip_stride) if spec.channel_major else None
        self.records = np.zeros(1, ANALYSIS)
        self.address = self.records.ctypes.data
        self.record = record = self.records[0]
        for name, value in {
            "channels": spec.channels,
            "hop": spec.hop,
            "rows": layout.rows,
            "cycle": layout.cycle,
            "step": layout.step,
            "ring_rows": layout.ring_rows,
            "block": layout.block,
            "tile": layout.tile,
            "together": layout.together,
            "gather": layout.gather,
            "slot": layout.slot,
            "held": layout.held,
            "rotate": spec.rotate,
            "channel_major": spec.channel_major,
            "column_count": spec.column_count,
            "columns": address_or_zero(layout.columns),
            "taps": address_or_zero(layout.taps),
            "tap_stride": layout.tap_stride,
            "folded": address_or_zero(self.folded),
            "folded_stride": layout.folded_stride,
            "turned": address_or_zero(self.turned),
            "bins": address_or_zero(self.bins),
            "bins_stride": layout.bins_stride,
            "strip": address_or_zero(self.strip),
            "strip_stride": strip_stride,
            "piece_stride": layout.piece_stride,
            "factors": address_or_zero(layout.factors),
            "halves": address_or_zero(self.halves),
            "line": address_or_zero(self.line),
            "real_factors": address_or_zero(layout.real_factors),
            "execute": layout.plan.execute,
            "plan": layout.plan.address,
            "mix_table": address_or_zero(layout.mixer),
        }.items():
            record[name] = value
        record["mix_high"], record["mix_low"] = turn_words(spec.turn)
        # Frame phase takes the mixer's rotation back: exp(+2j pi turn n D).
        record["hop_high"], record["hop_low"] = turn_words(spec.turn * spec.hop)


def _tap_rows(taps, rows, channels, lane):
    """The taps reversed in time, one row per branch tap, with room for a vector's overrun."""
    kind = np.float32 if lane == 4 else np.float64
    stride = odd_lines(channels * lane)
    memory = aligned_bytes(rows * stride)
    padded = np.zeros(rows * channels)
    padded[: len(taps)] = taps
    table = memory.view(kind).reshape(rows, stride // lane)
    table[:, :channels] = padded[::-1].reshape(rows, channels)
    return memory, stride
