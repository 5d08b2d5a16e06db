"""The compiled run of one push: stage, fold, transform, deliver, block after block.

A block of frames passes through buffers that stay in the second-level cache, and its results are
written once. The whole push is one compiled call without the interpreter's lock: a loop over
blocks in Python would cost a tenth of the time, and a small push would be mostly overhead.
"""

import hashlib
from functools import cache
from pathlib import Path

import numpy as np
from numba import carray, from_dtype, types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.compiling import compiled, kernel
from chanbank._engine.fold import fold_block
from chanbank._engine.lanes import (
    VECTOR_BYTES,
    address_as_pointer,
    fence,
    is_real,
    lane_bytes,
    lane_type,
    make_variant,
    pieces_of,
    plain,
)
from chanbank._engine.move import (
    copy_bytes,
    copy_columns,
    fetch_lines,
    transpose_frames,
    transpose_strips,
)
from chanbank._engine.phase import exact_phase, rotate_row, turn_row
from chanbank._engine.radix import real_spectrum
from chanbank._engine.stage import NUMBER_BYTES, stage_run

__all__ = ["ANALYSIS", "analysis_run", "execute_plan", "record", "source_digest"]


def record(text, **special):
    """A record of 64-bit words, from its names."""
    return np.dtype([(name, special.get(name, np.int64)) for name in text.split()])


# A bank: its geometry, its buffers' addresses, its plan.
#   cycle: frames after which positions are whole rows apart; step: how many rows then
#   block, slot, gather: frames folded, transformed and (at most) delivered at a time
#   tile: bytes of a row folded for all of a block's frames before going on; together: frames of one
#   residue folded before those of the next; held: numbers per sample in the ring
#   turned: rows in frame phase (0: none needed); columns: the bytes from the start of a frame's
#   bins to each chosen DFT point (0: all); strip: a few channels' rows of `gather` frames
#   piece_stride, factors: of DFTs that are split (both in rows of that stride)
#   halves, line, real_factors: of those of real samples, the pieces behind the DFT, the same in one
#   row, and the last pass's factors
#   mix, hop: the turn per sample and per hop in units of 2**-128; mix_table: 0 to mix nothing
ANALYSIS = record(
    "channels hop rows cycle step ring_rows block tile together gather slot held rotate"
    " channel_major column_count columns taps tap_stride folded folded_stride turned bins"
    " bins_stride strip strip_stride piece_stride factors halves line real_factors execute plan"
    " mix_table mix_high mix_low hop_high hop_low",
    mix_high=np.uint64,
    mix_low=np.uint64,
    hop_high=np.uint64,
    hop_low=np.uint64,
)

# The operands of a run: words, but for `zero` and `scale`.
_RUN = types.int64(*[types.int64] * 7, types.float64, types.float64, *[types.int64] * 9)


@intrinsic
def execute_plan(typingctx, function, plan, source, target):
    """FFTW's new-array execution: thread-safe, and free of the interpreter."""

    def codegen(context, builder, signature, args):
        pointer = cgutils.voidptr_t
        kind = cgutils.ir.FunctionType(cgutils.ir.VoidType(), [pointer] * 3)
        call = builder.inttoptr(args[0], kind.as_pointer())
        builder.call(call, [builder.inttoptr(value, pointer) for value in args[1:]])
        return context.get_dummy_value()

    return types.void(*[types.int64] * 4), codegen


@intrinsic
def _bank_at(typingctx, address):
    """The record that describes a bank, at an address."""
    kind = from_dtype(ANALYSIS)

    def codegen(context, builder, signature, args):
        return builder.inttoptr(args[0], context.get_value_type(kind))

    return kind(types.int64), codegen


@kernel
def _word_at(address):
    return carray(address_as_pointer(address), (1,), np.int64)[0]


@kernel
def _stage(variant, bank, table, samples, begin, end):
    """Samples begin .. end - 1 (absolute) of a push into the ring.

    `samples` is (code of the dtype, numbers per sample, address, absolute index of the first
    sample, zero, scale), integers standing for (value - zero) * scale. Floats that need no
    conversion are copied all the same: reading memory in one straight line and folding from
    padded rows costs less than folding the caller's rows where they are, which often lie a power
    of two apart and then fight for the same few sets of the caches.
    """
    code, given, source, origin, zero, scale = samples
    sample_bytes = bank.held * lane_bytes(variant)
    mixer = (bank.mix_high, bank.mix_low, bank.mix_table)
    rows = carray(address_as_pointer(table), (bank.ring_rows,), np.int64)
    row = begin // bank.channels
    column = begin - row * bank.channels
    place = row % bank.ring_rows
    time = begin
    while time < end:
        count = min(bank.channels - column, end - time)
        stage_run(
            variant,
            code,
            rows[place] + column * sample_bytes,
            source,
            time - origin,
            count,
            given,
            bank.held,
            zero,
            scale,
            mixer,
            time,
        )
        column = 0
        place = place + 1 if place + 1 < bank.ring_rows else 0
        time += count


@kernel
def _to_come(samples, time, end):
    """The bytes of samples time .. end - 1 of a push: (address of the first, address behind)."""
    code, given, source, origin, _, _ = samples
    size = given * NUMBER_BYTES[code]
    return source + (time - origin) * size, source + (end - origin) * size


@kernel
def _transform(variant, bank, first, start, count, bins, ahead):
    """DFTs to `bins` of `count` folded frames from row `start` of the block that starts at `first`.

    The plan always runs on a whole slot: one plan for every frame keeps the bits independent of
    how many frames a push completes. `ahead` is (place, end) of what the next block will read:
    between the slots some of it is fetched. Returns how far that has come.
    """
    place, end = ahead
    for slot in range(start, start + count, bank.slot):
        place = fetch_lines(place, end)
        source = bank.folded + slot * bank.folded_stride
        target = bins + (slot - start) * bank.bins_stride
        if bank.turned != 0:
            for index in range(slot, min(slot + bank.slot, start + count)):
                frame = first + index
                row = bank.turned + (index - slot) * bank.folded_stride
                here = bank.folded + index * bank.folded_stride
                origin = (frame * bank.hop) % bank.channels
                count_floats = bank.channels * bank.held
                rotate_row(plain(variant), row, here, origin * bank.held, count_floats)
                if bank.mix_table != 0:
                    angle = exact_phase(bank.hop_high, bank.hop_low, frame)
                    turn_row(plain(variant), row, bank.channels, angle)
            source = bank.turned
        if is_real(variant) and pieces_of(variant) > 1:  # a slot is one frame then
            execute_plan(bank.execute, bank.plan, source, bank.halves)
            _real_row(variant, bank, target)
        else:
            execute_plan(bank.execute, bank.plan, source, target)
        place = fetch_lines(place, end)
    return place


@kernel
def _real_row(variant, bank, target):
    """The spectrum of a row of real samples from the pieces that the split DFT left."""
    pieces, size = pieces_of(variant), 2 * lane_bytes(variant)
    points = bank.channels // 2
    transpose_frames(
        plain(variant),
        bank.line,
        pieces * size,
        bank.halves,
        bank.piece_stride,
        pieces,
        points // pieces,
        False,
    )
    line = carray(address_as_pointer(bank.line), (2 * points + 2,), lane_type(variant))
    line[2 * points], line[2 * points + 1] = line[0], line[1]
    real_spectrum(variant, bank.line, bank.real_factors, target, points)


@kernel
def _deliver(variant, bank, result, index, count):
    """`count` transformed frames to the result, the first of them its frame `index`.

    `result` is (address, bytes from frame to frame, bytes from column to column, whether to write
    past the caches).
    """
    address, frame_stride, column_stride, stream = result
    target = address + index * frame_stride
    pieces = 1 if is_real(variant) else pieces_of(variant)
    if bank.columns != 0:
        for frame in range(count):
            copy_columns(
                plain(variant),
                target + frame * frame_stride,
                column_stride,
                bank.bins + frame * bank.bins_stride,
                bank.columns,
                bank.column_count,
            )
    elif bank.channel_major != 0:
        length = bank.column_count // pieces
        for piece in range(pieces):
            here = target + piece * column_stride
            apart = column_stride * pieces
            source = bank.bins + piece * bank.piece_stride
            rows = bank.bins_stride
            if stream != 0:
                strip, wide = bank.strip, bank.strip_stride
                transpose_strips(
                    plain(variant), here, apart, source, rows, count, length, strip, wide
                )
            else:
                transpose_frames(plain(variant), here, apart, source, rows, count, length, False)
    elif pieces > 1:
        for frame in range(count):
            transpose_frames(
                plain(variant),
                target + frame * frame_stride,
                pieces * column_stride,
                bank.bins + frame * bank.bins_stride,
                bank.piece_stride,
                pieces,
                bank.column_count // pieces,
                stream != 0,
            )
    else:
        size = bank.column_count * 2 * lane_bytes(variant)
        for frame in range(count):
            source = bank.bins + frame * bank.bins_stride
            copy_bytes(target + frame * frame_stride, source, size, stream != 0)


@cache
def analysis_run(lane, real, step, radix):
    """The compiled push for floats of `lane` bytes, real or complex samples, known row step.

    `radix` is the number of pieces of a split DFT, 1 where it is whole.

    It takes addresses and numbers only, so that one signature serves every array, and the
    dispatcher's work is small against a small push. The digest of the kernels' sources is part of
    the closure, and so of the key under which the compiled code is kept on disk: that cache by
    itself watches this file alone.
    """
    sources = source_digest()
    real = int(real)

    @compiled(_RUN)
    def run(
        bank_address,
        table,
        code,
        given,
        samples_word,
        samples_offset,
        origin,
        zero,
        scale,
        result_word,
        result_offset,
        frame_stride,
        column_stride,
        stream,
        begin,
        end,
        first,
        last,
    ):
        """Take samples begin .. end - 1, deliver frames first .. last - 1.

        `table` holds the addresses of the ring's rows (see `Ring`); the operands from `code` on
        are those of `_stage` and `_deliver`, but that their addresses come as a word that holds
        an address (see `HEAD` in buffers) and bytes to add.
        """
        variant = make_variant(lane, real, step, radix)
        bank = _bank_at(bank_address)
        source = _word_at(samples_word) + samples_offset
        samples = (code, given, source, origin, zero, scale)
        target = _word_at(result_word) + result_offset
        result = (target, frame_stride, column_stride, stream)
        time, frame, waiting = begin, first, 0
        while frame < last:
            count = min(bank.block, last - frame)
            newest = (frame + count - 1) * bank.hop + 1
            _stage(plain(variant), bank, table, samples, time, newest)
            time = newest
            place, stop = _to_come(samples, time, min(end, time + bank.block * bank.hop))
            place = fold_block(variant, bank, table, frame, count, (place, stop))
            part = min(bank.gather, bank.block)
            for start in range(0, count, part):
                size = min(part, count - start)
                bins = bank.bins + waiting * bank.bins_stride
                place = _transform(variant, bank, frame, start, size, bins, (place, stop))
                waiting += size
                done = frame + start + size
                if waiting == bank.gather or done == last:
                    _deliver(variant, bank, result, done - waiting - first, waiting)
                    waiting = 0
            frame += count
        _stage(plain(variant), bank, table, samples, time, end)
        if stream != 0:
            fence()
        return sources

    return run


@cache
def source_digest():
    here = Path(__file__).parent
    names = (
        "compiling.py",
        "lanes.py",
        "move.py",
        "phase.py",
        "stage.py",
        "radix.py",
        "fold.py",
        "driver.py",
        "unfold.py",
    )
    text = b"".join((here / name).read_bytes() for name in names)
    return int(hashlib.sha256(text + bytes([VECTOR_BYTES])).hexdigest()[:12], 16)
