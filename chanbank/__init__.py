"""Split wideband captures into channels, prove what each leaks, and put the band back together."""

from chanbank.analysis.bank import AnalysisBank
from chanbank.plan import ChannelPlan
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.synthesis.bank import SynthesisBank

__all__ = [
    "AnalysisBank",
    "ChannelPlan",
    "Prototype",
    "SynthesisBank",
    "boxcar_prototype",
]
