"""Hot kernels only: fold, unfold, DFT plans, blocks and threads. Prepared arrays in."""

from chanbank._engine.choice import make_analysis_engine, make_synthesis_engine
from chanbank._engine.spec import AnalysisSpec, SynthesisSpec

__all__ = ["AnalysisSpec", "SynthesisSpec", "make_analysis_engine", "make_synthesis_engine"]
