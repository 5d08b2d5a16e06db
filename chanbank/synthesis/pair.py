"""Analysis and synthesis prototype designed together: near-perfect, or perfect on request."""

import math
import numbers

import numpy as np

from chanbank._blas import one_blas_thread
from chanbank._checks import (
    Boolean,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    Real,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank.plan import ChannelPlan
from chanbank.prototype._joint_design import JointProblem, lead, stopband_edge
from chanbank.prototype._measure import band_extremes, decibels
from chanbank.prototype.cosine_series import half_sample_taps, whole_sample_taps
from chanbank.prototype.prototype import Prototype
from chanbank.synthesis._figures import EXACT, reached
from chanbank.synthesis._support import Support, sufficient_taps_per_branch
from chanbank.synthesis.condition import residual_of_taps

__all__ = ["prototype_pair"]

_SEEDS = (0, 1)  # two starts: the problem is not convex, and a second one costs tenths of a second
_LONG = 40  # taps per branch, both together
_FLAT = 1.0  # dB
_RELAXED = 30.0  # dB: what g's stopband may give up in a design whose g is corrected afterwards


@checked(
    plan=Instance(ChannelPlan),
    taps_per_branch=Integer(1, 48),
    synthesis_taps_per_branch=Optional(Integer(1, 4096)),
    exact=Boolean(),
    balance=OwnCheck(
        "a finite number of decibels, or a pair of them",
        ("deep", TypeError),
        (math.nan, ValueError),
        ((1.0, 2.0, 3.0), ValueError),
        (300.0, ValueError),
    ),
    ripple_db=Optional(Real(above=0, high=60, unit="decibels")),
    passband=Real(above=0, high=0.5, unit="channel spacings"),
    stopband=Optional(Real(above=0, unit="channel spacings")),
)
@one_blas_thread
def prototype_pair(
    plan,
    taps_per_branch,
    synthesis_taps_per_branch=None,
    *,
    exact=False,
    balance=0.0,
    ripple_db=None,
    passband=0.4,
    stopband=None,
):
    """Analysis and synthesis prototype, designed jointly; both linear phase.

    Both are cosine series on their supports, t in channel periods,

        h(t) = sum over k < K of a_k cos(2 pi k (t / P - 1/2)),  0 <= t <= P,

    and minimise

        lambda * (reconstruction error)^2 + stop(h) + stop(g)
        + rho * (norm(h)^2 + norm(g)^2) + flatness * (passband deviation)^2

    by Levenberg-Marquardt; lambda, the weights over the stopband and rho are led until error and
    stopband peaks stand in the wanted `balance` at a noise gain below 1 dB. The 10 to 70 numbers
    a_k do not depend on M: a design for 65536 channels costs what one for 16 does. Deterministic.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D; the hop must be below M.
    taps_per_branch : int
        P of the analysis prototype, 1 to 48.
    synthesis_taps_per_branch : int, optional
        Q of the synthesis prototype, by default P; 1 to 96, longer with `exact`.
    exact : bool, default False
        True corrects g to perfect reconstruction, at the least cost in stopband.
    balance : float or (float, float), default 0.0
        By how many dB the stopbands of (h, g) are to lie below the reconstruction error.
    ripple_db : float, optional
        Wanted passband ripple (max - min of abs(H)^2 and abs(G)^2) in dB over abs(f) <=
        `passband`. By default no demand: short pairs at ratios near one then get the best error
        and stopband with channels that are several dB uneven. See the table.
    passband : float, default 0.4
        One-sided passband for `ripple_db`, in channel spacings.
    stopband : float, optional
        One-sided stopband edge in channel spacings; by default M/D - 1/2, where the images of the
        wanted channel begin, but at most 3.5.

    Returns
    -------
    analysis, synthesis : Prototype
        h with sum(h) = 1; g with its scale and ``pair_delay``. Both carry the same ``design``:
        ``exact``, ``error_db`` (rms for white input), ``stopband_db`` (of g),
        ``analysis_stopband_db``, ``noise_gain_db``, ``ripple_db`` (the worse of the two),
        ``pair_delay``, and each its ``series`` (the a_k) where it is one, with tap i standing at
        t = (i + ``series_start``) / M.

    Raises
    ------
    TypeError, ValueError
        Wrong types or ranges; critical sampling; Q above 96 without `exact`; `exact` demanded
        with too short a g (the message names the length that suffices).

    Notes
    -----
    Error, stopband of h, stopband of g, noise gain, ripple, in dB, without and with the passband
    term, balance 0:

    ====  =======  ==============================  ==============================
    M/D   P, Q     no demand                       ripple_db=1
    ====  =======  ==============================  ==============================
    2     4, 4     -74, -74, -74, 0.0, 1.7         -33, -33, -36, 0.1, 1.0
    2     8, 8     -140, -140, -140, 0.0, 1.1      -120, -121, -119, 0.1, 1.0
    3/2   8, 8     -78, -78, -78, 0.6, 5.1         -70, -74, -73, 0.0, 1.0
    3/2   8, 16    -109, -109, -109, 0.5, 3.7      -107, -107, -107, 0.1, 1.0
    4/3   8, 8     -57, -57, -58, 0.9, 5.6         -54, -54, -54, 0.2, 0.9
    4/3   12, 12   -82, -83, -82, 1.0, 5.8         -78, -77, -77, 0.2, 0.9
    4/3   12, 24   -115, -115, -115, 0.5, 1.0      -115, -115, -115, 0.5, 1.0
    4/3   16, 32   -140, -139, -139, 0.0, 0.4      -140, -139, -140, 0.0, 0.3
    8/7   8, 16    -45, -46, -45, 0.9, 6.7         -44, -44, -44, 0.3, 0.9
    8/7   16, 32   -76, -77, -77, 0.7, 4.2         -75, -75, -75, 0.4, 1.0
    4     4, 4     -183, -176, -175, 0.0, 1.7      -135, -135, -134, 0.1, 1.2
    ====  =======  ==============================  ==============================

    Scaling M and D by the same factor leaves these figures as they are.

    References
    ----------
    J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing 21, 207-220, 1990
    (the condition); D. W. Marquardt, "An algorithm for least-squares estimation of nonlinear
    parameters", J. SIAM 11, 431-441, 1963; C. L. Lawson, "Contributions to the theory of linear
    least maximum approximation", thesis, UCLA, 1961 (the reweighting towards equal peaks).

    Examples
    --------
    >>> from chanbank import ChannelPlan, prototype_pair
    >>> plan = ChannelPlan(4.8e6, 192, 128)
    >>> h, g = prototype_pair(plan, 8)
    >>> g.pair_delay, bool(g.design["error_db"] < -75), bool(g.design["stopband_db"] < -75)
    (1535, True, True)
    """
    channels, hop = plan.channels, plan.hop
    if hop == channels:
        raise ValueError(
            f"hop must be below the number of channels; got hop {hop} = channels {channels}: at "
            "critical sampling no pair of FIR prototypes comes near. Take a plan with a smaller "
            "hop, or invert a finished block with BlockInverse"
        )
    wanted = _pair_of("balance", balance)
    p, q = taps_per_branch, synthesis_taps_per_branch or taps_per_branch
    if not exact and q > 96:
        raise ValueError(f"synthesis_taps_per_branch must be at most 96 unless exact=True; got {q}")
    edge = stopband_edge(channels, hop, stopband)
    joint = q
    if exact:
        # g is corrected afterwards: the joint design serves h, at a length near the best.
        joint = min(q, 2 * p, -(-(p + q) // 2))
        wanted = (wanted[0], wanted[1] - _RELAXED)
        _refuse_too_short(channels, hop, p, q)
    whole = (p + joint) * channels % 2 == 1
    problem = JointProblem(
        channels / hop, (p, joint), edge, passband, channels=channels, hop=hop, whole=whole
    )
    starts = [(ripple_db, seed) for seed in _SEEDS]
    if p + joint >= _LONG:
        # Long pairs end at the same point from every start.
        starts = starts[:1]
    elif ripple_db is None:
        # The search through flat passbands sometimes ends at a better point for uneven ones too.
        starts.append((_FLAT, 0))
    _, series = min(
        (lead(problem, wanted, ripple=ripple, seed=seed) for ripple, seed in starts),
        key=lambda found: found[0],
    )
    a, b = problem.parts(series)
    h = half_sample_taps(a, p, channels)
    scale = h.sum()
    h, a = h / scale, a / scale
    if exact:
        g, delay = _corrected(plan, h, q, joint, edge)
    else:
        build = whole_sample_taps if whole else half_sample_taps
        g = build(b, q, channels)
        delay = ((p + q) * channels - (1 if whole else 2)) // 2
        factor = _best_scale(channels, hop, h, g, delay)
        g, b = g * factor, b * factor
    return _pair(plan, h, g, delay, edge, passband, (a, None if exact else b), wanted, whole)


def _pair_of(name, value):
    what = "a finite number of decibels from -200 to 200, or a pair of them"
    parts = value if isinstance(value, (tuple, list)) else (value, value)
    for part in parts:
        if isinstance(part, bool) or not isinstance(part, numbers.Real):
            raise wrong_type(name, what, value)
    if len(parts) != 2 or not all(abs(part) <= 200 for part in parts):
        raise wrong_value(name, what, value)
    return float(parts[0]), float(parts[1])


def _refuse_too_short(channels, hop, p, q):
    trial = Prototype(np.ones(p * channels), channels)
    if not Support(trial, channels, q).solvable(hop):
        enough = sufficient_taps_per_branch(channels, hop, trial)
        raise ValueError(
            f"synthesis_taps_per_branch must be at least {enough} for an exact pair with "
            f"taps_per_branch {p} at M/D = {channels}/{hop}; got {q}"
        )


def _corrected(plan, h, q, joint, edge):
    """The exact dual of least stopband energy, from a balanced start on the joint design's
    support or half the full one, whichever is longer."""
    support = Support(Prototype(h, plan.channels), plan.channels, q)
    trim = (support.length - min(support.length, max(joint, q // 2) * plan.channels)) // 2
    start = support.problem(plan.hop, edge, trim).balanced(0.1)
    g = support.problem(plan.hop, edge).exact_correction(np.pad(start, trim))
    return support.placed(g)


def _best_scale(channels, hop, h, g, delay):
    """The factor on g of least reconstruction error."""
    left = residual_of_taps(channels, hop, h, g, delay)
    zero = int(np.flatnonzero(left.shifts == 0)[0])
    passed = left.values.copy()
    passed[:, zero] += 1.0
    return float(passed[:, zero].sum() / (passed**2).sum())


def _pair(plan, h, g, delay, edge, passband, series, wanted, whole):
    analysis = Prototype(h, plan.channels)
    report = {"method": "joint cosine-series pair", **reached(plan, analysis, (g, delay), edge)}
    report["exact"] = report["error_db"] is None or 10 ** (report["error_db"] / 20) <= EXACT
    report["passband"], report["balance_db"] = passband, list(wanted)
    report["ripple_db"] = max(_ripple(taps, plan.channels, passband) for taps in (h, g))
    kind = "exact pair" if report["exact"] else "pair"
    out = []
    for taps, coefficients, side, later in (
        (h, series[0], "analysis", None),
        (g, series[1], "synthesis", delay),
    ):
        own = dict(report)
        if coefficients is not None:
            own["series"] = [float(value) for value in coefficients]
            own["series_start"] = 0.0 if whole and later is not None else 0.5
        out.append(
            Prototype(taps, plan.channels, label=f"{kind}, {side}", design=own, pair_delay=later)
        )
    return tuple(out)


def _ripple(taps, channels, passband):
    low, high = band_extremes(taps, channels, 0.0, passband)
    return float(decibels(high / low)) if low > 0 else 400.0
