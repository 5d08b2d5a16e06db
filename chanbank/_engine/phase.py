"""Phases: exact reduction, the mixer, and the two ways to write frames in frame phase."""

import math

import numpy as np
from numba import carray

from chanbank._engine.compiling import kernel
from chanbank._engine.lanes import address_as_pointer, as_lane, lane_type

__all__ = ["MIX_BLOCK", "exact_phase", "mix", "rotate_row", "turn_row"]

# Samples between two exact phases of the mixer; in between a table carries it on.
MIX_BLOCK = 1024

_TURN = 2 * math.pi / 2.0**64


@kernel
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


@kernel
def mix(variant, target, time, count, high, low, table):
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


@kernel
def rotate_row(variant, target, source, first, count):
    """target[i] = source[(i + first) % count], in floats."""
    place = carray(address_as_pointer(target), (count,), lane_type(variant))
    given = carray(address_as_pointer(source), (count,), lane_type(variant))
    head, tail = given[first:], given[:first]
    for i in range(count - first):
        place[i] = head[i]
    rest = place[count - first :]
    for i in range(first):
        rest[i] = tail[i]


@kernel
def turn_row(variant, row, count, angle):
    """A row of `count` complex numbers times exp(1j angle), in place."""
    place = carray(address_as_pointer(row), (2 * count,), lane_type(variant))
    c, s = as_lane(variant, math.cos(angle)), as_lane(variant, math.sin(angle))
    for i in range(count):
        x, y = place[2 * i], place[2 * i + 1]
        place[2 * i] = x * c - y * s
        place[2 * i + 1] = x * s + y * c
