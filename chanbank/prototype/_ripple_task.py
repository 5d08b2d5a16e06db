"""From figures to ripples: which of the two bands is fixed, and the design that follows."""

import functools
import math

import numpy as np
import scipy.optimize

from chanbank.prototype._bands import BandSet, stretched
from chanbank.prototype._measure import band_extremes, decibels, stopband_ripples
from chanbank.prototype._ripple_start import short_solution, solve_at
from chanbank.prototype.lengths import deviation, length_estimates, ripple_db
from chanbank.prototype.prototype import Prototype

__all__ = ["DEEPEST_DB", "Figures", "RippleTask"]

# Up to this many taps the exchange algorithm designs the filter itself.
_DIRECT = 400
_DIRECT_BANDS = 800

# Ripples below these are left to rounding: a design is not pushed past them.
DEEPEST_DB = 160.0
_FLATTEST = 1e-8


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


class _ByWeight:
    """deviation = weight * delta."""

    def __init__(self, weight):
        self.weight = weight

    def free(self, level):
        return level

    def __call__(self, u):
        return u, u + math.log(self.weight)

    def slopes(self, u):
        return 1.0, 1.0


class _ByStopband:
    """delta fixed, the passband deviation free."""

    def __init__(self, delta, weight):
        self.delta, self.weight = delta, weight

    def free(self, level):
        return level + math.log(self.weight)

    def __call__(self, u):
        return math.log(self.delta), u

    def slopes(self, u):
        return 0.0, 1.0


class _ByPassband:
    """The passband deviation fixed, delta free."""

    def __init__(self, deviation):
        self.deviation = deviation

    def free(self, level):
        return level

    def __call__(self, u):
        return u, math.log(self.deviation)

    def slopes(self, u):
        return 1.0, 0.0


class RippleTask:
    """One specification, solved at any length."""

    def __init__(self, figures, lowpass, stopband, slope_db):
        self.figures, self.lowpass = figures, lowpass
        self.stopband, self.slope_db = stopband, slope_db
        self.pieces = isinstance(lowpass, BandSet)
        self.channels = figures.channels
        self._memory, self._near = {}, {}

    def prototype(self, length):
        found = self.taps(length)
        reached = self.finish(found)
        wanted = self.figures
        if wanted.passband_db is not None and wanted.stopband_db is not None:
            short = reached.design["passband_db"] - wanted.passband_db
            if short > 1e-6 * wanted.passband_db:
                needed = -(-self.shortest().length // self.channels)
                raise ValueError(
                    f"{length} taps ({length // self.channels} per branch) with stopband_db "
                    f"{wanted.stopband_db:g} reach passband_db "
                    f"{reached.design['passband_db']:.4g}, not {wanted.passband_db:g}; "
                    f"taps_per_branch {needed} would, or a wider transition"
                )
        return reached

    def finish(self, taps):
        taps = taps / taps.sum()
        lowpass = self.lowpass
        shaped = lowpass.slope or self.pieces
        ripples = stopband_ripples(
            taps,
            self.channels,
            lowpass.stopband,
            levels=(lambda f: lowpass.levels(f, self.channels)) if shaped else None,
            also=lowpass.edges if self.pieces else None,
        )
        low, high = band_extremes(taps, self.channels, 0.0, lowpass.passband)
        # Half the sample rate is no ripple but a null for even lengths, and the edge may be none.
        lobes = ripples[ripples > 0.5 * ripples.max()]
        stopband_db = -float(decibels(ripples.max()))
        return Prototype(
            taps,
            self.channels,
            label=f"equiripple {stopband_db:.0f} dB",
            design={
                "method": "equiripple",
                "passband": lowpass.passband,
                "stopband": [list(b) for b in lowpass.pieces] if self.pieces else lowpass.stopband,
                "slope_db": self.slope_db,
                "passband_db": float(decibels(high / low)),
                "stopband_db": stopband_db,
                "peak_spread_db": float(decibels(ripples.max() / lobes.min())),
            },
        )

    def taps(self, length):
        """Taps for the figures at this length, not normalised."""
        wanted = self.figures
        if wanted.stopband_db is None and wanted.passband_db is None:
            return self._solved(length, "weight", wanted.weight or 1.0)[0]
        if wanted.stopband_db is not None:
            return self._by_stopband(length, 10 ** (-wanted.stopband_db / 20))
        return self._by_passband(length, deviation(wanted.passband_db))

    def _by_stopband(self, length, figure):
        # The figure is relative to H(0), which may be a crest or a trough of the passband.
        delta = figure
        for _ in range(4):
            ratio = self._ratio(length, lambda level, dev, d=delta: level - math.log(d))
            if ratio is None or delta * ratio < _FLATTEST:
                return self._solved(length, "passband", _FLATTEST)[0]
            taps, centre = self._solved(length, "stopband", delta, ratio)
            if abs(figure * centre / delta - 1) < 1e-9:
                break
            delta = figure * centre
        return taps

    def _by_passband(self, length, dev):
        ratio = self._ratio(length, lambda level, reached: reached - math.log(dev))
        deepest = 10 ** (-DEEPEST_DB / 20)
        if ratio is None or dev / ratio < deepest:
            ratio = self._ratio(length, lambda level, reached: level - math.log(deepest))
            return self._solved(length, "stopband", deepest, ratio)[0]
        return self._solved(length, "passband", dev, ratio)[0]

    def _short(self, length):
        """Length and sample rate (channel spacings) of the filter that the exchange solves."""
        if length <= (_DIRECT_BANDS if self.pieces else _DIRECT):
            return length, self.channels
        branch = length / self.channels
        short = max(192, math.ceil(6 * self.lowpass.stopband * branch))
        if self.pieces:
            short = max(_DIRECT_BANDS - 1, short)
            branch = (length - 1) / self.channels
            short += (short + length) % 2
            return short, (short - 1) / branch
        short += (short + length) % 2
        return (short, short / branch) if short < length else (length, self.channels)

    def _exchange(self, length, ratio, *, rough=False):
        key = length, ratio, rough
        if key not in self._memory:
            short, rate = self._short(length)
            found = short_solution(self.lowpass, short, rate, ratio, self._near.get(length), rough=rough)
            self._memory[key] = found
            if found is not None:
                self._near[length] = found
        return self._memory[key]

    def _ratio(self, length, miss):
        """The ratio of ripples at which `miss(log delta, log deviation)` is zero, or None.

        None where a ripple on the way falls below what the exchange resolves.
        """
        even = self._exchange(length, 1.0, rough=True)
        if even is None:
            raise ValueError(self._unsolved(length))

        def at(x, rough=True):
            found = self._exchange(length, math.exp(x), rough=rough)
            if found is None or min(found.delta, found.delta * math.exp(x)) < 1e-11:
                raise _TooDeep
            here = math.log(found.delta)
            return miss(here, here + x)

        level = math.log(even.delta)
        first = miss(level, level)
        # Raising the ratio lowers delta and raises the deviation, each by some part of it.
        rises = miss(0.0, 1.0) > miss(0.0, 0.0)
        step = -max(abs(first), 0.1) if (first > 0) == rises else max(abs(first), 0.1)
        low, high = 0.0, step
        try:
            while at(low) * at(high) > 0:
                low, high = high, high + step
            root = scipy.optimize.brentq(at, low, high, xtol=1e-3)
            if self._short(length)[0] == length:
                root = _secant(lambda x: at(x, rough=False), root)
        except _TooDeep:
            return None
        return math.exp(root)

    def _solved(self, length, kind, value, ratio=None):
        """(taps, A(0)) with one quantity fixed: the weight, delta, or the passband deviation.

        The taps are in the scale where the middle of the passband is 1.
        """
        if kind == "weight":
            ratio = value
        elif ratio is None:
            ratio = self._ratio(length, lambda level, reached: reached - math.log(value))
        start = None if ratio is None else self._exchange(length, ratio)
        if start is None:
            raise ValueError(self._unsolved(length))
        short, rate = self._short(length)
        if short == length:
            return start.taps, abs(start.taps.sum())
        if self.pieces:
            taps = stretched(start.taps, length)
            return taps, abs(taps.sum())
        model = self._model(length, start, rate, kind, value, ratio)
        ahead, behind = model.parts(np.zeros(1))
        return model.taps(), float(0.5 * (ahead + behind)[0])

    def _model(self, length, start, rate, kind, value, ratio):
        pair = {
            "weight": lambda: _ByWeight(value),
            "stopband": lambda: _ByStopband(value, ratio),
            "passband": lambda: _ByPassband(value),
        }[kind]()
        model = solve_at(self.lowpass, start, rate, length, self.channels, pair)
        if model is None:
            raise ValueError(self._unsolved(length))
        return model

    def _unsolved(self, length):
        lowpass = self.lowpass
        reach = length_estimates(
            self.channels,
            passband=lowpass.passband,
            stopband=lowpass.stopband,
            passband_db=ripple_db(1e-8),
            stopband_db=DEEPEST_DB,
        )["kaiser equiripple"]
        if length > 0.9 * reach:
            return (
                f"taps_per_branch must be at most about {math.floor(0.9 * reach / self.channels)} "
                f"between passband {lowpass.passband:g} and stopband {lowpass.stopband:g}: beyond "
                f"it both ripples fall below double precision; got {length / self.channels:g}"
            )
        return (
            f"no equiripple design found for {length} taps between passband {lowpass.passband:g} "
            f"and stopband {lowpass.stopband:g} (channel spacings): too few taps for these "
            "ripples, or hundreds of ripples in the passband"
        )

    def shortest(self):
        """The least length that meets both figures."""
        lowpass, wanted = self.lowpass, self.figures
        dev, delta = deviation(wanted.passband_db), 10 ** (-wanted.stopband_db / 20)
        guess = length_estimates(
            self.channels,
            passband=lowpass.passband,
            stopband=lowpass.stopband,
            passband_db=wanted.passband_db,
            stopband_db=wanted.stopband_db,
        )["kaiser equiripple"]
        ratio = dev / delta

        @functools.cache
        def meets(length):
            start = self._exchange(length, ratio)
            if start is None:
                return False
            short, rate = self._short(length)
            if short == length or self.pieces:
                return start.delta <= delta
            return self._model(length, start, rate, "weight", ratio, ratio).level <= math.log(delta)

        high = max(1, round(guess))
        step = max(1, high // 64)
        while not meets(high):
            high += step
            if high > 4 * guess + 64:
                raise ValueError(self._unsolved(high))
        while high > step and meets(high - step):
            high -= step
        low = max(0, high - step)
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (low, middle) if meets(middle) else (middle, high)
        # With the stopband at its figure relative to H(0), the passband may want a tap more.
        for length in range(max(1, high - 2), high + 16):
            if meets(length) or length >= high:
                found = self.finish(self.taps(length))
                if found.design["passband_db"] <= wanted.passband_db * (1 + 1e-6):
                    return found
        raise ValueError(self._unsolved(high))


class _TooDeep(Exception):
    """A ripple below what double precision can use."""


def _secant(function, x):
    """A root next to x of a smooth function, to 1e-10."""
    step, value = 1e-2, function(x)
    for _ in range(8):
        other = function(x + step)
        if other == value:
            break
        x, value, step = x + step, other, -other * step / (other - value)
        if abs(step) < 1e-10:
            break
    return x
