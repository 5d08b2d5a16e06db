"""Samples at an analysis bank's door: what a push may bring, and how the engine takes it."""

import numpy as np

from chanbank._checks import wrong_type, wrong_value

__all__ = ["SampleDoor"]

_INTEGER_ZERO = {"int8": 0, "int16": 0, "uint8": 128}
_INTEGER_SCALE = {"int8": 128, "int16": 32768, "uint8": 128}


class SampleDoor:
    """The samples that a bank of a dtype takes, real or complex, full scale None or its value."""

    def __init__(self, dtype, real, full_scale):
        self._dtype, self._real = dtype, real
        # Looked up at every push, so kept by dtype: the floats that need no conversion, and the
        # zero level and scale of integers.
        self._floats = {
            np.dtype(name)
            for name in ("float32", "float64", "complex64", "complex128")
            if (name[0] == "f" or not real)
            and (name in ("float32", "complex64") or dtype == np.complex128)
        }
        self._integers = {
            np.dtype(name): (float(_INTEGER_ZERO[name]), 1.0 / (full_scale or full))
            for name, full in _INTEGER_SCALE.items()
        }

    def take(self, samples):
        """The samples as the engine takes them, how many, their leading axes, and their scaling.

        The scaling is () for floats and (zero level, scale) for integers.
        """
        array = samples if type(samples) is np.ndarray else np.asarray(samples)
        kind, shape = array.dtype, array.shape
        if kind in self._floats and shape and array.flags.c_contiguous:
            return array, shape[-1], shape[:-1], ()
        if array.ndim == 0 and kind.kind in "iufc":
            raise wrong_value("samples", "an array whose last axis is time", samples)
        if kind not in self._floats:
            if kind in self._integers:
                if not self._real and array.shape[-1] % 2:
                    raise ValueError(
                        f"samples of dtype {kind.name} must be interleaved I/Q for a complex plan, "
                        f"an even number along the last axis; got shape {array.shape}"
                    )
            else:
                self._check_float(array)
                wider = kind.newbyteorder("=")
                array = array.astype("float32" if wider == np.float16 else wider)
        if not array.flags.c_contiguous:
            array = np.ascontiguousarray(array)
        count, scaling = array.shape[-1], self._integers.get(array.dtype, ())
        if scaling and not self._real:
            count //= 2
        return array, count, array.shape[:-1], scaling

    def _check_float(self, array):
        kind, name = array.dtype.kind, array.dtype.name
        if kind not in "fc":
            raise wrong_type(
                "samples", "complex or real floats, or int8, uint8 or int16 integers", array
            )
        if kind == "c" and self._real:
            raise wrong_type("samples", "real, since plan.real is True", array)
        needs = np.result_type(array.dtype, np.complex64)
        if needs.itemsize > self._dtype.itemsize:
            way = (
                f'dtype="{needs.name}" for the bank'
                if needs == np.complex128
                else "samples of complex128 or lower precision"
            )
            lower = "complex64" if kind == "c" else "float32"
            raise TypeError(
                f"samples must not be of higher precision than the bank's {self._dtype.name}; got "
                f"{name}. Ask for {way}, or pass samples.astype({lower!r})"
            )
