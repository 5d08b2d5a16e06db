"""What is asked of a minimax design, and which of its two ripples is free."""

import math

__all__ = ["ByPassband", "ByStopband", "ByWeight", "Figures"]


class Figures:
    """What is asked of the two bands."""

    def __init__(self, channels, passband, passband_db, stopband_db, weight):
        self.channels, self.passband = channels, passband
        self.passband_db, self.stopband_db, self.weight = passband_db, stopband_db, weight
        if weight is not None and (passband_db is not None or stopband_db is not None):
            raise ValueError(
                f"weight is for designs with neither figure fixed; got weight {weight:g} with "
                f"passband_db {passband_db} and stopband_db {stopband_db}"
            )

    def require_both(self):
        if self.passband_db is None or self.stopband_db is None:
            raise ValueError(
                "taps_per_branch must be an integer of 1 or more unless both passband_db and "
                f"stopband_db are given; got taps_per_branch None, passband_db {self.passband_db} "
                f"and stopband_db {self.stopband_db}"
            )


class ByWeight:
    """deviation = weight * delta."""

    def __init__(self, weight):
        self.weight = weight

    def free(self, level):
        return level

    def __call__(self, u):
        return u, u + math.log(self.weight)

    def slopes(self, u):
        return 1.0, 1.0


class ByStopband:
    """delta fixed, the passband deviation free."""

    def __init__(self, delta, weight):
        self.delta, self.weight = delta, weight

    def free(self, level):
        return level + math.log(self.weight)

    def __call__(self, u):
        return math.log(self.delta), u

    def slopes(self, u):
        return 0.0, 1.0


class ByPassband:
    """The passband deviation fixed, delta free."""

    def __init__(self, deviation):
        self.deviation = deviation

    def free(self, level):
        return level

    def __call__(self, u):
        return u, math.log(self.deviation)

    def slopes(self, u):
        return 1.0, 0.0
