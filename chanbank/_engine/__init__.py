"""Hot kernels only: fold, unfold, DFT plans, blocks and threads. Prepared arrays in."""

from chanbank._engine.numpy_engine import NumpyAnalysisEngine
from chanbank._engine.spec import AnalysisSpec

__all__ = ["AnalysisSpec", "make_analysis_engine"]


def make_analysis_engine(spec):
    """The engine that runs an analysis spec on this machine; its `name` says which it is."""
    return NumpyAnalysisEngine(spec)
