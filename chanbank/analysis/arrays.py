"""Arrays at the banks' doors: dtypes, output buffers, leading axes."""

import math

import numpy as np

from chanbank._checks import wrong_type, wrong_value

__all__ = ["bank_dtype", "checked_out", "flat_leading"]


def bank_dtype(dtype):
    """complex64 or complex128 as a NumPy dtype, or the exception that says so."""
    try:
        found = np.dtype(dtype)
    except TypeError:
        raise wrong_value("dtype", "complex64 or complex128", dtype) from None
    if found not in (np.complex64, np.complex128) or not found.isnative:
        raise wrong_value("dtype", "complex64 or complex128", dtype)
    return found


def checked_out(out, shape, dtype):
    """`out`, or a new array where it is None; refused where it cannot hold the result as it is."""
    if out is None:
        return np.empty(shape, dtype)
    if not isinstance(out, np.ndarray):
        raise wrong_type("out", f"None or an array of shape {shape} and dtype {dtype.name}", out)
    if out.dtype != dtype or out.shape != shape:
        raise wrong_value("out", f"an array of shape {shape} and dtype {dtype.name}", out)
    flags = out.flags
    if not flags.carray and not (flags.c_contiguous and flags.writeable):
        state = "read-only" if not flags.writeable else f"strides {out.strides}"
        raise ValueError(f"out must be C-contiguous and writable; got {state}")
    return out


def flat_leading(array, inner):
    """The leading axes of a view as one axis, in front of `inner` others."""
    leading = array.ndim - inner
    if leading == 1:
        return array
    if leading == 0:
        return array[None]
    # Also a slice along the frame axis of a contiguous array: its leading axes merge into one.
    lead = array.shape[:leading]
    return np.lib.stride_tricks.as_strided(
        array,
        (math.prod(lead), *array.shape[array.ndim - inner :]),
        array.strides[len(lead) - 1 :],
    )
