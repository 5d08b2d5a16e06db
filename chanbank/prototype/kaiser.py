"""The Kaiser-window design that really meets its band edges, at the least length."""

import numpy as np
import scipy.optimize
import scipy.signal
import scipy.special

from chanbank._blas import one_blas_thread
from chanbank._checks import Integer, Optional, Real, checked
from chanbank.prototype._measure import band_extremes, decibels, stopband_peak, summit
from chanbank.prototype.lengths import deviation, require_band_edges, ripple_db
from chanbank.prototype.prototype import Prototype, _response

__all__ = ["kaiser_prototype"]

_LONGEST = 1 << 24

# What double-precision taps can still hold apart: their own rounding sits near -320 dB.
_DEEPEST_DB = 250.0

# Taps above which the search runs on a bank of half as many channels first.
_SCALED_ABOVE = 4096


@checked(
    channels=Integer(1, 1 << 20),
    stopband_db=Real(above=0, high=_DEEPEST_DB, unit="dB"),
    passband=Real(0),
    stopband=Real(above=0),
    taps_per_branch=Optional(Integer(1)),
    passband_db=Optional(Real(above=0, unit="dB")),
)
@one_blas_thread
def kaiser_prototype(
    channels, *, stopband_db, passband, stopband, taps_per_branch=None, passband_db=None
):
    """Shortest Kaiser-windowed sinc that meets its band edges, proved on its own response.

    h[i] = c I0(beta sqrt(1 - (2 i/(L - 1) - 1)^2)) sinc(2 fc (i - (L - 1)/2)/M), sum(h) = 1, cut
    off half-way at fc = (passband + stopband)/2. Kaiser's closed formulas for beta and L only set
    the start (they fall up to 2.5 dB short); length and beta are then searched until

        abs(H(f)) <= 10^(-stopband_db/20)  for f from `stopband` to M/2, and
        max abs(H) / min abs(H) <= 10^(passband_db/20)  for f from 0 to `passband`,

    both measured on the taps. At that length no beta leaves less than the returned one's error;
    one tap less, and no beta meets both.

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.
    stopband_db : float
        Attenuation in dB relative to H(0), above 0 and at most 250.
    passband, stopband : float
        One-sided band edges in channel spacings, 0 <= passband < stopband <= M/2.
    taps_per_branch : int, optional
        Use L = P M taps and the beta with the deepest stopband; an error when that does not meet
        the figures. By default L is the least length that does, any integer.
    passband_db : float, optional
        Passband ripple in dB, highest over lowest. By default that of a passband which deviates
        by as much as the stopband, 1 +- 10^(-stopband_db/20): what a windowed sinc has anyway.

    Returns
    -------
    Prototype
        sum(h) = 1; its ``design`` holds beta and the measured ``stopband_db`` and ``passband_db``.

    Raises
    ------
    TypeError
        A parameter of the wrong type.
    ValueError
        A value out of range; band edges that do not satisfy passband < stopband <= M/2; figures
        that `taps_per_branch` cannot meet (the message names the taps per branch that would);
        a design of more than 2**24 taps.

    References
    ----------
    J. F. Kaiser, "Nonrecursive digital filter design using the I0-sinh window function", Proc.
    IEEE Int. Symp. Circuits and Systems, 1974; A. V. Oppenheim and R. W. Schafer, Discrete-Time
    Signal Processing, ch. 7.

    Examples
    --------
    >>> from chanbank import kaiser_prototype
    >>> h = kaiser_prototype(192, stopband_db=80, passband=0.4, stopband=0.9)
    >>> h.taps_per_branch, round(h.design["stopband_db"], 1)
    (11, 80.0)
    """
    require_band_edges(channels, passband, stopband)
    task = _Task(channels, stopband_db, passband, stopband, passband_db)
    if taps_per_branch is None:
        return task.prototype(*task.shortest())
    length = channels * taps_per_branch
    beta, excess = task.best_beta(length)
    if excess > 0:
        raise ValueError(_shortfall(task, taps_per_branch, excess))
    return task.prototype(length, task.deepest_beta(length, beta))


class _Task:
    """One set of figures, and what any (length, beta) leaves of them."""

    def __init__(self, channels, stopband_db, passband, stopband, passband_db):
        self.channels, self.stopband_db = channels, stopband_db
        self.passband, self.stopband = passband, stopband
        self.passband_db = passband_db
        limit = 10 ** (-stopband_db / 20)
        self.passband_limit = limit if passband_db is None else deviation(passband_db)

    def taps(self, length, beta):
        position = np.arange(length) - (length - 1) / 2
        arch = np.sqrt(np.maximum(0.0, 1 - (2 * position / max(1, length - 1)) ** 2))
        cutoff = (self.passband + self.stopband) / self.channels
        taps = scipy.special.i0(beta * arch) * np.sinc(cutoff * position)
        return taps / taps.sum()

    def prototype(self, length, beta):
        # The search looks near the band edges; the whole response has the last word.
        for extra in range(64):
            taps = self.taps(length + extra, beta)
            reached = -float(decibels(stopband_peak(taps, self.channels, self.stopband)))
            low, high = band_extremes(taps, self.channels, 0.0, self.passband)
            kept = (high - low) / (high + low) <= self.passband_limit * (1 + 1e-4)
            if kept and reached >= self.stopband_db - 1e-4:
                break
            beta = self.best_beta(length + extra + 1, beta)[0]
        return Prototype(
            taps,
            self.channels,
            label=f"kaiser {self.stopband_db:g} dB",
            design={
                "method": "kaiser",
                "beta": float(beta),
                "passband": self.passband,
                "stopband": self.stopband,
                "stopband_db": reached,
                "passband_db": float(decibels(high / low)),
            },
        )

    def errors(self, length, beta):
        """Stopband peak and passband deviation, near the edges where a windowed sinc has them."""
        lobe = self.channels / length
        top = min(self.channels / 2, self.stopband + 5 * lobe)
        beyond = np.linspace(self.stopband, top, 61)
        inside = np.linspace(max(0.0, self.passband - 3 * lobe), self.passband, 49)
        inside = np.append(inside, np.linspace(0.0, inside[0], 17))
        both = np.abs(
            _response(self.taps(length, beta), self.channels, np.concatenate([beyond, inside]))
        )
        edge, rest = both[61:110], both[110:]
        low, high = min(-summit(-edge), rest.min()), max(summit(edge), rest.max())
        return summit(both[:61]), (high - low) / (high + low)

    def excess(self, length, beta):
        """By how many dB the worse of stopband and passband misses (at most 0: met)."""
        stop, ripple = self.errors(length, beta)
        return float(
            max(
                decibels(stop) + self.stopband_db,
                decibels(ripple / self.passband_limit) if ripple > 0 else -np.inf,
            )
        )

    def best_beta(self, length, near=None):
        """The beta with the least excess: a scan past the kinks where lobes cross the edge."""
        if near is None:
            width = (self.stopband - self.passband) / self.channels
            reach = 7.95 + 14.36 * width * max(length - 1, 1)
            start = scipy.signal.kaiser_beta(min(reach, 2 * self.stopband_db + 60))
            scan = np.unique(np.maximum(0.0, start * np.linspace(0.7, 1.3, 21) + 0.2))
            scan = np.append(0.0, scan) if start < 3 else scan
        else:
            scan = near * np.linspace(0.98, 1.02, 5)
        values = [self.excess(length, beta) for beta in scan]
        at = int(np.argmin(values))
        low, high = scan[max(at - 1, 0)], scan[min(at + 1, len(scan) - 1)]
        found = scipy.optimize.minimize_scalar(
            lambda beta: self.excess(length, beta),
            bounds=(low, high),
            method="bounded",
            options={"xatol": 1e-4 * max(high, 1.0)},
        )
        return (found.x, found.fun) if found.fun < values[at] else (scan[at], values[at])

    def deepest_beta(self, length, beta):
        """From a beta that meets both figures to the deepest stopband that keeps the passband."""

        def depth(value):
            stop, ripple = self.errors(length, value)
            return decibels(stop) if ripple <= self.passband_limit else np.inf

        scan = np.append(beta * np.linspace(0.7, 1.3, 41), beta)
        return float(scan[int(np.argmin([depth(value) for value in scan]))])

    def shortest(self):
        """The least length whose best beta meets the figures, and that beta."""
        width = (self.stopband - self.passband) / self.channels
        tightest = max(self.stopband_db, -float(decibels(self.passband_limit)))
        start = max(1, round(1 + (tightest - 7.95) / (14.36 * width)))
        if start > _LONGEST:
            raise ValueError(
                f"{self.stopband_db:g} dB between passband {self.passband:g} and stopband "
                f"{self.stopband:g} needs about {start} taps, more than {_LONGEST}: widen the "
                "transition, stopband - passband, or lower stopband_db"
            )
        beta, step = None, max(1, start // 64)
        if start > _SCALED_ABOVE and self.channels % 2 == 0:
            # Length over channels hardly depends on M: let the half-size bank find it.
            half = _Task(
                self.channels // 2, self.stopband_db, self.passband, self.stopband, self.passband_db
            )
            length, beta = half.shortest()
            start, step = 2 * length, 2
        met = {}

        def meets(length):
            nonlocal beta
            if length not in met:
                best = self.best_beta(length, beta)
                met[length] = best
                beta = best[0] if self.channels > 64 else None
            return met[length][1] <= 0

        high = start
        while not meets(high):
            high += step
        while high > step and meets(high - step):
            high -= step
        low = max(0, high - step)
        while high - low > 1:
            middle = (low + high) // 2
            low, high = (low, middle) if meets(middle) else (middle, high)
        # The excess has a kink wherever a lobe passes an edge: look just below the crossing too.
        below = 6 if self.channels <= 64 else 2
        high = next((n for n in range(max(1, high - below), high) if meets(n)), high)
        return high, met[high][0]


def _shortfall(task, taps_per_branch, excess):
    needed = -(-task.shortest()[0] // task.channels)
    return (
        f"taps_per_branch {taps_per_branch} misses stopband_db {task.stopband_db:g} or passband "
        f"ripple {ripple_db(task.passband_limit):.3g} dB by {excess:.2f} dB between passband "
        f"{task.passband:g} and stopband {task.stopband:g}; taps_per_branch {needed} meets them, "
        "or a wider transition, stopband - passband"
    )
