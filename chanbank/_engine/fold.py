"""The fold: rows of samples, weighted by the prototype, added up to the inputs of the DFTs.

Samples lie in a ring of rows, sample t in row t // M at column t % M. Frame n, with nD = r*M + c,
adds P rows of that ring: columns up to c take rows r - P + 1 .. r, the columns after it rows
r - P .. r - 1. Column and DFT point are thus the same number, t mod M: the mixer's rotation to
absolute phase costs nothing, and every load and store of samples is aligned. Only the taps are
read at a shift, and taps are few.

Frames whose positions differ by whole rows use the same taps for the same columns: up to eight of
them are folded together, so that a row is loaded once and feeds up to eight sums.
"""

from numba import njit, types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.lanes import INDEX, VECTOR_BYTES, Lanes, is_real

__all__ = ["fold_columns"]

# Taps held in registers at a time: 8 of 32 registers, or 4 of 16 on narrower machines.
_CHUNKS = (8, 4, 2, 1) if VECTOR_BYTES == 64 else (4, 2, 1)

# Vectors of a row that are folded for all frames before going on: P + 8 rows of this width and
# their taps stay in the first-level cache.
_TILE = 1024 // VECTOR_BYTES


@intrinsic(prefer_literal=True)
def _fold_group(
    typingctx, variant, together, rows, column, step, taps, tap_stride, count, out, stride, vectors
):
    """out[f] = sum over p < count of row[p + f*step] * taps[p], f < together, oldest row first.

    `rows` is where the table holds the address of the oldest row, `column` the byte offset of the
    first column in it; `taps` and `out` are addresses, `tap_stride` and `stride` bytes.
    """
    frames = together.literal_value

    def codegen(context, builder, signature, args):
        _, _, rows, first_column, step, taps, tap_stride, count, out, stride, vectors = args
        lanes = Lanes(builder, variant.lane)
        sums = [cgutils.alloca_once(builder, lanes.full) for _ in range(frames)]
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            tap = lanes.add(taps, along if variant.real else lanes.times(loop.index, _HALF))
            column = lanes.add(first_column, along)
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

    return types.void(variant, together, *[types.int64] * 9), codegen


_HALF = VECTOR_BYTES // 2


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
def fold_columns(
    variant, table, row, step, taps, tap_stride, count, out, stride, frames, column, vectors
):
    """Fold `vectors` vectors of columns for `frames` frames that lie `step` rows apart.

    `column` is the byte offset of the first column within a row, `taps` the address of its oldest
    tap; `table` holds the rows' addresses twice over, so that no index needs to wrap.
    """
    tap_bytes = VECTOR_BYTES if is_real(variant) else VECTOR_BYTES // 2
    start = 0
    while start < vectors:
        width = min(_TILE, vectors - start)
        offset = column + start * VECTOR_BYTES
        tap = taps + start * tap_bytes
        target = out + offset
        frame = 0
        while frame < frames:
            rows = table + 8 * (row + frame * step)
            here = target + frame * stride
            left = frames - frame
            if left >= 8:
                _fold_group(
                    variant, 8, rows, offset, step, tap, tap_stride, count, here, stride, width
                )
                frame += 8
            elif left >= 4:
                _fold_group(
                    variant, 4, rows, offset, step, tap, tap_stride, count, here, stride, width
                )
                frame += 4
            elif left >= 2:
                _fold_group(
                    variant, 2, rows, offset, step, tap, tap_stride, count, here, stride, width
                )
                frame += 2
            else:
                _fold_group(
                    variant, 1, rows, offset, step, tap, tap_stride, count, here, stride, width
                )
                frame += 1
        start += width
