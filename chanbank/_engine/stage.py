"""Staging: samples of any accepted type into the ring of rows, mixed where the grid asks for it.

One pass reads each sample once, in order (which the memory system likes best), converts it, and
leaves it where the fold finds it in cache. Everything after it knows one sample format only.
"""

import math

import numpy as np
from numba import carray, njit, types
from numba.extending import intrinsic

from chanbank._engine.lanes import address_as_pointer

__all__ = ["FORMATS", "MIX_BLOCK", "exact_phase", "stage_run"]

# What a push may bring: the code of each dtype. "zeros" reads nothing.
FORMATS = {
    "zeros": 0,
    "complex64": 1,
    "complex128": 2,
    "float32": 3,
    "float64": 4,
    "int8": 5,
    "uint8": 6,
    "int16": 7,
}

# Samples between two exact phases of the mixer; in between a table carries it on.
MIX_BLOCK = 1024

_TURN = 2 * math.pi / 2.0**64


@intrinsic
def lane_type(typingctx, variant):
    """The float type of a variant, for arrays over its buffers."""

    def codegen(context, builder, signature, args):
        return context.get_dummy_value()

    return types.DType(_lane(variant))(variant), codegen


@intrinsic
def as_lane(typingctx, variant, number):
    """A number as a float of the variant's type, rounded once."""

    def codegen(context, builder, signature, args):
        return context.cast(builder, args[1], number, _lane(variant))

    return _lane(variant)(variant, number), codegen


def _lane(variant):
    return types.float32 if variant.lane == 4 else types.float64


@njit(nogil=True, error_model="numpy")
def _floats(variant, kind, target, source, count, spread):
    """`count` floats into every `spread`-th place (2: real samples as complex ones)."""
    place = carray(address_as_pointer(target), (count * spread,), lane_type(variant))
    given = carray(address_as_pointer(source), (count,), kind)
    if spread == 1:
        for i in range(count):
            place[i] = as_lane(variant, given[i])
    else:
        for i in range(count):
            place[2 * i] = as_lane(variant, given[i])
            place[2 * i + 1] = as_lane(variant, 0)


@njit(nogil=True, error_model="numpy")
def _integers(variant, kind, target, source, count, spread, zero, scale):
    """Like `_floats` for integers, which become (value - zero) * scale."""
    place = carray(address_as_pointer(target), (count * spread,), lane_type(variant))
    given = carray(address_as_pointer(source), (count,), kind)
    zero, scale = as_lane(variant, zero), as_lane(variant, scale)
    if spread == 1:
        for i in range(count):
            place[i] = (as_lane(variant, given[i]) - zero) * scale
    else:
        for i in range(count):
            place[2 * i] = (as_lane(variant, given[i]) - zero) * scale
            place[2 * i + 1] = as_lane(variant, 0)


@njit(nogil=True, error_model="numpy")
def _convert(variant, code, target, source, start, count, spread, zero, scale):
    """Numbers start .. start + count - 1 of a source array of the dtype that `code` names."""
    if code == 0:
        place = carray(address_as_pointer(target), (count * spread,), lane_type(variant))
        for i in range(count * spread):
            place[i] = 0
    elif code == 1 or code == 3:
        _floats(variant, np.float32, target, source + 4 * start, count, spread)
    elif code == 2 or code == 4:
        _floats(variant, np.float64, target, source + 8 * start, count, spread)
    elif code == 5:
        _integers(variant, np.int8, target, source + start, count, spread, zero, scale)
    elif code == 6:
        _integers(variant, np.uint8, target, source + start, count, spread, zero, scale)
    else:
        _integers(variant, np.int16, target, source + 2 * start, count, spread, zero, scale)


@njit(nogil=True, error_model="numpy")
def exact_phase(high, low, time):
    """2 pi frac(turn * time) as an angle in -pi .. pi, the turn given in units of 2**-128.

    `high` and `low` are the two 64-bit words of the turn. Only whole turns are lost when the
    product wraps, so the angle is as exact after 10**12 samples as after ten.
    """
    t = np.uint64(time)
    half = np.uint64(32)
    mask = np.uint64(0xFFFFFFFF)
    # The upper word of low * t, from 32-bit halves.
    a, b = low >> half, low & mask
    c, d = t >> half, t & mask
    middle = a * d + ((b * d) >> half)
    cross = b * c + (middle & mask)
    carried = a * c + (middle >> half) + (cross >> half)
    if time < 0:  # t stands for time + 2**64
        carried -= low
    return np.int64(high * t + carried) * _TURN


@njit(nogil=True, error_model="numpy")
def _mix(variant, target, time, count, high, low, table):
    """x[t] *= exp(-2j pi turn t) in place, for `count` complex samples from absolute `time` on.

    t = block * MIX_BLOCK + rest: the block's phase is exact, the rest's comes from a table, so a
    sample's factor depends on t alone, never on where a push began.
    """
    place = carray(address_as_pointer(target), (2 * count,), lane_type(variant))
    factors = carray(address_as_pointer(table), (2 * MIX_BLOCK,), lane_type(variant))
    done = 0
    while done < count:
        block = (time + done) // MIX_BLOCK
        rest = (time + done) - block * MIX_BLOCK
        size = min(MIX_BLOCK - rest, count - done)
        angle = exact_phase(high, low, block * MIX_BLOCK)
        c, s = as_lane(variant, math.cos(angle)), as_lane(variant, -math.sin(angle))
        part = place[2 * done : 2 * (done + size)]
        carry = factors[2 * rest : 2 * (rest + size)]
        for i in range(size):
            p = carry[2 * i] * c - carry[2 * i + 1] * s
            q = carry[2 * i] * s + carry[2 * i + 1] * c
            x, y = part[2 * i], part[2 * i + 1]
            part[2 * i] = x * p - y * q
            part[2 * i + 1] = x * q + y * p
        done += size


@njit(nogil=True, error_model="numpy")
def stage_run(variant, code, target, source, start, count, given, held, zero, scale, mixer, time):
    """Samples start .. start + count - 1 of `source` to `target`, within one row.

    `given` and `held` are the numbers per sample there and here (1 real, 2 complex). `mixer` is
    (high, low, table): the turn as in `exact_phase` and the address of the table, 0 to mix nothing.
    """
    spread = held // given
    _convert(variant, code, target, source, start * given, count * given, spread, zero, scale)
    high, low, table = mixer
    if table != 0 and code != 0:
        _mix(variant, target, time, count, high, low, table)
