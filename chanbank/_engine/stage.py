"""Staging: samples of any accepted type into the ring of rows, mixed where the grid asks for it.

One pass reads each sample once, in order (which the memory system likes best), converts it, and
leaves it where the fold finds it in cache. Everything after it knows one sample format only.
"""

import numpy as np
from numba import carray

from chanbank._engine.compiling import kernel
from chanbank._engine.lanes import address_as_pointer, as_lane, lane_bytes, lane_type
from chanbank._engine.move import copy_bytes
from chanbank._engine.phase import mix

__all__ = ["FORMATS", "NUMBER_BYTES", "ZEROS", "stage_run"]

# What a push may bring: the code of each dtype. Zeros read nothing.
ZEROS = 0
FORMATS = {
    "complex64": 1,
    "complex128": 2,
    "float32": 3,
    "float64": 4,
    "int8": 5,
    "uint8": 6,
    "int16": 7,
}

# Bytes of one number, by code.
NUMBER_BYTES = (0, 4, 8, 4, 8, 1, 1, 2)


@kernel
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


@kernel
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


@kernel
def _convert(variant, code, target, source, count, spread, zero, scale):
    """`count` numbers of the dtype that `code` names."""
    if code == 0:
        place = carray(address_as_pointer(target), (count * spread,), lane_type(variant))
        for i in range(count * spread):
            place[i] = 0
    elif code == 1 or code == 3:
        _floats(variant, np.float32, target, source, count, spread)
    elif code == 2 or code == 4:
        _floats(variant, np.float64, target, source, count, spread)
    elif code == 5:
        _integers(variant, np.int8, target, source, count, spread, zero, scale)
    elif code == 6:
        _integers(variant, np.uint8, target, source, count, spread, zero, scale)
    else:
        _integers(variant, np.int16, target, source, count, spread, zero, scale)


@kernel
def stage_run(variant, code, target, source, start, count, given, held, zero, scale, mixer, time):
    """Samples start .. start + count - 1 of `source` to `target`, within one row.

    `given` and `held` are the numbers per sample there and here (1 real, 2 complex). `mixer` is
    (high, low, table): the turn as in `exact_phase` and the address of the table, 0 to mix nothing.
    """
    spread = held // given
    size = given * NUMBER_BYTES[code]
    if spread == 1 and 0 < code < 5 and NUMBER_BYTES[code] == lane_bytes(variant):
        copy_bytes(target, source + start * size, count * size, False)  # nothing to convert
    else:
        _convert(variant, code, target, source + start * size, count * given, spread, zero, scale)
    high, low, table = mixer
    if table != 0 and code != 0:
        mix(variant, target, time, count, high, low, table)
