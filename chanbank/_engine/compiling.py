"""Compiling a run: kept on disk for the next process, where there is a place to keep it."""

from numba import njit

__all__ = ["compiled"]


def compiled(signature):
    """Decorate a run: compiled at once for one signature, without the interpreter's lock."""

    def decorate(function):
        options = {"nogil": True, "error_model": "numpy"}
        try:
            return njit(signature, cache=True, **options)(function)
        except RuntimeError:
            # Neither the package's folder nor the user's cache folder can be written.
            return njit(signature, **options)(function)

    return decorate
