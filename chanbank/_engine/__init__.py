"""Hot kernels only: fold, unfold, DFT plans, blocks and threads. Prepared arrays in."""

from chanbank._engine.numpy_engine import NumpyAnalysisEngine
from chanbank._engine.numpy_synthesis import NumpySynthesisEngine
from chanbank._engine.spec import AnalysisSpec, SynthesisSpec

__all__ = ["AnalysisSpec", "SynthesisSpec", "make_analysis_engine", "make_synthesis_engine"]


def make_analysis_engine(spec):
    """The engine that runs an analysis spec on this machine; its `name` says which it is."""
    return NumpyAnalysisEngine(spec)


def make_synthesis_engine(spec):
    """The engine that runs a synthesis spec on this machine; its `name` says which it is."""
    return NumpySynthesisEngine(spec)
