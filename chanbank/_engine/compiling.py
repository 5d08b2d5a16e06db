"""Compiling: kernels, and the runs that are made of them."""

from numba import njit

__all__ = ["compiled", "kernel"]

_OPTIONS = {"nogil": True, "error_model": "numpy"}

# A function for other compiled code. What C would call is left out: less to compile.
kernel = njit(no_cfunc_wrapper=True, **_OPTIONS)


def compiled(signature):
    """Decorate a run: compiled at once for one signature, and kept on disk for the next process."""

    def decorate(function):
        try:
            return njit(signature, cache=True, **_OPTIONS)(function)
        except RuntimeError:
            # Neither the package's folder nor the user's cache folder can be written.
            return njit(signature, **_OPTIONS)(function)

    return decorate
