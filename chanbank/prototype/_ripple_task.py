"""From figures to ripples: which of the two bands is fixed, and the design that follows."""

import functools
import math

import numpy as np
import scipy.optimize

from chanbank.prototype._bands import BandSet, stretched
from chanbank.prototype._measure import band_extremes, decibels, stopband_ripples
from chanbank.prototype._ripple_figures import ByPassband, ByStopband, ByWeight
from chanbank.prototype._ripple_start import short_solution, solve_at
from chanbank.prototype.lengths import deviation, length_estimates, ripple_db
from chanbank.prototype.prototype import Prototype

__all__ = ["DEEPEST_DB", "RippleTask"]

# Up to this many taps the exchange algorithm designs the filter itself.
_DIRECT = 400
_DIRECT_BANDS = 800

# Ripples below these are left to rounding: a design is not pushed past them.
DEEPEST_DB = 150.0
_FLATTEST = 1e-7

# Up to this many taps, closed-form designs are aimed by their measured passband, unless its
# deviation is so small that rounding shows.
_MEASURED = 1 << 17
_NOISY = 1e-6

# A filter with larger ripples than this separates nothing.
_LOUDEST = 0.7

# For a ripple that is fixed: the other one, and its limit.
_OTHER = {"stopband": ("passband", _FLATTEST), "passband": ("stopband", 10 ** (-DEEPEST_DB / 20))}

# Rounds of aiming at a figure that the other band's ripple moves.
_AIMS = 24


class RippleTask:
    """One specification, solved at any length."""

    def __init__(self, figures, lowpass, stopband, slope_db):
        self.figures, self.lowpass = figures, lowpass
        self.stopband, self.slope_db = stopband, slope_db
        self.pieces = isinstance(lowpass, BandSet)
        self.channels = figures.channels
        self._memory, self._near, self._ratios = {}, {}, {}

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
        ripples, low, high = self._measured(taps)
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

    def _measured(self, taps):
        """Stopband peaks over their levels, lowest and highest in the passband; over H(0)."""
        lowpass = self.lowpass
        shaped = lowpass.slope or self.pieces
        ripples = stopband_ripples(
            taps,
            self.channels,
            lowpass.stopband,
            levels=(lambda f: lowpass.counted(f, self.channels)) if shaped else None,
            also=lowpass.edges if self.pieces else None,
        )
        return ripples, *band_extremes(taps, self.channels, 0.0, lowpass.passband)

    def taps(self, length):
        """Taps for the figures at this length, not normalised."""
        wanted = self.figures
        if wanted.stopband_db is not None:
            return self._aimed(length, "stopband", 10 ** (-wanted.stopband_db / 20))
        if wanted.passband_db is not None:
            return self._aimed(length, "passband", deviation(wanted.passband_db))
        return self._solved(length, "weight", wanted.weight or 1.0, wanted.weight or 1.0)[0]()

    def _aimed(self, length, kind, figure):
        """Taps whose measured ripple in one band is `figure`, and the other's the least."""
        other, limit = _OTHER[kind]
        value = figure
        for _ in range(_AIMS):
            ratio = self._ratio(length, kind, value)
            if ratio is None:
                return self._solved(length, other, limit, self._ratio(length, other, limit))[0]()
            # The stopband's figure is over H(0), which may be a crest or a trough of the passband.
            build, reached = self._solved(length, kind, value, ratio)
            if abs(reached / figure - 1) < 1e-6:
                break
            value = min(value * figure / reached, 0.9)
        if abs(reached / figure - 1) > 1e-3:
            raise ValueError(self._unsolved(length))
        return build()

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
            near = self._near.get(length)
            found = short_solution(self.lowpass, short, rate, ratio, near, rough=rough)
            self._memory[key] = found
            if found is not None:
                self._near[length] = found
        return self._memory[key]

    def _ratio(self, length, kind, value):
        """The ratio of ripples at which delta or the deviation has this value.

        None where the other ripple would fall below the limit of what double precision can use.
        """
        closed = self._short(length)[0] != length
        if closed and (length, kind) in self._ratios:
            # A start for the closed form, good enough for values nearby.
            return self._ratios[length, kind]
        goal = math.log(value)
        _, limit = _OTHER[kind]

        def at(x, rough=True):
            found = self._exchange(length, math.exp(x), rough=rough)
            if found is None or max(found.delta, found.delta * math.exp(x)) > _LOUDEST:
                raise _NoSolution
            ripples = found.delta, found.delta * math.exp(x)
            mine, other = ripples if kind == "stopband" else ripples[::-1]
            if other < limit / 3:
                raise _BeyondLimit
            return math.log(mine) - goal, other

        try:
            near = math.log(self._ratios.get((length, kind), 1.0))
            low, high = self._bracket(at, near, 1.0 if kind == "stopband" else -1.0)
            root = scipy.optimize.brentq(lambda x: at(x)[0], low, high, xtol=1e-3)
            if not closed:
                root = _secant(lambda x: at(x, rough=False)[0], root)
            if at(root)[1] < limit:
                raise _BeyondLimit
        except _BeyondLimit:
            return None
        except _NoSolution:
            raise ValueError(self._unsolved(length)) from None
        self._ratios[length, kind] = math.exp(root)
        return math.exp(root)

    @staticmethod
    def _bracket(at, near, sign):
        """Two points between which `at` changes sign, from `near` on."""
        first = at(near)[0]
        # Raising the ratio lowers delta and raises the deviation, each by some part of it.
        step = sign * math.copysign(max(abs(first), 0.1), first)
        low, high = near, near + step
        while True:
            try:
                if at(high)[0] * first <= 0:
                    return low, high
                low, high = high, high + step
            except (_NoSolution, _BeyondLimit):
                step /= 2
                high = low + step
                if abs(step) < 0.05:
                    raise

    def _solved(self, length, kind, value, ratio):
        """(function that makes the taps, reached) with one quantity fixed.

        The quantity is the weight, delta, or the passband deviation; what was reached is delta
        over H(0) or the deviation.
        """
        start = None if ratio is None else self._exchange(length, ratio)
        if start is None:
            raise ValueError(self._unsolved(length))
        short, rate = self._short(length)
        if short == length or self.pieces:
            taps = start.taps if short == length else stretched(start.taps, length)
            if kind == "weight":
                return (lambda: taps), ratio
            ripples, low, high = self._measured(taps)
            reached = ripples.max() if kind == "stopband" else (high - low) / (high + low)
            return (lambda: taps), float(reached)
        model = self._model(length, start, rate, kind, value, ratio)
        if kind == "stopband":
            ahead, behind = model.parts(np.zeros(1))
            over = math.exp(model.level) / float(0.5 * (ahead + behind)[0])
            return (lambda: self._checked(model, None)), over
        if kind == "passband" and length <= _MEASURED and value > _NOISY:
            taps = self._checked(model, value)
            low, high = band_extremes(taps, self.channels, 0.0, self.lowpass.passband)
            return (lambda: taps), (high - low) / (high + low)
        return (lambda: self._checked(model, None)), value

    def _checked(self, model, deviation):
        """The taps of a model whose own response has the model's ripples."""
        taps = model.taps()
        ripples, low, high = self._measured(taps)
        # The coefficients that the closed form drops tell where there are hardly any ripples.
        level = math.exp(model.level) / abs(taps.sum())
        if ripples.max() > level * 1.005 + 1e-13:
            raise ValueError(self._unsolved(len(taps)))
        if deviation is not None and (high - low) / (high + low) > 1.05 * deviation:
            raise ValueError(self._unsolved(len(taps)))
        return taps

    def _model(self, length, start, rate, kind, value, ratio):
        pair = {
            "weight": lambda: ByWeight(value),
            "stopband": lambda: ByStopband(value, ratio),
            "passband": lambda: ByPassband(value),
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
            passband_db=ripple_db(_FLATTEST),
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


class _BeyondLimit(Exception):
    """A ripple below what double precision can use."""


class _NoSolution(Exception):
    """No minimax filter found, or one that separates nothing."""


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
