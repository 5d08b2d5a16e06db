"""Prototypes of least stopband energy: Slepian sequences and eigenfilters, at any length."""

import math

import numpy as np
import scipy.fft
import scipy.linalg
import scipy.optimize
import scipy.signal

from chanbank._blas import one_blas_thread
from chanbank._checks import Integer, Optional, Real, checked
from chanbank.prototype._measure import band_extremes, decibels, stopband_peak
from chanbank.prototype.lengths import require_band_edges
from chanbank.prototype.prototype import Prototype, _response

__all__ = ["energy_prototype"]

# Up to this many taps every tap is an unknown; above it the impulse response is a polynomial.
_DIRECT = 600

# A polynomial in time holds pi/2 L/M stopband cycles and an analytic margin.
_MARGIN = 40


@checked(
    channels=Integer(1, 1 << 20),
    taps_per_branch=Integer(1),
    stopband=Real(above=0),
    passband=Optional(Real(above=0)),
    passband_weight=Optional(Real(above=0)),
    passband_db=Optional(Real(above=0, unit="dB")),
)
@one_blas_thread
def energy_prototype(
    channels, taps_per_branch, *, stopband, passband=None, passband_weight=None, passband_db=None
):
    """The lowpass that lets the least energy through beyond its stopband edge.

    Among all L = P M symmetric taps it has the least

        E = 2/M integral_stopband^{M/2} abs(H(f))^2 df + weight 2/M integral_0^passband
            (A(f) - A(0))^2 df

    for its energy sum(h^2), A being the amplitude, and comes with sum(h) = 1. Without `passband`
    only the first term counts and h is the discrete prolate spheroidal (Slepian) sequence of
    time half-bandwidth P stopband: the least noise and the least sum of aliases from beyond the
    edge, but a rounded passband. With it, h is the eigenfilter, whose passband is flat to the
    degree that the weight says. Up to 600 taps the eigenvector is computed in the taps
    themselves; longer ones are polynomials in time, whose coefficients do not depend on M.

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.
    taps_per_branch : int
        P, 1 or more.
    stopband : float
        One-sided stopband edge in channel spacings, above 0 (or `passband`) and below M/2.
    passband : float, optional
        One-sided passband edge in channel spacings, above 0.
    passband_weight : float, optional
        Weight of the passband's error energy, default 1. Needs `passband`.
    passband_db : float, optional
        Instead of a weight: the passband ripple (highest over lowest, dB) that must be kept, with
        the least weight that keeps it. Needs `passband`.

    Returns
    -------
    Prototype
        sum(h) = 1; ``design`` holds the measured ``stopband_energy_db`` (the share of the energy
        beyond the edge), ``stopband_db`` and ``passband_db``.

    Raises
    ------
    TypeError
        A parameter of the wrong type.
    ValueError
        A value out of range; passband < stopband < M/2 not kept; a weight or a ripple without a
        passband, or both; a ripple that no weight reaches at this length.

    References
    ----------
    D. Slepian, Bell Syst. Tech. J. 57(5), 1978 (the sequences); P. P. Vaidyanathan and T. Q.
    Nguyen, IEEE Trans. Circuits and Systems 34(1), 1987 (eigenfilters).

    Examples
    --------
    >>> from chanbank import energy_prototype
    >>> h = energy_prototype(64, 8, stopband=1.0, passband=0.4, passband_db=0.1)
    >>> h.length, round(h.design["passband_db"], 3), h.design["stopband_energy_db"] < -80
    (512, 0.1, True)
    """
    require_band_edges(channels, 0.0 if passband is None else passband, stopband)
    if passband is None and (passband_weight is not None or passband_db is not None):
        raise ValueError(
            "passband must be given with passband_weight or passband_db; got passband None, "
            f"passband_weight {passband_weight}, passband_db {passband_db}"
        )
    if passband_weight is not None and passband_db is not None:
        raise ValueError(
            "passband_weight and passband_db exclude each other; got "
            f"{passband_weight:g} and {passband_db:g}"
        )
    if stopband == channels / 2:
        raise ValueError(f"stopband must be below channels / 2; got {stopband:g} = {channels} / 2")
    length = channels * taps_per_branch
    if passband is None:
        taps = _slepian(length, channels, stopband)
    else:
        form = _Form(length, channels, passband, stopband)
        if passband_db is None:
            taps = form.taps(passband_weight or 1.0)
        else:
            taps = _flat_enough(form, passband_db)
    return _proved(taps / taps.sum(), channels, passband, stopband)


def _proved(taps, channels, passband, stopband):
    design = {
        "method": "energy",
        "stopband": stopband,
        "stopband_energy_db": float(decibels(math.sqrt(_stop_share(taps, channels, stopband)))),
        "stopband_db": -float(decibels(stopband_peak(taps, channels, stopband))),
    }
    if passband is not None:
        low, high = band_extremes(taps, channels, 0.0, passband)
        design |= {"passband": passband, "passband_db": float(decibels(high / low))}
    return Prototype(taps, channels, label="least stopband energy", design=design)


def _stop_share(taps, channels, stopband):
    """Energy beyond the edge over all of it: Gauss panels near the edge, trapezoids beyond."""
    size = scipy.fft.next_fast_len(16 * len(taps), real=True)
    power = np.abs(scipy.fft.rfft(taps, size)) ** 2
    step = channels / size
    joint = min(int(np.ceil((stopband + 8 * channels / len(taps)) / step)), len(power) - 1)
    f, weights = _nodes(stopband, joint * step, len(taps) / channels)
    near = weights @ np.abs(_response(taps, channels, f)) ** 2
    far = (power[joint:].sum() - 0.5 * (power[joint] + power[-1])) * step
    # An odd transform ends half a step before half the sample rate.
    far += power[-1] * (channels / 2 - (len(power) - 1) * step)
    return float(2 * (near + far) / channels / (taps**2).sum())


def _slepian(length, channels, stopband):
    if length > _DIRECT:
        return _Form(length, channels, None, stopband).taps(0.0)
    if length == 1:
        return np.ones(1)
    # The commuting tridiagonal matrix keeps its accuracy where the energy itself is rounding.
    taps = scipy.signal.windows.dpss(length, length * stopband / channels, sym=True)
    return 0.5 * (taps + taps[::-1])


def _flat_enough(form, passband_db):
    """The eigenfilter with the least weight whose ripple is at most `passband_db`."""

    def ripple(exponent):
        taps = form.taps(10.0**exponent)
        low, high = band_extremes(taps, form.channels, 0.0, form.passband)
        return math.log(decibels(high / low) / passband_db) if high > low else -math.inf

    low, high = -12.0, 0.0
    while ripple(high) > 0:
        low, high = high, high + 3
        if high > 15:
            raise ValueError(
                f"passband_db {passband_db:g} between 0 and passband {form.passband:g} is out of "
                f"reach of {form.length} taps with stopband {form.stopband:g}: give more taps per "
                "branch or a wider transition"
            )
    if ripple(low) <= 0:
        return form.taps(10.0**low)
    exponent = scipy.optimize.brentq(ripple, low, high, xtol=1e-9)
    return form.taps(10.0**exponent)


class _Form:
    """The quadratic form E as rows: E = sum of squares of (rows @ unknowns)."""

    def __init__(self, length, channels, passband, stopband):
        self.length, self.channels = length, channels
        self.passband, self.stopband = passband, stopband
        short = length if length <= _DIRECT else _DIRECT + length % 2
        rate = short * channels / length
        position = np.arange(short - 1, -1, -2) / 2
        # Rows of amplitudes at Gauss nodes: a singular vector of the rows resolves the energy to
        # the square of what an eigenvector of their product does.
        fold = np.where(position == 0, 1.0, 2.0)
        stop, stop_share = _nodes(stopband, rate / 2, short / rate)
        scale = np.sqrt(fold)
        if short < length:
            terms = min(short // 4, math.ceil(math.pi / 2 * short * stopband / rate) + _MARGIN)
            x = 2 * position / short
            basis = np.polynomial.legendre.legvander(x, 2 * terms - 2)[:, ::2]
            self.orthonormal, self.triangle = np.linalg.qr(basis * scale[:, None])
        else:
            self.orthonormal = None
        cosines = np.cos(2 * np.pi / rate * np.outer(stop, position)) * scale
        self.stop_rows = self._reduced(cosines) * np.sqrt(2 * stop_share / rate)[:, None]
        if passband is None:
            return
        inside, inside_share = _nodes(0.0, passband, short / rate)
        cosines = (np.cos(2 * np.pi / rate * np.outer(inside, position)) - 1) * scale
        self.pass_rows = self._reduced(cosines) * np.sqrt(2 * inside_share / rate)[:, None]

    def _reduced(self, rows):
        return rows if self.orthonormal is None else rows @ self.orthonormal

    def taps(self, weight):
        rows = self.stop_rows
        if weight:
            rows = np.concatenate([rows, math.sqrt(weight) * self.pass_rows])
        # Reduce tall rows first: the right singular vectors are those of the triangle.
        small = np.linalg.qr(rows, mode="r") if rows.shape[0] > rows.shape[1] else rows
        vector = np.linalg.svd(small)[2][-1]
        position = np.arange(self.length - 1, -1, -2) / 2
        if self.orthonormal is None:
            half = vector / np.sqrt(np.where(position == 0, 1.0, 2.0))
        else:
            series = scipy.linalg.solve_triangular(self.triangle, vector)
            full = np.zeros(2 * len(series) - 1)
            full[::2] = series
            half = np.polynomial.legendre.legval(2 * position / self.length, full)
        odd = self.length % 2
        taps = np.concatenate([half, half[::-1][1:] if odd else half[::-1]])
        return taps / taps.sum()


def _nodes(low, high, branch):
    """Gauss-Legendre nodes and weights over panels of about two lobes."""
    panels = max(1, math.ceil((high - low) * branch / 2))
    x, w = np.polynomial.legendre.leggauss(12)
    edges = np.linspace(low, high, panels + 1)
    half = np.diff(edges)[:, None] / 2
    nodes = edges[:-1, None] + half * (1 + x)
    return nodes.ravel(), (half * w).ravel()
