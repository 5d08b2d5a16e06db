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
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.compiling import kernel
from chanbank._engine.lanes import INDEX, VECTOR_BYTES, Lanes, lane_bytes, pieces_of
from chanbank._engine.move import fetch_lines
from chanbank._engine.radix import split_pieces

__all__ = ["fold_block", "fold_rows"]

# Taps held in registers at a time: 8 of 32 registers, or 4 of 16 on narrower machines.
_CHUNKS = (8, 4, 2, 1) if VECTOR_BYTES == 64 else (4, 2, 1)


@intrinsic(prefer_literal=True)
def _fold_group(typingctx, variant, together, rows, taps, out, vectors):
    """out[f] = sum over p < count of row[p + f*step] * taps[p], f < together, oldest row first.

    Operands as in `fold_rows`, but that `rows` begins with the place in the table.
    """
    frames = together.literal_value

    def codegen(context, builder, signature, args):
        lanes = Lanes(builder, variant.lane)
        _, _, rows, taps, out, vectors = args
        entry, column, step = lanes.parts(rows)
        tap, tap_stride, count = lanes.parts(taps)
        place, stride = lanes.parts(out)
        sums = [cgutils.alloca_once(builder, lanes.full) for _ in range(frames)]
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            tap_along = along if variant.real else lanes.times(loop.index, VECTOR_BYTES // 2)
            for total in sums:
                builder.store(lanes.zero(), total)
            here = lanes.add(tap, tap_along), tap_stride, lanes.add(column, along), step
            whole = _CHUNKS[0]
            chunks = builder.udiv(count, lanes.index(whole))
            with cgutils.for_range(builder, chunks) as chunk:
                first = lanes.times(chunk.index, whole)
                _add_chunk(lanes, variant, whole, sums, entry, first, here)
            first = lanes.times(chunks, whole)
            for size in _CHUNKS[1:]:
                bit = builder.and_(count, lanes.index(size))
                with builder.if_then(builder.icmp_unsigned("!=", bit, lanes.index(0))):
                    _add_chunk(lanes, variant, size, sums, entry, first, here)
                first = lanes.add(first, bit)
            for frame, total in enumerate(sums):
                address = lanes.add(place, lanes.times(stride, frame))
                lanes.store(builder.load(total), lanes.add(address, along))
        return context.get_dummy_value()

    return types.void(variant, together, rows, taps, out, vectors), codegen


def _add_chunk(lanes, variant, size, sums, entry, first, here):
    """Add `size` consecutive rows to every sum, each frame's oldest first.

    The taps are loaded once for all frames. Where the frames' distance is known, a row that
    serves several frames is loaded once as well.
    """
    builder = lanes.builder
    tap, tap_stride, column, step = here
    weights = []
    for p in range(size):
        address = lanes.add(tap, lanes.times(lanes.add(first, p), tap_stride))
        if variant.real:
            weights.append(lanes.load(address))
        else:
            weights.append(lanes.doubled(lanes.load(address, lanes.half)))
    table = lanes.add(entry, lanes.times(first, 8))

    def row(offset):
        start = lanes.load(lanes.add(table, offset), INDEX, 8)
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


@kernel
def fold_rows(variant, rows, taps, out, frames, vectors):
    """Fold `vectors` vectors of columns for `frames` frames that lie `step` rows apart.

    All operands are addresses and bytes: `rows` is (table of the rows' addresses, the first
    frame's oldest row, the first column, step), `taps` (its oldest tap, from row to row, rows),
    `out` (the first frame's result, from frame to frame).
    """
    table, row, column, step = rows
    place, stride = out
    frame = 0
    while frame < frames:
        entry = (table + 8 * (row + frame * step), column, step)
        here = (place + frame * stride, stride)
        left = frames - frame
        if left >= 8:
            _fold_group(variant, 8, entry, taps, here, vectors)
            frame += 8
        elif left >= 4:
            _fold_group(variant, 4, entry, taps, here, vectors)
            frame += 4
        elif left >= 2:
            _fold_group(variant, 2, entry, taps, here, vectors)
            frame += 2
        else:
            _fold_group(variant, 1, entry, taps, here, vectors)
            frame += 1


@kernel
def fold_block(variant, bank, table, first, count, ahead):
    """Fold frames first .. first + count - 1, those that are whole rows apart together.

    Where long DFTs are split, a tile goes through its columns of all pieces, and then takes the
    DFTs' first step. `ahead` is (place, end) of what the next block will read: some of it is
    fetched between the tiles. Returns how far that has come.
    """
    sample_bytes = bank.held * lane_bytes(variant)
    per_vector = VECTOR_BYTES // sample_bytes
    pieces = pieces_of(variant)
    length = bank.channels // pieces
    shared = count > bank.cycle or pieces > 1  # else each row is read once for all
    tile = bank.tile // sample_bytes if shared else length
    place_ahead, end_ahead = ahead
    for start in range(0, length, tile):
        stop = min(start + tile, length)
        place_ahead = fetch_lines(place_ahead, end_ahead)
        for piece in range(pieces):
            here = piece * length
            place = bank.folded + piece * (bank.piece_stride - length * sample_bytes)
            _fold_tile(variant, bank, table, first, count, here + start, here + stop, place)
        if pieces > 1:
            offset = start * sample_bytes
            vectors = -(-(stop - start) // per_vector)
            for frame in range(count):
                split_pieces(
                    variant,
                    bank.folded + frame * bank.folded_stride + offset,
                    bank.piece_stride,
                    bank.factors + offset,
                    bank.piece_stride,
                    vectors,
                )
    return place_ahead


@kernel
def _fold_tile(variant, bank, table, first, count, start, stop, folded):
    """Columns start .. stop - 1 of `count` frames, to where a row from `folded` on holds them.

    Some frames of every residue at a time, so that the rows they share are in the first level.
    """
    newest = first * bank.hop
    row = newest // bank.channels
    split = newest - row * bank.channels + 1
    oldest = (row - bank.rows) % bank.ring_rows
    for begin in range(0, count, bank.together * bank.cycle):
        for member in range(min(bank.cycle, count - begin)):
            frames = min(bank.together, -(-(count - begin - member) // bank.cycle))
            place = folded + (begin + member) * bank.folded_stride
            _fold_frames(variant, bank, table, (oldest, split), (start, stop), place, frames)
            split += bank.hop
            if split > bank.channels:
                split -= bank.channels
                oldest = oldest + 1 if oldest + 1 < bank.ring_rows else 0
        oldest = (oldest + (bank.together - 1) * bank.step) % bank.ring_rows


@kernel
def _fold_frames(variant, bank, table, position, columns, place, frames):
    """Some columns of `frames` frames of one residue, the first of them at `place`.

    Columns before the split, then those behind it, which belong to one row earlier. The last vector
    of the first part may run over the split; the second part starts with a vector at the split
    itself and goes on aligned. Overlapping columns are computed twice, to the same bits.
    """
    oldest, split = position
    start, stop = columns
    sample_bytes = bank.held * lane_bytes(variant)
    per_vector = VECTOR_BYTES // sample_bytes
    aligned = -(-split // per_vector) * per_vector if split < stop else stop
    for part in range(3):
        if part == 0:
            column, end = start, min(split, stop)
            taps = bank.channels - split + column
        elif part == 1:
            column, end = split, min(split + 1, aligned)
            if split < start:
                continue
            taps = np.int64(0)
        else:
            column, end = max(start, aligned), stop
            taps = column - split
        if column >= end:
            continue
        offset = column * sample_bytes
        fold_rows(
            variant,
            (table, oldest + 1 if part == 0 else oldest, offset, bank.step),
            (bank.taps + taps * lane_bytes(variant), bank.tap_stride, bank.rows),
            (place + offset, bank.cycle * bank.folded_stride),
            frames,
            -(-(end - column) // per_vector),
        )
