"""Moves: samples and frames from buffer to buffer, and results to where they belong.

A result much larger than the caches is written past them (non-temporal stores): an ordinary store
would first read every line of memory that it is about to replace. Smaller results are written the
ordinary way, since a reader will soon want them.
"""

import numpy as np
from llvmlite import ir
from numba import carray, types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.buffers import LINE
from chanbank._engine.compiling import kernel
from chanbank._engine.lanes import INDEX, VECTOR_BYTES, Lanes, address_as_pointer, lane_bytes

__all__ = [
    "STRIP_COLUMNS",
    "copy_bytes",
    "copy_columns",
    "fetch_lines",
    "transpose_frames",
    "transpose_strips",
]

# Channels transposed into a strip at a time.
STRIP_COLUMNS = 8

# Vectors in a cache line.
_A_LINE = LINE // VECTOR_BYTES


# Lines asked for at a time. A core keeps some thirty loads from memory under way, and drops or
# waits for what is asked beyond.
_BURST = 32


@intrinsic
def _fetch_line(typingctx, address):
    """Ask for a cache line, to have it in the second level when it is read; any address will do."""

    def codegen(context, builder, signature, args):
        word = ir.IntType(32)
        kind = ir.FunctionType(ir.VoidType(), [cgutils.voidptr_t, word, word, word])
        fetch = cgutils.get_or_insert_function(builder.module, kind, "llvm.prefetch.p0")
        read, second_level, data = (ir.Constant(word, number) for number in (0, 2, 1))
        pointer = builder.inttoptr(args[0], cgutils.voidptr_t)
        builder.call(fetch, [pointer, read, second_level, data])
        return context.get_dummy_value()

    return types.void(types.int64), codegen


@kernel
def fetch_lines(place, end):
    """Have the next lines of the bytes place .. end - 1 fetched; returns the first not asked for.

    A loop that does nothing but read from memory waits for it. Called between pieces of work on
    data in cache, this lets memory deliver while they are done.
    """
    stop = min(end, place + _BURST * LINE)
    while place < stop:
        _fetch_line(place)
        place += LINE
    return place


@intrinsic(prefer_literal=True)
def _copy_whole(typingctx, unit, stream, target, source, count):
    """`count` units of 4 or 8 bytes or of one vector each; `stream` as in Lanes.store."""
    size, past = unit.literal_value, bool(stream.literal_value)
    kind = ir.IntType(8 * size) if size <= 8 else ir.VectorType(INDEX, size // 8)

    def codegen(context, builder, signature, args):
        _, _, target, source, count = args
        lanes = Lanes(builder, 4)
        with cgutils.for_range(builder, count) as loop:
            along = lanes.times(loop.index, size)
            value = lanes.load(lanes.add(source, along), kind, 4)
            lanes.store(value, lanes.add(target, along), align=size if past else 4, stream=past)
        return context.get_dummy_value()

    return types.void(unit, stream, types.int64, types.int64, types.int64), codegen


@kernel
def copy_bytes(target, source, size, stream):
    """`size` bytes, a multiple of 4 (of 8 if `stream`); `stream` writes past the caches."""
    if stream:
        # Non-temporal vectors must be aligned; words fill the ends of the run, and the processor
        # joins them with their neighbours' words into whole lines.
        head = min(-target % VECTOR_BYTES, size)
        _copy_whole(8, True, target, source, head // 8)
        body = (size - head) // VECTOR_BYTES
        _copy_whole(VECTOR_BYTES, True, target + head, source + head, body)
        done = head + body * VECTOR_BYTES
        _copy_whole(8, True, target + done, source + done, (size - done) // 8)
    else:
        body = size // VECTOR_BYTES
        _copy_whole(VECTOR_BYTES, False, target, source, body)
        done = body * VECTOR_BYTES
        _copy_whole(8, False, target + done, source + done, (size - done) // 8)
        if size % 8:
            _copy_whole(4, False, target + size - 4, source + size - 4, 1)


@kernel
def copy_columns(variant, target, step, source, columns, count):
    """The chosen DFT points of one frame, `step` bytes apart in the result.

    `columns` is the address of `count` words: each point's bytes from `source` on.
    """
    chosen = carray(address_as_pointer(columns), (count,), np.int64)
    size = 2 * lane_bytes(variant)
    for i in range(count):
        _copy_whole(8, False, target + i * step, source + chosen[i], size // 8)


@intrinsic(prefer_literal=True)
def _transpose_squares(
    typingctx, variant, squares, stream, target, target_stride, source, source_stride
):
    """Squares of complex numbers, one vector a side, transposed in registers.

    The squares lie below each other in the source and side by side in the target. There each row
    is stored in one go: results are often a power of two apart, and lines that alias would push
    each other's halves out of the processor's few write buffers.
    """
    count, past = squares.literal_value, bool(stream.literal_value)

    def codegen(context, builder, signature, args):
        _, _, _, target, target_stride, source, source_stride = args
        lanes = Lanes(builder, variant.lane)
        side = lanes.width // 2
        done = []
        for square in range(count):
            starts = [lanes.times(source_stride, square * side + r) for r in range(side)]
            rows = [lanes.load(lanes.add(source, start)) for start in starts]
            block = side // 2
            while block:
                rows = _exchange(lanes, rows, block)
                block //= 2
            done.append(rows)
        for r in range(side):
            place = lanes.add(target, lanes.times(target_stride, r))
            for square in range(count):
                here = lanes.add(place, square * VECTOR_BYTES)
                align = VECTOR_BYTES if past else variant.lane
                lanes.store(done[square][r], here, align=align, stream=past)
        return context.get_dummy_value()

    return types.void(variant, squares, stream, *[types.int64] * 4), codegen


def _exchange(lanes, rows, block):
    """Swap the off-diagonal blocks of every 2 x 2 group of `block` x `block` complex numbers."""
    side = len(rows)
    upper, lower = [], []
    for column in range(side):
        odd = column // block % 2
        upper.append(side + column - block if odd else column)
        lower.append(side + column if odd else column + block)
    pairs = [[2 * c + part for c in mask for part in (0, 1)] for mask in (upper, lower)]
    result = list(rows)
    for r in range(side):
        if not r // block % 2:
            for place, mask in zip((r, r + block), pairs, strict=True):
                result[place] = lanes.pick(rows[r], rows[r + block], mask)
    return result


@kernel
def transpose_frames(variant, target, stride, source, source_stride, frames, columns, stream):
    """Frames in rows to channels in rows `stride` bytes apart; squares of one vector a side."""
    size = 2 * lane_bytes(variant)
    side = VECTOR_BYTES // size
    line = LINE // size
    past = stream and target % VECTOR_BYTES == 0 and stride % VECTOR_BYTES == 0
    whole_frames = frames // side * side
    whole_columns = columns // side * side
    for column in range(0, whole_columns, side):
        frame = 0
        while frame < whole_frames:
            here = target + column * stride + frame * size
            there = source + frame * source_stride + column * size
            if frame + line <= frames:
                if past:
                    _transpose_squares(variant, _A_LINE, True, here, stride, there, source_stride)
                else:
                    _transpose_squares(variant, _A_LINE, False, here, stride, there, source_stride)
                frame += line
            else:
                if past:
                    _transpose_squares(variant, 1, True, here, stride, there, source_stride)
                else:
                    _transpose_squares(variant, 1, False, here, stride, there, source_stride)
                frame += side
    for column in range(columns):
        first = whole_frames if column < whole_columns else 0
        for frame in range(first, frames):
            here = target + column * stride + frame * size
            there = source + frame * source_stride + column * size
            _copy_whole(8, False, here, there, size // 8)


@kernel
def transpose_strips(
    variant, target, stride, source, source_stride, frames, columns, strip, strip_stride
):
    """Like `transpose_frames`, by way of a strip of rows in cache, and past the caches from there.

    Rows a power of two apart share a bank of the memory: going from one to the next with every
    line costs several times what long runs cost.
    """
    size = 2 * lane_bytes(variant)
    for column in range(0, columns, STRIP_COLUMNS):
        count = min(STRIP_COLUMNS, columns - column)
        there = source + column * size
        transpose_frames(variant, strip, strip_stride, there, source_stride, frames, count, False)
        for row in range(count):
            here = target + (column + row) * stride
            copy_bytes(here, strip + row * strip_stride, frames * size, True)
