"""FFTW given the same treatment as the bank: blocks in cache, one store past it, compiled."""

import numpy as np
from numba import njit

from chanbank._engine.driver import execute_plan
from chanbank._engine.fftw import aligned_bytes, make_plan
from chanbank._engine.lanes import fence
from chanbank._engine.move import copy_bytes

__all__ = ["transform_rows"]


@njit(nogil=True, error_model="numpy")
def _run(source, hop_bytes, row_bytes, target, frames, slot, buffers, stride, execute, plan, past):
    given, made = buffers
    for start in range(0, frames, slot):
        count = min(slot, frames - start)
        for frame in range(count):
            here = source + (start + frame) * hop_bytes
            copy_bytes(given + frame * stride, here, row_bytes, False)
        execute_plan(execute, plan, given, made)
        for frame in range(count):
            there = target + (start + frame) * row_bytes
            copy_bytes(there, made + frame * stride, row_bytes, past)
    fence()


def transform_rows(case):
    layout = case.bank._engine.layout
    width = case.input.itemsize
    row_bytes = case.channels * width
    frames = (case.samples - case.channels) // case.hop + 1
    buffers = [aligned_bytes(layout.slot * layout.row_stride) for _ in range(2)]
    plan = make_plan(
        case.channels, layout.slot, case.dtype, "forward", layout.row_stride, layout.row_stride
    )
    addresses = tuple(np.int64(buffer.ctypes.data) for buffer in buffers)
    past = case.output.nbytes >= 1 << 25

    def run():
        _run(
            case.input.ctypes.data,
            case.hop * width,
            row_bytes,
            case.output.ctypes.data,
            frames,
            layout.slot,
            addresses,
            layout.row_stride,
            plan.execute,
            plan.address,
            past,
        )
        return buffers, plan  # alive as long as this function

    return run
