"""Buffers for compiled code: aligned, padded against cache conflicts, known by address."""

import ctypes

import numpy as np

from chanbank._engine.lanes import VECTOR_BYTES

__all__ = [
    "HEAD",
    "LINE",
    "Ring",
    "address_or_zero",
    "aligned_bytes",
    "data_address",
    "odd_lines",
    "real_factors",
    "split_factors",
    "turn_words",
]

LINE = 64  # bytes


class Ring:
    """The rows that hold one antenna's latest rows."""

    def __init__(self, rows, row_stride, row_bytes, dtype):
        self.memory = aligned_bytes(rows * row_stride)
        lines = self.memory.reshape(rows, row_stride)
        self.rows = lines[:, :row_bytes].view(dtype)
        # The rows' addresses twice over, so that no index needs to wrap.
        numbers = np.arange(2 * rows, dtype=np.int64) % rows
        self.table = self.memory.ctypes.data + numbers * row_stride
        self.address = self.table.ctypes.data

    def copy_from(self, other):
        """Take over another ring's rows."""
        self.memory[...] = other.memory


def address_or_zero(array):
    return 0 if array is None else array.ctypes.data


def turn_words(turn):
    """A turn modulo one in units of 2**-128, rounded, as two 64-bit words."""
    units = round((turn % 1) * (1 << 128)) % (1 << 128)
    return units >> 64, units & ((1 << 64) - 1)


def odd_lines(size):
    """Room for `size` bytes and a vector's overrun, as an odd number of cache lines.

    Rows that lie a power of two apart would all fall into the same few sets of the cache.
    """
    lines = -(-(size + VECTOR_BYTES) // LINE)
    return LINE * (lines | 1)


def aligned_bytes(size):
    """A zeroed buffer of bytes on a cache line."""
    buffer = np.zeros(size + LINE, np.uint8)
    start = -buffer.ctypes.data % LINE
    return buffer[start : start + size]


def split_factors(points, radix, stride, dtype, sign):
    """exp(sign 2j pi column piece / points) of a split DFT, in rows for pieces 1 .. radix - 1."""
    memory = aligned_bytes((radix - 1) * stride)
    table = memory.view(dtype).reshape(radix - 1, -1)
    columns = np.arange(points // radix)
    for piece, row in enumerate(table, 1):
        row[: len(columns)] = np.exp(sign * 2j * np.pi * (columns * piece % points) / points)
    return memory


def real_factors(points, dtype):
    """-1j exp(-2j pi k / points), k up to a quarter of the points and a vector more."""
    count = points // 4 + 2 * LINE // dtype.itemsize
    memory = aligned_bytes(count * dtype.itemsize)
    memory.view(dtype)[...] = -1j * np.exp(-2j * np.pi * np.arange(count) / points)
    return memory


# An array object, at the address id(array), keeps the address of its data behind the head that all
# objects have: that is part of NumPy's binary interface. Attributes that tell it build an object on
# each call, which a push of a few thousand samples would feel, so compiled code reads the word at
# id(array) + HEAD.
HEAD = object.__basicsize__


def data_address(array):
    return ctypes.c_size_t.from_address(id(array) + HEAD).value


_probe = np.zeros(4)[1:]
if data_address(_probe) != _probe.ctypes.data:
    raise ImportError("NumPy arrays are laid out in a way that the compiled engine does not know")
