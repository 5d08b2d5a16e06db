"""FFTW plans that compiled code can run: made once, shared by all banks and workers.

pyFFTW brings the library and a plan object for Python; the engine needs the plan itself, to run it
in the middle of compiled code. So plans are made here through the same library that pyFFTW has
loaded. FFTW's planner is not thread-safe, and pyFFTW's own lock is not visible from outside: the
library's planner hooks are set to the critical section of the OpenMP runtime it is linked with,
which serialises all planning in the process, whoever asks for it.
"""

import ctypes
import weakref

import numpy as np
import pyfftw.pyfftw

from chanbank._engine.buffers import aligned_bytes
from chanbank._engine.planning import effort, planning

__all__ = ["Plan", "available", "make_plan"]

_FORWARD, _BACKWARD = -1, 1
_DESTROY_INPUT = 1 << 0
_EFFORTS = {"FFTW_MEASURE": 0, "FFTW_PATIENT": 1 << 5, "FFTW_ESTIMATE": 1 << 6}

_plans = weakref.WeakValueDictionary()


class _Dimension(ctypes.Structure):
    """fftw_iodim64: length, input stride, output stride."""

    _fields_ = [(name, ctypes.c_ssize_t) for name in ("n", "input", "output")]


def _open_library():
    """The FFTW that pyFFTW has loaded, with planning made safe, or None."""
    try:
        library = ctypes.CDLL(pyfftw.pyfftw.__file__)  # looks up names in what it is linked with
        enter, leave = library.GOMP_critical_start, library.GOMP_critical_end
        for prefix in ("fftw_", "fftwf_"):
            for name in ("plan_guru64_dft", "plan_guru64_dft_r2c", "plan_guru64_dft_c2r"):
                getattr(library, prefix + name).restype = ctypes.c_void_p
                getattr(library, prefix + "execute_dft" + name[len("plan_guru64_dft") :])
            getattr(library, prefix + "destroy_plan").argtypes = [ctypes.c_void_p]
            getattr(library, prefix + "set_planner_hooks")(enter, leave)
    except (OSError, AttributeError):
        return None
    return library


_library = _open_library()


def available():
    """Whether compiled code can run FFTW plans here."""
    return _library is not None


class Plan:
    """`rows` DFTs of `points` points, from rows of one stride (bytes) to rows of another."""

    def __init__(self, points, rows, dtype, kind, source_stride, target_stride):
        single = np.dtype(dtype) == np.complex64
        self._prefix = "fftwf_" if single else "fftw_"
        number = np.dtype(dtype).itemsize
        halves = {"forward": (1, 1), "inverse": (1, 1), "real": (2, 1), "real-inverse": (1, 2)}
        given, made = (number // half for half in halves[kind])
        length = _Dimension(points, 1, 1)
        batch = _Dimension(rows, source_stride // given, target_stride // made)
        suffix = {"real": "_r2c", "real-inverse": "_c2r"}.get(kind, "")
        planner = getattr(_library, f"{self._prefix}plan_guru64_dft{suffix}")
        self.execute = _address(getattr(_library, f"{self._prefix}execute_dft{suffix}"))
        flag, seconds = effort(points)
        # Planning destroys what its arrays hold: it works on arrays of its own.
        source, target = aligned_bytes(rows * source_stride), aligned_bytes(rows * target_stride)
        sign = () if suffix else (_BACKWARD if kind == "inverse" else _FORWARD,)
        places = (ctypes.c_void_p(source.ctypes.data), ctypes.c_void_p(target.ctypes.data))
        flags = ctypes.c_uint(_EFFORTS[flag] | _DESTROY_INPUT)
        limit = getattr(_library, f"{self._prefix}set_timelimit")
        limit(ctypes.c_double(-1.0 if seconds is None else seconds))
        self.address = planner(
            1, ctypes.byref(length), 1, ctypes.byref(batch), *places, *sign, flags
        )
        limit(ctypes.c_double(-1.0))
        if not self.address:
            raise MemoryError(f"FFTW made no plan for {rows} x {points} points")

    def __del__(self):
        address = getattr(self, "address", None)
        if address and getattr(_library, "fftw_destroy_plan", None):
            getattr(_library, self._prefix + "destroy_plan")(address)


def make_plan(points, rows, dtype, kind, source_stride, target_stride):
    """The process's plan of these numbers: banks of one geometry share it, and so their bits."""
    key = (points, rows, np.dtype(dtype).char, kind, source_stride, target_stride)
    plan = _plans.get(key)
    if plan is None:
        with planning():
            plan = _plans.get(key)
            if plan is None:
                plan = _plans[key] = Plan(points, rows, dtype, kind, source_stride, target_stride)
    return plan


def _address(function):
    return ctypes.cast(function, ctypes.c_void_p).value
