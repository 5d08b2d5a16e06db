"""Self-dual prototypes: one prototype for analysis and synthesis, perfect to machine precision."""

import math

import numpy as np

from chanbank._blas import one_blas_thread
from chanbank._checks import Instance, Integer, Optional, Real, checked
from chanbank.plan import ChannelPlan
from chanbank.prototype._joint_design import JointProblem, lead_tight, stopband_edge
from chanbank.prototype._measure import band_extremes, decibels, stopband_peak
from chanbank.prototype.cosine_series import half_sample_taps
from chanbank.prototype.prototype import Prototype

__all__ = ["tight_prototype"]

_FEW = 32  # channels at least of the trial on which start and schedule are chosen
_LARGEST = 2048  # taps in one interlaced class: the Newton steps are dense in a class
_ROUNDING = 4e-15  # largest condition residual that counts as met: some 16 units of 2^-52
_TOPS = (1e6, 1e8, 1e4)  # how hard the starting design is driven, in order of trial
# Newton schedules, in order of trial: damped steps first, then the smallest singular value (of the
# largest) that steps follow in turns up to 40, 80, 100 and after. Near the end taps the conditions
# are degenerate, and no single schedule settles every plan.
_SCHEDULES = (
    (12, (1e-9, 1e-11, 1e-11, 1e-11)),
    (0, (1e-9, 1e-11, 1e-13, 1e-13)),
    (0, (1e-4, 1e-6, 1e-10, 1e-13)),
)


@checked(
    plan=Instance(ChannelPlan),
    taps_per_branch=Integer(1, 32),
    stopband=Optional(Real(above=0, unit="channel spacings")),
)
@one_blas_thread
def tight_prototype(plan, taps_per_branch, *, stopband=None):
    """A linear-phase prototype that is its own dual: the bank is a tight frame.

    With norm(h)^2 = D/M the condition is, for tau = 0..D-1 and r = 0..P-1,

        M sum_j h[tau + j D] h[tau + j D - r M] = (1 if r == 0 else 0).

    The conditions are quadratic and fall into gcd(M, D) independent classes of interlaced taps. A
    cosine series is driven towards them by least squares under least stopband energy; Newton
    steps of least length then meet them to machine precision.

    A tight bank keeps energy (Parseval), has the least noise gain, 0 dB, and needs one prototype
    for both banks. At ratios near one its stopband is far poorer than that of a `prototype_pair`
    of the same lengths.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D. The taps of one class, P M / gcd(M, D), must not exceed 2048.
    taps_per_branch : int
        P, 1 to 32.
    stopband : float, optional
        One-sided stopband edge in channel spacings; by default M/D - 1/2, at most 3.5.

    Returns
    -------
    Prototype
        PM taps, symmetric, with sum(h) = 1: self-dual up to one factor, so that
        ``scale * taps``, with the ``scale`` in its ``design``, is the synthesis prototype for a
        pair delay of PM - 1, which `dual_prototype` of the same length finds too. ``design`` holds
        ``stopband_db``, ``stopband_edge`` and ``residual``, the largest miss of the condition.

    Raises
    ------
    TypeError, ValueError
        Wrong types or ranges; critical sampling with P above 1; a plan whose M and D share too
        small a divisor; no self-dual prototype found at this length (the message says how close
        the search came).

    References
    ----------
    Z. Cvetkovic and M. Vetterli, "Tight Weyl-Heisenberg frames in l2(Z)", IEEE Trans. Signal
    Processing 46(5), 1256-1259, 1998; H. Boelcskei, F. Hlawatsch and H. G. Feichtinger,
    "Frame-theoretic analysis of oversampled filter banks", IEEE Trans. Signal Processing 46(12),
    3256-3268, 1998.

    Examples
    --------
    >>> from chanbank import ChannelPlan, tight_prototype
    >>> h = tight_prototype(ChannelPlan(1.0, 64, 32), 6)
    >>> bool(h.design["residual"] < 1e-14), bool(h.design["stopband_db"] < -65)
    (True, True)
    """
    channels, hop, branches = plan.channels, plan.hop, taps_per_branch
    if hop == channels and branches > 1:
        raise ValueError(
            f"hop must be below the number of channels; got hop {hop} = channels {channels}: at "
            "critical sampling only one tap per branch is self-dual. Take a smaller hop"
        )
    common = math.gcd(channels, hop)
    if branches * channels // common > _LARGEST:
        raise ValueError(
            "taps_per_branch * channels / gcd(channels, hop) must be at most "
            f"{_LARGEST}; got {branches} * {channels} / {common} = "
            f"{branches * channels // common}. Take a hop that shares a larger divisor with "
            "channels, or prototype_pair"
        )
    edge = stopband_edge(channels, hop, stopband)
    if branches == 1:
        taps, residual = _newton(_one_branch(channels), channels, hop)
    else:
        taps, residual = _search(channels, hop, branches, edge)
    if residual > _ROUNDING:
        raise ValueError(
            f"taps_per_branch must allow a self-dual prototype; at {branches} and M/D = "
            f"{channels}/{hop} the search came within {residual:.1e} of the condition, "
            f"{_ROUNDING:.0e} is rounding. Take another length, or prototype_pair"
        )
    total = taps.sum()
    inner = band_extremes(taps, channels, 0.0, min(edge, 0.5))[1]
    design = {
        "method": "tight",
        "hop": hop,
        "residual": residual,
        "scale": float(total**2),
        "stopband_edge": edge,
        "stopband_db": float(decibels(stopband_peak(taps, channels, edge) / inner)),
    }
    return Prototype(taps / total, channels, label="tight", design=design)


def _one_branch(channels):
    """The sine window, tight at M/D = 2, as the start for one tap per branch."""
    return np.sin(np.pi * (np.arange(channels) + 0.5) / channels)


def _search(channels, hop, branches, edge):
    """The best start and schedule, tried out at few channels, brought to the condition at M."""
    common = math.gcd(channels, hop)
    step = max(
        n for n in range(1, common + 1) if common % n == 0 and (n == 1 or channels // n >= _FEW)
    )
    few, tried = channels // step, []
    for top in _TOPS:
        problem = JointProblem(
            channels / hop,
            (branches,),
            edge,
            0.4,
            channels=channels,
            hop=hop,
            terms=4 * branches + 8 if edge < 1.2 else 4 * branches,
        )
        series = lead_tight(problem, top=top)
        for schedule in _SCHEDULES:
            start = half_sample_taps(series, branches, few)
            taps, residual = _newton(start, few, hop // step, schedule)
            rank = (max(residual, _ROUNDING), stopband_peak(taps, few, edge))
            tried.append((rank, series, schedule, taps, residual))
    tried.sort(key=lambda one: one[0])
    closest = tried[0][3:]
    if step == 1:
        return closest
    for _, series, schedule, _, _ in tried[:3]:
        start = half_sample_taps(series, branches, channels)
        closest = _newton(start, channels, hop, schedule)
        if closest[1] <= _ROUNDING:
            break
    return closest


def _newton(taps, channels, hop, schedule=_SCHEDULES[0]):
    """The nearby prototype that meets the condition: (taps, largest residual).

    Taps b, b + c, b + 2c ... (c = gcd(M, D)) form a class with conditions of its own; classes b
    and c - 1 - b are mirror images, so half of them are solved and the rest reflected.
    """
    common = math.gcd(channels, hop)
    taps = taps * math.sqrt(hop / channels / (taps @ taps))
    length, size = len(taps), len(taps) // common
    free = np.ones(length, bool)
    if 2 * hop > channels and length > channels:
        # Outermost taps that meet a single partner: their product must vanish, so one is zero.
        inner = np.arange(channels - hop, channels // 2)
        free[inner] = free[length - 1 - inner] = False
    work = np.where(free, taps, 0.0) * math.sqrt(channels)
    classes = work.reshape(size, common).T[: (common + 1) // 2].copy()
    loose = free.reshape(size, common).T[: (common + 1) // 2]
    own = common % 2 == 1  # the middle class is its own mirror image
    system = _Conditions(size, channels // common, hop // common)
    error = system.residual(classes)
    norm = np.linalg.norm(error, axis=1)
    damping = 1e-3 * norm
    damped, cuts = schedule
    for turn in range(120):
        live = np.flatnonzero(np.abs(error).max(axis=1) > _ROUNDING / 4)
        if not len(live):
            break
        slope = system.slope(classes[live]) * loose[live, None, :]
        left, value, right = np.linalg.svd(slope, full_matrices=False)
        if turn < damped:
            inverse = value / (value**2 + damping[live, None])
        else:
            keep = value > cuts[np.searchsorted((40, 80, 100), turn, "right")] * value[:, :1]
            inverse = np.where(keep, 1 / np.where(keep, value, 1.0), 0.0)
        part = inverse * (left.transpose(0, 2, 1) @ -error[live][..., None])[..., 0]
        moved = classes[live] + (right.transpose(0, 2, 1) @ part[..., None])[..., 0]
        if own:
            middle = live == len(classes) - 1
            moved[middle] = (moved[middle] + moved[middle][:, ::-1]) / 2
        after = system.residual(moved)
        height = np.linalg.norm(after, axis=1)
        better = height < norm[live]
        take = better if turn < damped else better | (height < 0.1)
        damping[live] *= np.where(better, np.minimum(0.3, height / norm[live]), 8.0)
        classes[live[take]], error[live[take]] = moved[take], after[take]
        norm[live[take]] = height[take]
    full = np.empty((common, size))
    full[: len(classes)] = classes
    full[common - len(classes) :] = classes[::-1, ::-1]
    out = full.T.reshape(-1) / math.sqrt(channels)
    return out, float(np.abs(error).max())


class _Conditions:
    """sum over i = t (mod q) of h_i h_{i - r p} - (1 if r == 0), for classes of `size` taps."""

    def __init__(self, size, p, q):
        self.size = size
        self.pairs = []
        for shift in range(-(-size // p)):
            index = np.arange(shift * p, size)
            for residue in range(q):
                own = index[index % q == residue]
                if len(own):
                    self.pairs.append((own, own - shift * p, 1.0 if shift == 0 else 0.0))

    def residual(self, h):
        return np.stack(
            [np.einsum("bi,bi->b", h[:, a], h[:, b]) - one for a, b, one in self.pairs], axis=1
        )

    def slope(self, h):
        out = np.zeros((len(h), len(self.pairs), self.size))
        for row, (a, b, _) in enumerate(self.pairs):
            out[:, row, a] += h[:, b]
            out[:, row, b] += h[:, a]
        return out
