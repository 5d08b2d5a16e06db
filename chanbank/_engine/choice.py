"""The one place that chooses between the compiled engine and the NumPy engine."""

import importlib.util
import os
from functools import cache

from chanbank._engine.numpy_engine import NumpyAnalysisEngine
from chanbank._engine.numpy_synthesis import NumpySynthesisEngine

__all__ = ["make_analysis_engine", "make_synthesis_engine"]


def make_analysis_engine(spec):
    """The engine that runs an analysis spec on this machine; its `name` says which it is."""
    if _compiled():
        from chanbank._engine.numba_engine import NumbaAnalysisEngine

        return NumbaAnalysisEngine(spec)
    return NumpyAnalysisEngine(spec)


def make_synthesis_engine(spec):
    """The engine that runs a synthesis spec on this machine; its `name` says which it is."""
    if _compiled():
        from chanbank._engine.numba_synthesis import NumbaSynthesisEngine

        return NumbaSynthesisEngine(spec)
    return NumpySynthesisEngine(spec)


@cache
def _compiled():
    """Whether Numba is installed and FFTW can be reached from compiled code.

    The environment variable CHANBANK_ENGINE=numpy asks for the NumPy engine.
    """
    if os.environ.get("CHANBANK_ENGINE", "") == "numpy":
        return False
    if importlib.util.find_spec("numba") is None:
        return False
    try:
        from chanbank._engine.fftw import available
    except ImportError:
        return False
    return available()
