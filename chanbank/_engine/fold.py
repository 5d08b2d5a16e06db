"""The fold: rows of samples, weighted by the prototype, added up to the inputs of the DFTs.

Samples lie in a ring of rows, sample t in row t // M at column t % M. Frame n, with nD = r*M + c,
adds P rows of that ring: columns up to c take rows r - P + 1 .. r, the columns after it rows
r - P .. r - 1. Column and DFT point are thus the same number, t mod M: the mixer's rotation to
absolute phase costs nothing, and every load and store of samples is aligned. Only the taps are
read at a shift, and taps are few.

Frames whose positions differ by whole rows use the same taps for the same columns: up to eight of
them are folded together, so that a row is loaded once and feeds up to eight sums.
"""

import numpy as np
from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.lanes import INDEX, VECTOR_BYTES, Lanes, lane_bytes

__all__ = ["TILE", "fold_block", "fold_rows"]

# Taps held in registers at a time: 8 of 32 registers, or 4 of 16 on narrower machines.
_CHUNKS = (8, 4, 2, 1) if VECTOR_BYTES == 64 else (4, 2, 1)

# Columns (in vectors) folded for all frames before going on: the rows' pieces and their taps stay
# near, in the first-level cache for few frames and in the second for many.
TILE = 4096 // VECTOR_BYTES

_HALF = VECTOR_BYTES // 2
_LINE = 64  # bytes


@intrinsic(prefer_literal=True)
def _fold_group(
    typingctx,
    variant,
    together,
    rows,
    column,
    step,
    taps,
    tap_stride,
    count,
    out,
    stride,
    vectors,
    ahead,
):
    """out[f] = sum over p < count of row[p + f*step] * taps[p], f < together, oldest row first.

    `rows` is where the table holds the address of the oldest row, `column` the byte offset of the
    first column in it; `taps` and `out` are addresses, `tap_stride` and `stride` bytes. From
    `ahead` on (0: none) one cache line per vector and frame is fetched into the second-level cache.
    """
    frames = together.literal_value

    def codegen(context, builder, signature, args):
        _, _, rows, first_column, step, taps, tap_stride, count, out, stride, vectors, ahead = args
        lanes = Lanes(builder, variant.lane)
        sums = [cgutils.alloca_once(builder, lanes.full) for _ in range(frames)]
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            tap = lanes.add(taps, along if variant.real else lanes.times(loop.index, _HALF))
            column = lanes.add(first_column, along)
            with builder.if_then(builder.icmp_unsigned("!=", ahead, lanes.index(0))):
                line = lanes.add(ahead, lanes.times(loop.index, frames * _LINE))
                for frame in range(frames):
                    lanes.prefetch(lanes.add(line, frame * _LINE))
            for total in sums:
                builder.store(lanes.zero(), total)
            whole = _CHUNKS[0]
            chunks = builder.udiv(count, lanes.index(whole))
            with cgutils.for_range(builder, chunks) as chunk:
                first = lanes.times(chunk.index, whole)
                _add_chunk(lanes, variant, whole, sums, rows, tap, tap_stride, first, column, step)
            first = lanes.times(chunks, whole)
            for size in _CHUNKS[1:]:
                bit = builder.and_(count, lanes.index(size))
                with builder.if_then(builder.icmp_unsigned("!=", bit, lanes.index(0))):
                    _add_chunk(
                        lanes, variant, size, sums, rows, tap, tap_stride, first, column, step
                    )
                first = lanes.add(first, bit)
            for frame, total in enumerate(sums):
                place = lanes.add(lanes.add(out, lanes.times(stride, frame)), along)
                lanes.store(builder.load(total), place)
        return context.get_dummy_value()

    return types.void(variant, together, *[types.int64] * 10), codegen


def _add_chunk(lanes, variant, size, sums, rows, tap, tap_stride, first, column, step):
    """Add `size` consecutive rows to every sum, each frame's oldest first.

    The taps are loaded once for all frames. Where the frames' distance is known, a row that
    serves several frames is loaded once as well.
    """
    builder = lanes.builder
    weights = []
    for p in range(size):
        address = lanes.add(tap, lanes.times(lanes.add(first, p), tap_stride))
        if variant.real:
            weights.append(lanes.load(address))
        else:
            weights.append(lanes.doubled(lanes.load(address, lanes.half)))
    table = lanes.add(rows, lanes.times(first, 8))

    def row(entry):
        start = lanes.load(lanes.add(table, entry), INDEX, 8)
        return lanes.load(lanes.add(start, column))

    totals = [builder.load(total) for total in sums]
    if variant.step:
        for r in range((len(sums) - 1) * variant.step + size):
            users = [f for f in range(len(sums)) if 0 <= r - f * variant.step < size]
            if not users:
                continue
            samples = row(8 * r)
            for f in users:
                totals[f] = lanes.fma(samples, weights[r - f * variant.step], totals[f])
    else:
        for p in range(size):
            for f in range(len(sums)):
                samples = row(lanes.add(lanes.times(step, 8 * f), 8 * p))
                totals[f] = lanes.fma(samples, weights[p], totals[f])
    for total, value in zip(sums, totals, strict=True):
        builder.store(value, total)


@njit(nogil=True, error_model="numpy")
def fold_rows(
    variant, table, row, step, column, taps, tap_stride, count, out, stride, frames, vectors, ahead
):
    """Fold `vectors` vectors of columns for `frames` frames that lie `step` rows apart.

    `row` is the first frame's oldest row, `column` the byte offset of the first column, `taps` the
    address of its oldest tap, `out` of the first frame's result. Returns the next address to
    prefetch (see `fold_block`).
    """
    frame = 0
    while frame < frames:
        rows = table + 8 * (row + frame * step)
        here = out + frame * stride
        left = frames - frame
        if left >= 8:
            size = 8
            _fold_group(
                variant,
                8,
                rows,
                column,
                step,
                taps,
                tap_stride,
                count,
                here,
                stride,
                vectors,
                ahead,
            )
        elif left >= 4:
            size = 4
            _fold_group(
                variant,
                4,
                rows,
                column,
                step,
                taps,
                tap_stride,
                count,
                here,
                stride,
                vectors,
                ahead,
            )
        elif left >= 2:
            size = 2
            _fold_group(
                variant,
                2,
                rows,
                column,
                step,
                taps,
                tap_stride,
                count,
                here,
                stride,
                vectors,
                ahead,
            )
        else:
            size = 1
            _fold_group(
                variant,
                1,
                rows,
                column,
                step,
                taps,
                tap_stride,
                count,
                here,
                stride,
                vectors,
                ahead,
            )
        frame += size
        if ahead != 0:
            ahead += vectors * size * _LINE
    return ahead


@njit(nogil=True, error_model="numpy")
def fold_block(variant, bank, table, first, count, ahead, ahead_end):
    """Fold frames first .. first + count - 1, those that are whole rows apart together.

    While it computes it prefetches the samples of the next block, from `ahead` on (0: none), so
    that staging them will not wait for memory.
    """
    sample_bytes = bank.held * lane_bytes(variant)
    tap_bytes = lane_bytes(variant)
    per_vector = VECTOR_BYTES // sample_bytes
    tile = TILE * per_vector
    stride = bank.cycle * bank.folded_stride
    for start in range(0, bank.channels, tile):
        stop = min(start + tile, bank.channels)
        for member in range(min(bank.cycle, count)):
            frames = (count - member + bank.cycle - 1) // bank.cycle
            newest = (first + member) * bank.hop
            row = newest // bank.channels
            split = newest - row * bank.channels + 1
            out = bank.folded + member * bank.folded_stride
            if ahead >= ahead_end:
                ahead = 0
            # Columns before the split, then those behind it, which belong to one row earlier. The
            # last vector of the first part may run over the split; the second part starts with a
            # vector at the split itself and goes on aligned. Overlapping columns are computed
            # twice, to the same bits.
            if start < split:
                oldest = (row - bank.rows + 1) % bank.ring_rows
                taps = bank.taps + (bank.channels - split + start) * tap_bytes
                vectors = -(-(min(split, stop) - start) // per_vector)
                ahead = fold_rows(
                    variant,
                    table,
                    oldest,
                    bank.step,
                    start * sample_bytes,
                    taps,
                    bank.tap_stride,
                    bank.rows,
                    out + start * sample_bytes,
                    stride,
                    frames,
                    vectors,
                    ahead,
                )
            if split < stop:
                oldest = (row - bank.rows) % bank.ring_rows
                aligned = -(-split // per_vector) * per_vector
                if start < split < aligned:
                    fold_rows(
                        variant,
                        table,
                        oldest,
                        bank.step,
                        split * sample_bytes,
                        bank.taps,
                        bank.tap_stride,
                        bank.rows,
                        out + split * sample_bytes,
                        stride,
                        frames,
                        np.int64(1),
                        np.int64(0),
                    )
                column = max(start, aligned)
                if column < stop:
                    taps = bank.taps + (column - split) * tap_bytes
                    vectors = -(-(stop - column) // per_vector)
                    ahead = fold_rows(
                        variant,
                        table,
                        oldest,
                        bank.step,
                        column * sample_bytes,
                        taps,
                        bank.tap_stride,
                        bank.rows,
                        out + column * sample_bytes,
                        stride,
                        frames,
                        vectors,
                        ahead,
                    )
