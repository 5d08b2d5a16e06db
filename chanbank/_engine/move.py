"""Moves: samples and frames from buffer to buffer, and results to where they belong.

A result much larger than the caches is written past them (non-temporal stores): an ordinary store
would first read every line of memory that it is about to replace. Smaller results are written the
ordinary way, since a reader will soon want them.
"""

import numpy as np
from llvmlite import ir
from numba import carray, njit, types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.lanes import INDEX, VECTOR_BYTES, Lanes, address_as_pointer, lane_bytes

__all__ = ["copy_bytes", "copy_columns", "transpose_frames"]


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


@njit(nogil=True, error_model="numpy")
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


@njit(nogil=True, error_model="numpy")
def copy_columns(variant, target, step, source, columns, count):
    """The chosen DFT points of one frame, `step` bytes apart in the result.

    `columns` is the address of `count` words: each point's bytes from `source` on.
    """
    chosen = carray(address_as_pointer(columns), (count,), np.int64)
    size = 2 * lane_bytes(variant)
    for i in range(count):
        _copy_whole(8, False, target + i * step, source + chosen[i], size // 8)


@intrinsic(prefer_literal=True)
def _transpose_square(typingctx, variant, stream, target, target_stride, source, source_stride):
    """A square of complex numbers, one vector a side, transposed in registers."""
    past = bool(stream.literal_value)

    def codegen(context, builder, signature, args):
        _, _, target, target_stride, source, source_stride = args
        lanes = Lanes(builder, variant.lane)
        side = lanes.width // 2
        rows = [lanes.load(lanes.add(source, lanes.times(source_stride, r))) for r in range(side)]
        block = side // 2
        while block:
            rows = _exchange(lanes, rows, block)
            block //= 2
        for r, row in enumerate(rows):
            place = lanes.add(target, lanes.times(target_stride, r))
            lanes.store(row, place, align=VECTOR_BYTES if past else variant.lane, stream=past)
        return context.get_dummy_value()

    return types.void(variant, stream, *[types.int64] * 4), codegen


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


@njit(nogil=True, error_model="numpy")
def transpose_frames(variant, target, stride, source, source_stride, frames, columns, stream):
    """Frames in rows to channels in rows `stride` bytes apart; squares of one vector a side."""
    size = 2 * lane_bytes(variant)
    side = VECTOR_BYTES // size
    past = stream and target % VECTOR_BYTES == 0 and stride % VECTOR_BYTES == 0
    whole_frames = frames // side * side
    whole_columns = columns // side * side
    for column in range(0, whole_columns, side):
        for frame in range(0, whole_frames, side):
            here = target + column * stride + frame * size
            there = source + frame * source_stride + column * size
            if past:
                _transpose_square(variant, True, here, stride, there, source_stride)
            else:
                _transpose_square(variant, False, here, stride, there, source_stride)
    for column in range(columns):
        first = whole_frames if column < whole_columns else 0
        for frame in range(first, frames):
            here = target + column * stride + frame * size
            there = source + frame * source_stride + column * size
            _copy_whole(8, False, here, there, size // 8)
