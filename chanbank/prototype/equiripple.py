"""Minimax prototypes: the least ripple that a length and its band edges allow, at any length."""

import math

from chanbank._blas import one_blas_thread
from chanbank._checks import Integer, Optional, OwnCheck, Real, checked
from chanbank.prototype._bands import BandSet, parsed_bands
from chanbank.prototype._ripple_figures import Figures
from chanbank.prototype._ripple_start import Lowpass
from chanbank.prototype._ripple_task import DEEPEST_DB, RippleTask
from chanbank.prototype.lengths import require_band_edges

__all__ = ["equiripple_prototype"]

_SIX_DB = 20 * math.log10(2)

_STOPBAND = "a one-sided edge in channel spacings, or a list of bands (low, high) or "
_STOPBAND += "(low, high, weight) in channel spacings"


@checked(
    channels=Integer(1, 1 << 20),
    taps_per_branch=Optional(Integer(1)),
    passband=Real(above=0),
    stopband=OwnCheck(
        _STOPBAND, (None, TypeError), ("x", TypeError), (math.nan, ValueError), (-1.0, ValueError)
    ),
    passband_db=Optional(Real(above=0, unit="dB")),
    stopband_db=Optional(Real(above=0, high=DEEPEST_DB, unit="dB")),
    weight=Optional(Real(above=0)),
    slope_db=Real(0, 40, unit="dB per octave"),
)
@one_blas_thread
def equiripple_prototype(
    channels,
    taps_per_branch=None,
    *,
    passband,
    stopband,
    passband_db=None,
    stopband_db=None,
    weight=None,
    slope_db=0.0,
):
    """Minimax lowpass: of all filters of its length, the one with the lowest ripples.

    The L = P M taps, symmetric, minimise the largest of

        abs(H(f) - g) / (weight delta)  for f from 0 to `passband`  and
        abs(H(f)) / (delta level(f))    for f from `stopband` to M/2,

    g being the middle of the passband, and come with sum(h) = 1. level(f) is 1, or falls with
    `slope_db`: level = (S(stopband)/S(f))^p, S(f)^2 = sin(pi f/M)^2 + sinh(pi stopband/(2 M))^2,
    p = slope_db/6.02; a flat stopband folds all its ripples into the channel when the rate is
    reduced, a sloped one hardly more than its first. Up to 400 taps the exchange algorithm finds
    them. Above that it breaks down in the end, and a closed form takes over: the stopband is the
    real part of a Blaschke product, whose few zeros depend on P and not on M and are solved for
    by Newton's method, so that a million taps take no longer than their Fourier transform. The
    result is measured on its own response either way.

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.
    taps_per_branch : int, optional
        P. Without it both `passband_db` and `stopband_db` must be given, and the length is the
        least that meets both (any integer).
    passband : float
        One-sided passband edge in channel spacings, above 0.
    stopband : float, or sequence of bands
        One-sided stopband edge in channel spacings, passband < stopband < M/2; or the bands that
        matter, in rising order, as (low, high) or (low, high, weight). Between them the response
        may be 40 dB higher, for frequencies whose aliases fall outside the wanted band. A weight
        of 10 asks for ripples 20 dB lower than at weight 1.
    passband_db, stopband_db : float, optional
        Passband ripple (highest over lowest) and attenuation at the stopband edge relative to
        H(0), in dB, the latter at most 150. With `taps_per_branch`, one of them fixes that ripple
        and the other band gets what is left; both make it an error not to meet them.
    weight : float, optional
        Ratio of passband deviation to stopband ripple, where neither is fixed. Default 1.
    slope_db : float, default 0.0
        How much lower the ripples are for each octave above the stopband edge, 0 to 40 dB.

    Returns
    -------
    Prototype
        sum(h) = 1; ``design`` holds the measured ``stopband_db`` (at the level of the edge),
        ``passband_db`` and ``peak_spread_db``, the difference between the highest and the lowest
        stopband peak.

    Raises
    ------
    TypeError
        A parameter of the wrong type.
    ValueError
        A value out of range; edges that do not satisfy passband < stopband < M/2; figures that
        exclude each other or that the length cannot meet (the message names one that can);
        more taps than double precision has a use for; a transition so narrow that the
        passband holds hundreds of ripples.

    Notes
    -----
    Where a fixed figure leaves the other band more than double precision can use, the design
    stops at 150 dB and a deviation of 1e-7 and meets the fixed figure with something to spare.

    References
    ----------
    T. W. Parks and J. H. McClellan, IEEE Trans. Circuit Theory 19(2), 1972; S.-I. Filip, ACM
    Trans. Math. Software 43(1), 2016 (the exchange); N. I. Achieser, Theory of Approximation,
    1956, appendix A (the closed form of weighted extremal problems); C. L. Dolph, Proc. IRE
    34(6), 1946 (its case without passband).

    Examples
    --------
    >>> from chanbank import equiripple_prototype
    >>> h = equiripple_prototype(4096, 12, passband=0.55, stopband=1.0, stopband_db=80)
    >>> h.length, round(h.design["stopband_db"], 2), h.design["peak_spread_db"] < 0.05
    (49152, 80.0, True)
    """
    figures = Figures(channels, passband, passband_db, stopband_db, weight)
    bands = parsed_bands(stopband, channels, passband, _STOPBAND)
    if bands is not None:
        if slope_db:
            raise ValueError(
                f"slope_db goes with a single stopband edge; got slope_db {slope_db:g} and bands "
                "(give the bands weights instead)"
            )
        task = RippleTask(figures, BandSet(passband, bands, channels), stopband, slope_db)
    else:
        stopband = float(stopband)
        require_band_edges(channels, passband, stopband)
        if stopband == channels / 2:
            raise ValueError(
                f"stopband must be below channels / 2; got {stopband:g} = {channels} / 2"
            )
        lowpass = Lowpass(passband, stopband, stopband / 2, slope_db / _SIX_DB)
        task = RippleTask(figures, lowpass, stopband, slope_db)
    if taps_per_branch is None:
        figures.require_both()
        return task.shortest()
    return task.prototype(channels * taps_per_branch)
