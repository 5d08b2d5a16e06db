"""Prototypes in integers: the best common scaling, and the word length that keeps a stopband."""

import math
from dataclasses import dataclass

import numpy as np

from chanbank._blas import one_blas_thread
from chanbank._checks import Instance, Integer, Optional, Real, checked
from chanbank.metrics.bands import OCCUPIED
from chanbank.metrics.compare import compare_reports
from chanbank.metrics.formula import bank_report
from chanbank.plan import ChannelPlan
from chanbank.prototype._measure import decibels, stopband_peak
from chanbank.prototype.prototype import Prototype

__all__ = ["QuantisedPrototype", "quantised", "rounding_floor_db", "word_length"]

_BITS = Integer(2, 32)
_EDGE = Optional(Real(0))

# Scalings tried from the largest that fits down to half of it; below half, one bit is wasted.
_SCALINGS = 257

# Above this many taps a try costs a second, and the error hardly depends on the scaling.
_MANY = 1 << 17


@dataclass(frozen=True)
class QuantisedPrototype:
    """A prototype whose taps are whole multiples of one step.

    Attributes
    ----------
    prototype : Prototype
        ``integers * step``: what a bank with these coefficients really has; sum(h) is near 1.
    integers : numpy.ndarray
        int64, read-only, shape (L,), within -2^(bits-1) .. 2^(bits-1) - 1.
    step : float
        Value of one unit of the last place.
    bits : int
        Word length, sign included.
    ideal : Prototype
        What was quantised.

    Examples
    --------
    See `quantised`.
    """

    prototype: Prototype
    integers: np.ndarray
    step: float
    bits: int
    ideal: Prototype

    def branches(self):
        """The integers branch by branch, shape (channels, taps_per_branch).

        Examples
        --------
        See `quantised`.
        """
        rows = self.prototype.taps_per_branch
        padded = np.zeros(rows * self.prototype.channels, dtype=np.int64)
        padded[: len(self.integers)] = self.integers
        return np.ascontiguousarray(padded.reshape(rows, self.prototype.channels).T)

    @checked(plan=Instance(ChannelPlan), occupied_bandwidth=OCCUPIED, stopband_edge=_EDGE)
    def reports(self, plan, *, occupied_bandwidth=None, stopband_edge=None):
        """The reports by formula of the ideal and the quantised bank.

        Parameters
        ----------
        plan : ChannelPlan
        occupied_bandwidth, stopband_edge
            As in `bank_report`.

        Returns
        -------
        ideal, quantised : BankReport

        Raises
        ------
        TypeError, ValueError
            As `bank_report`.

        Examples
        --------
        See `quantised`.
        """
        both = (self.ideal, self.prototype)
        return tuple(
            bank_report(plan, h, occupied_bandwidth=occupied_bandwidth, stopband_edge=stopband_edge)
            for h in both
        )

    @checked(plan=Instance(ChannelPlan), occupied_bandwidth=OCCUPIED, stopband_edge=_EDGE)
    def compare(self, plan, *, occupied_bandwidth=None, stopband_edge=None):
        """Both reports side by side, as `compare_reports` shows them.

        Parameters
        ----------
        plan : ChannelPlan
        occupied_bandwidth, stopband_edge
            As in `bank_report`.

        Returns
        -------
        ReportComparison

        Raises
        ------
        TypeError, ValueError
            As `bank_report`.

        Examples
        --------
        See `quantised`.
        """
        ideal, coarse = self.reports(
            plan, occupied_bandwidth=occupied_bandwidth, stopband_edge=stopband_edge
        )
        return compare_reports([ideal, coarse], labels=["ideal", f"{self.bits} bits"])

    def __repr__(self):
        return (
            f"QuantisedPrototype({self.bits} bits, length={len(self.integers)}, "
            f"channels={self.prototype.channels}, step={self.step:.6g})"
        )


@checked(
    prototype=Instance(Prototype), bits=_BITS, stopband=Optional(Real(above=0, unit="spacings"))
)
@one_blas_thread
def quantised(prototype, bits, *, stopband=None):
    """The prototype in integers of `bits` bits, with the best common scaling.

    integers[i] = round(h[i] / step), h_q[i] = integers[i] step; the step is common to all taps and
    any real number, since a gain common to all channels costs nothing. Of the steps that use at
    least half of the range, from max abs(h) / (2^(bits-1) - 1) upwards, the one is taken that
    makes sum((h_q - h)^2) least or, with `stopband`, the stopband peak of h_q.

    Parameters
    ----------
    prototype : Prototype
    bits : int
        Word length with its sign, 2 to 32.
    stopband : float, optional
        One-sided stopband edge in channel spacings to choose the scaling by.

    Returns
    -------
    QuantisedPrototype

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a prototype of zeros; a stopband edge
        beyond half the sample rate.

    References
    ----------
    D. S. K. Chan and L. R. Rabiner, IEEE Trans. Audio and Electroacoustics 21(4), 354-366, 1973
    (what rounding does to the response).

    Examples
    --------
    >>> from chanbank import kaiser_prototype
    >>> from chanbank.fixedpoint.quantise import quantised
    >>> h = kaiser_prototype(64, stopband_db=90, passband=0.4, stopband=1.0)
    >>> q = quantised(h, 12)
    >>> int(abs(q.integers).max()) <= 2047, q.prototype.length == h.length
    (True, True)
    """
    taps = prototype.taps
    largest = np.abs(taps).max()
    if largest == 0:
        raise ValueError("prototype must have a tap other than zero; all its taps are 0")
    _require_edge(prototype, stopband)
    top = ((1 << (bits - 1)) - 1) / largest
    tries = _SCALINGS if len(taps) <= _MANY else 9
    # A symmetric prototype stays symmetric: its halves are rounded alike.
    symmetric = np.abs(taps - taps[::-1]).max() <= 1e-12 * largest
    exact = 0.5 * (taps + taps[::-1]) if symmetric else taps
    best = None
    for scale in top * 2.0 ** -np.linspace(0, 1, tries):
        integers = np.rint(exact * scale)
        if stopband is None:
            miss = float(((integers / scale - exact) ** 2).sum())
        else:
            miss = stopband_peak(integers, prototype.channels, stopband) if integers.sum() else 9e9
        if best is None or miss < best[0]:
            best = miss, scale, integers
    _, scale, integers = best
    integers = integers.astype(np.int64)
    integers.flags.writeable = False
    return QuantisedPrototype(
        Prototype(
            integers / scale,
            prototype.channels,
            label=f"{prototype.label} in {bits} bits".strip(),
            design=prototype.design | {"quantised_bits": bits, "quantised_step": float(1 / scale)},
            pair_delay=prototype.pair_delay,
        ),
        integers,
        float(1 / scale),
        bits,
        prototype,
    )


def _require_edge(prototype, stopband):
    if stopband is not None and stopband > prototype.channels / 2:
        raise ValueError(
            f"stopband must satisfy stopband <= channels / 2; got {stopband:g} > "
            f"{prototype.channels / 2:g}"
        )


@checked(prototype=Instance(Prototype), bits=_BITS)
def rounding_floor_db(prototype, bits):
    """What rounding the taps to `bits` bits adds to the response, by the published formulas.

    With q = max abs(h) / (2^(bits-1) - 1) and independent roundings, uniform within q/2, the rms
    error of H away from 0 and half the sample rate is q sqrt(L/12) (for L odd and symmetric,
    Chan and Rabiner's sigma(w) = (q/2) sqrt((2 L - 1)/3) W(w) with W near 1/sqrt(2)); no error
    exceeds L q/2.

    Parameters
    ----------
    prototype : Prototype
    bits : int
        2 to 32.

    Returns
    -------
    rms, bound : float
        Both in dB relative to H(0).

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range.

    References
    ----------
    D. S. K. Chan and L. R. Rabiner, IEEE Trans. Audio and Electroacoustics 21(4), 354-366, 1973.

    Examples
    --------
    >>> from chanbank import window_prototype
    >>> from chanbank.fixedpoint.quantise import rounding_floor_db
    >>> rms, bound = rounding_floor_db(window_prototype(64, 16, ("kaiser", 10.0)), 16)
    >>> round(rms, 1)
    -107.1
    """
    length = prototype.length
    gain = abs(prototype.taps.sum())
    step = np.abs(prototype.taps).max() / ((1 << (bits - 1)) - 1)
    rms = step * math.sqrt(length / 12) / gain
    return float(decibels(rms)), float(decibels(length * step / 2 / gain))


@checked(
    prototype=Instance(Prototype),
    stopband=Real(above=0, unit="spacings"),
    stopband_db=Real(above=0, unit="dB"),
)
@one_blas_thread
def word_length(prototype, *, stopband, stopband_db):
    """The shortest word whose rounded taps keep the stopband, as a quantised prototype.

    The smallest b for which max abs(H_q(f)) over f >= stopband is at most 10^(-stopband_db/20) of
    H_q(0), measured on the rounded taps with their best scaling; the formulas only say where to
    start looking.

    Parameters
    ----------
    prototype : Prototype
    stopband : float
        One-sided stopband edge in channel spacings.
    stopband_db : float
        Attenuation to keep, dB, above 0.

    Returns
    -------
    QuantisedPrototype
        With the smallest ``bits``.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a stopband that the prototype itself does
        not have, or that 32 bits do not keep.

    References
    ----------
    D. S. K. Chan and L. R. Rabiner, IEEE Trans. Audio and Electroacoustics 21(4), 354-366, 1973.

    Examples
    --------
    >>> from chanbank import kaiser_prototype
    >>> from chanbank.fixedpoint.quantise import word_length
    >>> h = kaiser_prototype(64, stopband_db=90, passband=0.4, stopband=1.0)
    >>> word_length(h, stopband=1.0, stopband_db=70).bits
    12
    """
    _require_edge(prototype, stopband)
    own = -float(decibels(stopband_peak(prototype.taps, prototype.channels, stopband)))
    if own < stopband_db:
        raise ValueError(
            f"stopband_db must be one that the prototype has: {own:.2f} dB from {stopband:g} "
            f"spacings; got {stopband_db:g}"
        )

    def kept(bits):
        q = quantised(prototype, bits, stopband=stopband)
        taps = q.prototype.taps
        if not taps.sum():
            return None
        reached = -float(decibels(stopband_peak(taps, prototype.channels, stopband)))
        return q if reached >= stopband_db else None

    floor, _ = rounding_floor_db(prototype, 16)
    bits = min(32, max(2, 16 + math.ceil((stopband_db + floor) / 6.02)))
    found = kept(bits)
    while found is None and bits < 32:
        bits += 1
        found = kept(bits)
    if found is None:
        raise ValueError(
            f"stopband_db {stopband_db:g} from {stopband:g} spacings needs more than 32 bits"
        )
    while bits > 2:
        shorter = kept(bits - 1)
        if shorter is None:
            break
        bits, found = bits - 1, shorter
    return found
