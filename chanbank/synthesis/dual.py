"""The dual of an analysis prototype: the synthesis prototype that undoes it and filters well."""

import math

import numpy as np

from chanbank._blas import one_blas_thread
from chanbank._checks import Boolean, Choice, Instance, Integer, Optional, Real, checked
from chanbank.plan import ChannelPlan
from chanbank.prototype._measure import decibels
from chanbank.prototype.prototype import Prototype
from chanbank.synthesis._figures import EXACT, peak_db, reached
from chanbank.synthesis._support import Support, sufficient_taps_per_branch
from chanbank.synthesis.condition import residual_of_taps, rms_error

__all__ = ["dual_prototype"]

_COARSE = 32  # channels at least of the thinned problem on which the weight is chosen
_GAIN_LIMIT = 12.0  # dB: an exact dual noisier than this is not offered unless it is demanded


@checked(
    plan=Instance(ChannelPlan),
    prototype=Instance(Prototype),
    taps_per_branch=Optional(Integer(1, 4096)),
    exact=Optional(Boolean()),
    least=Choice("stopband", "norm"),
    balance=Real(-200, 200, unit="decibels"),
    stopband=Optional(Real(above=0, unit="channel spacings")),
    pair_delay=Optional(Integer(0)),
)
@one_blas_thread
def dual_prototype(
    plan,
    prototype,
    *,
    taps_per_branch=None,
    exact=None,
    least="stopband",
    balance=0.0,
    stopband=None,
    pair_delay=None,
):
    """The synthesis prototype g that undoes an analysis prototype h, for any hop below M.

    The pair reconstructs perfectly if and only if, for tau = 0..D-1 and every integer r,

        M sum_j g[tau + j D] h[Delta + r M - tau - j D] = (1 if r == 0 else 0).

    Many g do; the shortest of them (the canonical dual, cut short) is often a poor bandpass, and
    whatever is muted or changed between the banks then leaks everywhere. Of all g of the given
    length this function returns

    - *exact*: the one of least stopband energy among those that reconstruct to rounding, or
    - *balanced*: the minimum of error^2 + w * (stopband energy), w such that the stopband peak
      lies `balance` dB below the reconstruction error.

    Both are convex problems, solved exactly for any h.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and the hop D. The offset does not matter: one dual serves every offset.
    prototype : Prototype
        The analysis prototype h, any length, symmetric or not.
    taps_per_branch : int, optional
        Taps per branch Q of g. By default twice the length from which exact duals exist, at most
        4 times that of h, where that is long enough; else twice that of h; 1 where h has 1.
    exact : bool, optional
        True demands an exact dual, False a balanced one. By default exact where the lengths allow
        it (to rounding, with a noise gain of at most 12 dB), balanced otherwise.
    least : {"stopband", "norm"}, default "stopband"
        Which exact dual: the one that filters best, or the shortest one, which has the least
        noise gain (with enough taps it is the canonical dual).
    balance : float, default 0.0
        For a balanced dual: how many dB the stopband is to lie below the error.
    stopband : float, optional
        Stopband edge in channel spacings; by default M/D - 1/2, where the images of the wanted
        channel begin.
    pair_delay : int, optional
        Delay Delta of the pair in samples; by default that of the centred pair, the sum of the
        two group delays. A smaller one trades quality for latency.

    Returns
    -------
    Prototype
        g with its scale and ``pair_delay``; symmetric when h is. Its ``design`` tells what was
        reached: ``exact`` (bool), ``error_db`` (rms for white input), ``stopband_db`` and
        ``analysis_stopband_db`` (peak beyond ``stopband_edge`` relative to the passband peak),
        ``noise_gain_db``, ``pair_delay``, ``sufficient_taps_per_branch`` and, where something is
        worth knowing, ``note``.

    Raises
    ------
    TypeError, ValueError
        Wrong types; a prototype for another number of channels or of only zeros; critical
        sampling (hop = channels) with more than one tap per branch, which no FIR prototype
        undoes; `exact` demanded with too few taps (the message names the number that suffices);
        a stopband edge beyond M/2; a pair delay outside the pair's support.

    References
    ----------
    J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing 21, 207-220, 1990
    (the condition); D. Slepian, "Prolate spheroidal wave functions V: the discrete case",
    Bell Syst. Tech. J. 57, 1371-1430, 1978 (the passband's basis).

    Examples
    --------
    >>> from chanbank import ChannelPlan, dual_prototype, window_prototype
    >>> plan = ChannelPlan(48e3, 32, 16)
    >>> h = window_prototype(32, 8, ("kaiser", 9.0))
    >>> g = dual_prototype(plan, h)
    >>> g.taps_per_branch, g.pair_delay, g.design["exact"]
    (16, 383, True)
    >>> g.design["error_db"] < -280 and g.design["stopband_db"] < -60
    True
    """
    channels, hop = plan.channels, plan.hop
    if prototype.channels != channels:
        raise ValueError(
            "prototype must be for the plan's number of channels; got a plan of "
            f"{channels} and a prototype for {prototype.channels}"
        )
    taps = prototype.taps
    if not taps.any():
        raise ValueError("prototype must have a tap other than zero; all its taps are 0")
    if hop == channels and np.count_nonzero(taps) != channels:
        raise ValueError(_CRITICAL.format(hop=hop, channels=channels))
    edge = _edge(plan, stopband)
    enough = sufficient_taps_per_branch(channels, hop, prototype)
    per_branch = taps_per_branch or _default_length(prototype.taps_per_branch, enough)
    support = Support(prototype, channels, per_branch, pair_delay)
    possible = support.solvable(hop)
    if exact and not possible:
        raise ValueError(
            f"taps_per_branch must be at least {enough} for an exact dual of {prototype.length} "
            f"taps at M/D = {channels}/{hop}; got {per_branch} (or take exact=False)"
        )
    problem = support.problem(hop, edge)
    if exact is not False and possible:
        g = support.placed(_exact(support, hop, edge, least))
        report = reached(plan, prototype, g, edge)
        fine = report["error_db"] is None or report["error_db"] <= float(decibels(EXACT))
        if exact or (fine and report["noise_gain_db"] <= _GAIN_LIMIT):
            report["exact"] = bool(fine)
            return _finished(plan, g, report, enough)
    weight = _balanced_weight(support, hop, edge, balance)
    g = support.placed(problem.balanced(weight))
    report = reached(plan, prototype, g, edge)
    report["weight"], report["balance_db"] = weight, balance
    return _finished(plan, g, report, enough)


_CRITICAL = (
    "hop must be below the number of channels; got hop {hop} = channels {channels}: at critical "
    "sampling no FIR prototype undoes an FIR prototype of more than one tap per branch. Take a "
    "plan with a smaller hop, or invert a finished block with BlockInverse"
)


def _edge(plan, stopband):
    half = plan.channels / 2
    if stopband is None:
        return min(plan.channels / plan.hop - 0.5, max(0.5, half - 0.5))
    if stopband >= half:
        raise ValueError(
            f"stopband must satisfy stopband < channels / 2; got {stopband:g} >= {half:g} "
            "channel spacings"
        )
    return stopband


def _default_length(analysis, enough):
    if analysis == 1:
        return 1
    if enough is None or enough > 4 * analysis:
        return 2 * analysis
    return max(analysis, min(2 * enough, 4 * analysis))


def _exact(support, hop, edge, least):
    """Least-stopband exact dual: a balanced start on half the support, then the correction.

    The start leaves the outermost conditions, which h's smallest taps carry, untouched at zero.
    """
    if least == "norm":
        problem = support.problem(hop, edge)
        return problem.exact_correction(np.zeros(support.length), smooth=False)
    trim = support.length // 4
    if support.length - 2 * trim < max(len(support.taps), support.channels):
        trim = max(0, (support.length - len(support.taps)) // 4)
    start = support.problem(hop, edge, trim).balanced(0.1)
    return support.problem(hop, edge).exact_correction(np.pad(start, trim))


def _balanced_weight(support, hop, edge, balance):
    """The weight for which stopband peak = error - balance, found on a thinned problem."""
    step = 1
    common = math.gcd(support.channels, hop)
    for candidate in range(1, common + 1):
        if common % candidate == 0 and support.channels // candidate >= _COARSE:
            step = candidate
    coarse = support.thinned(hop, edge, step) if step > 1 else support.problem(hop, edge)

    def excess(exponent):
        g = coarse.balanced(10.0**exponent)
        left = residual_of_taps(coarse.channels, coarse.hop, coarse.taps, g, coarse.delay)
        return decibels(rms_error(left)) - peak_db(g, coarse.channels, edge) - balance

    low, high = -9.0, 9.0
    for _ in range(12):
        middle = (low + high) / 2
        low, high = (low, middle) if excess(middle) > 0 else (middle, high)
    return 10.0 ** ((low + high) / 2)


def _finished(plan, placed, report, enough):
    taps, delay = placed
    report = {"method": "least-stopband dual", "sufficient_taps_per_branch": enough, **report}
    if report["exact"] and report["stopband_db"] > report["analysis_stopband_db"] + 20:
        report["note"] = (
            "exact, but this g filters much worse than h: what is changed between the banks leaks "
            "by stopband_db; take more taps_per_branch, or exact=False"
        )
    label = "exact dual" if report["exact"] else "balanced dual"
    return Prototype(taps, plan.channels, label=label, design=report, pair_delay=delay)
