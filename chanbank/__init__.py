"""Split wideband captures into channels, prove what each leaks, and put the band back together."""

from chanbank.plan import ChannelPlan
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.prototype import Prototype

__all__ = [
    "ChannelPlan",
    "Prototype",
    "boxcar_prototype",
]
