"""The unfold: rows from the inverse DFTs, weighted by the prototype, added up to samples.

Frame n, transformed to v_n[c], lies in a ring of rows, in row n mod R. Output sample s = mD + d
gathers from the frames that reach it, oldest first,

    z[s] = sum over j < J of g[d + jD] v_{m-j}[(s - delay) mod M],    J = ceil(L / D),

which is the fold of the analysis bank with D columns, J rows and an offset in the columns: the
same kernel serves. In absolute phase the mixer's rotation has cancelled; in frame phase each row
is turned once, when it enters the ring.
"""

from functools import cache

import numpy as np
from numba import carray, from_dtype, types
from numba.extending import intrinsic

from chanbank._engine.compiling import compiled, kernel
from chanbank._engine.driver import execute_plan, record, source_digest
from chanbank._engine.fold import fold_rows
from chanbank._engine.lanes import (
    VECTOR_BYTES,
    address_as_pointer,
    fence,
    lane_bytes,
    lane_type,
    make_variant,
    pieces_of,
    plain,
)
from chanbank._engine.move import copy_bytes, fetch_lines, transpose_frames
from chanbank._engine.phase import exact_phase, mix, rotate_row, turn_row
from chanbank._engine.radix import join_pieces

__all__ = ["SYNTHESIS", "synthesis_run"]

# A bank: its geometry, its buffers' addresses, its plan.
#   rows: J; cycle: hops after which columns repeat; block, gather, slot: frames unfolded, taken in
#   and transformed at a time; tile: bytes of a row summed for all of a block's frames before going
#   on; held: numbers per sample in the ring
#   columns: the bytes from the start of a given row to each of the frame's DFT points (0: all)
#   weights: a factor for each place of a given row (0: none)
#   given, made: rows before and behind the DFT; summed: samples before they are delivered
#   piece_stride, factors: of DFTs that are split (both in rows of that stride)
#   mix, hop: the turn back per sample and per hop in units of 2**-128; mix_table: 0 to mix nothing
SYNTHESIS = record(
    "channels hop rows cycle ring_rows block tile gather slot held rotate channel_major real_part"
    " delay column_count columns weights taps tap_stride given given_stride made made_stride"
    " row_stride summed summed_stride piece_stride factors execute plan"
    " mix_table mix_high mix_low hop_high hop_low",
    mix_high=np.uint64,
    mix_low=np.uint64,
    hop_high=np.uint64,
    hop_low=np.uint64,
)


@intrinsic
def _bank_at(typingctx, address):
    """The record that describes a bank, at an address."""
    kind = from_dtype(SYNTHESIS)

    def codegen(context, builder, signature, args):
        return builder.inttoptr(args[0], context.get_value_type(kind))

    return kind(types.int64), codegen


@kernel
def _take(variant, bank, source, stride, count):
    """`count` frames from the caller's array to the rows that the DFT reads."""
    size = 2 * lane_bytes(variant)
    pieces = pieces_of(variant)
    length = bank.column_count // pieces
    if bank.channel_major != 0 and bank.columns == 0:
        for piece in range(pieces):
            transpose_frames(
                plain(variant),
                bank.given + piece * bank.piece_stride,
                bank.given_stride,
                source + piece * stride,
                stride * pieces,
                length,
                count,
                False,
            )
    for frame in range(count):
        row = bank.given + frame * bank.given_stride
        if bank.columns != 0:
            column_step = stride if bank.channel_major != 0 else size
            here = source + frame * (size if bank.channel_major != 0 else stride)
            _scatter(plain(variant), bank, row, here, column_step)
        elif bank.channel_major == 0 and pieces > 1:
            here = source + frame * stride
            step = pieces * size
            transpose_frames(
                plain(variant), row, bank.piece_stride, here, step, length, pieces, False
            )
        elif bank.channel_major == 0:
            copy_bytes(row, source + frame * stride, bank.column_count * size, False)
        if bank.weights != 0:
            _weigh(plain(variant), row, bank.weights, bank.given_stride // size)


@kernel
def _scatter(variant, bank, row, source, step):
    """A frame's columns to their DFT points, all other points zero."""
    floats = bank.given_stride // lane_bytes(variant)
    place = carray(address_as_pointer(row), (floats,), lane_type(variant))
    chosen = carray(address_as_pointer(bank.columns), (bank.column_count,), np.int64)
    for i in range(floats):
        place[i] = 0
    for i in range(bank.column_count):
        given = carray(address_as_pointer(source + i * step), (2,), lane_type(variant))
        point = chosen[i] // lane_bytes(variant)
        place[point], place[point + 1] = given[0], given[1]


@kernel
def _weigh(variant, row, weights, count):
    """A row times a complex factor for each of its `count` places, in place."""
    place = carray(address_as_pointer(row), (2 * count,), lane_type(variant))
    factor = carray(address_as_pointer(weights), (2 * count,), lane_type(variant))
    for i in range(count):
        x, y = place[2 * i], place[2 * i + 1]
        c, s = factor[2 * i], factor[2 * i + 1]
        place[2 * i] = x * c - y * s
        place[2 * i + 1] = x * s + y * c


@kernel
def _transform(variant, bank, table, first, count, ahead):
    """Inverse DFTs of `count` given frames, the first of them frame `first`, into the ring.

    Straight into it where rows stay as they are and a slot does not wrap; the ring has room for
    what the plan writes beyond the last frame. `ahead` is (place, end) of what is still to be
    taken in, and is fetched meanwhile.
    """
    place_ahead, end_ahead = ahead
    rows = carray(address_as_pointer(table), (bank.ring_rows,), np.int64)
    floats = bank.channels * bank.held
    for slot in range(0, count, bank.slot):
        place = (first + slot) % bank.ring_rows
        given = bank.given + slot * bank.given_stride
        place_ahead = fetch_lines(place_ahead, end_ahead)
        if pieces_of(variant) > 1:  # a slot is one frame then, and rows stay as they are
            execute_plan(bank.execute, bank.plan, given, bank.made)
            _join(variant, bank, rows[place])
            continue
        straight = bank.rotate != 0 and place + bank.slot <= bank.ring_rows
        target = rows[place] if straight else bank.made
        execute_plan(bank.execute, bank.plan, given, target)
        place_ahead = fetch_lines(place_ahead, end_ahead)
        if straight:
            continue
        for index in range(min(bank.slot, count - slot)):
            frame = first + slot + index
            row = rows[frame % bank.ring_rows]
            source = bank.made + index * bank.made_stride
            if bank.rotate != 0:
                copy_bytes(row, source, floats * lane_bytes(variant), False)
                continue
            start = (-frame * bank.hop) % bank.channels
            rotate_row(plain(variant), row, source, start * bank.held, floats)
            if bank.mix_table != 0:
                angle = exact_phase(bank.hop_high, bank.hop_low, frame)
                turn_row(plain(variant), row, bank.channels, angle)


@kernel
def _join(variant, bank, row):
    """The last step of a split DFT, from the pieces' results to a row of the ring."""
    size = bank.channels // pieces_of(variant) * bank.held * lane_bytes(variant)
    join_pieces(
        variant,
        bank.made,
        bank.piece_stride,
        bank.factors,
        bank.piece_stride,
        row,
        size,
        size // VECTOR_BYTES,
    )


@kernel
def _unfold(variant, bank, table, first, count):
    """Samples of hops first .. first + count - 1, those whose columns agree together.

    A hop's columns begin at (mD - delay) mod M and may wrap to 0 once. Rows are read at whole
    vectors: a hop begins with one vector where its columns do, and goes on aligned; so do tiles.
    A vector may run over what it is for; what it runs into is written after it, or again, to the
    same bits.
    """
    sample_bytes = bank.held * lane_bytes(variant)
    per_vector = VECTOR_BYTES // sample_bytes
    tile = bank.tile // sample_bytes
    stride = bank.cycle * bank.summed_stride
    for start in range(0, bank.hop, tile):
        for member in range(min(bank.cycle, count)):
            hops = (count - member + bank.cycle - 1) // bank.cycle
            newest = first + member
            oldest = (newest - bank.rows + 1) % bank.ring_rows
            column = (newest * bank.hop - bank.delay) % bank.channels
            split = bank.channels - column
            out = bank.summed + member * bank.summed_stride
            lead = -column % per_vector
            begin = start + lead if start > 0 else start
            stop = min(start + tile + lead, bank.hop)
            while begin < stop:
                shift = column if begin < split else column - bank.channels
                end = split if begin < split < stop else stop
                lead = -(begin + shift) % per_vector
                if lead > 0:
                    end = min(end, begin + lead)
                fold_rows(
                    variant,
                    (table, oldest, (begin + shift) * sample_bytes, bank.cycle),
                    (bank.taps + begin * lane_bytes(variant), bank.tap_stride, bank.rows),
                    (out + begin * sample_bytes, stride),
                    hops,
                    -(-(end - begin) // per_vector),
                )
                begin = end


@kernel
def _deliver(variant, bank, target, first, count, stream):
    """`count` hops of samples to the result, mixed back where the grid was shifted."""
    size = bank.hop * bank.held * lane_bytes(variant)
    for hop in range(count):
        row = bank.summed + hop * bank.summed_stride
        if bank.mix_table != 0:
            time = (first + hop) * bank.hop - bank.delay
            mix(plain(variant), row, time, bank.hop, bank.mix_high, bank.mix_low, bank.mix_table)
        if bank.real_part != 0:
            _real_part(plain(variant), target + hop * size // 2, row, bank.hop)
        else:
            copy_bytes(target + hop * size, row, size, stream)


@kernel
def _real_part(variant, target, source, count):
    place = carray(address_as_pointer(target), (count,), lane_type(variant))
    given = carray(address_as_pointer(source), (2 * count,), lane_type(variant))
    for i in range(count):
        place[i] = given[2 * i]


_RUN = types.int64(*[types.int64] * 9)


@cache
def synthesis_run(lane, real, step, radix):
    """The compiled push, as `analysis_run`: addresses and numbers only."""
    sources = source_digest()
    real = int(real)

    @compiled(_RUN)
    def run(bank_address, table, source, stride, target, stream, begin, first, last):
        """Take frames begin .. last - 1, deliver the samples of hops first .. last - 1.

        `source` is the address of frame `begin`, `stride` the bytes from frame to frame, or from
        column to column where frames come channel-major; `target` that of hop `first`.
        """
        variant = make_variant(lane, real, step, radix)
        bank = _bank_at(bank_address)
        size = 2 * lane_bytes(variant)
        apart = size if bank.channel_major != 0 else stride
        hop_bytes = bank.hop * lane_bytes(variant)
        if bank.held == 2 and bank.real_part == 0:
            hop_bytes *= 2
        in_line = bank.channel_major == 0 and bank.columns == 0
        frame = begin
        while frame < last:
            count = min(bank.block, last - frame)
            for start in range(0, count, bank.gather):
                part = min(bank.gather, count - start)
                here = source + (frame + start - begin) * apart
                _take(variant, bank, here, stride, part)
                place = here + part * stride
                stop = source + (last - begin) * stride if in_line else place
                _transform(variant, bank, table, frame + start, part, (place, stop))
            skip = max(0, first - frame)  # frames that only fill the ring
            if skip < count:
                _unfold(variant, bank, table, frame + skip, count - skip)
                here = target + (frame + skip - first) * hop_bytes
                _deliver(variant, bank, here, frame + skip, count - skip, stream != 0)
            frame += count
        if stream != 0:
            fence()
        return sources

    return run
