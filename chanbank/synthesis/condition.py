"""The reconstruction condition of an analysis-synthesis pair, evaluated exactly.

Analysis y[n, k] = sum_i h[i] x[nD - i] exp(-j 2 pi f_k (nD - i)) followed by synthesis
x^[t] = sum_n sum_k g[t + Delta - nD] y[n, k] exp(+j 2 pi f_k t) gives

    x^[t] = x[t] + sum_r E[(t + Delta) mod D, r] exp(j 2 pi offset r) x[t - r M],
    E[tau, r] = M sum_j g[tau + j D] h[Delta + r M - tau - j D] - (1 if r == 0 else 0),

so the D x (number of r) table E holds everything about the pair: it is zero if and only if the
pair reconstructs perfectly. Any integer hop, any lengths.
"""

from typing import NamedTuple

import numpy as np

from chanbank._checks import Array, Instance, Integer, Optional, checked, wrong_value
from chanbank.plan import ChannelPlan
from chanbank.prototype.prototype import Prototype

__all__ = [
    "Residual",
    "error_spectrum",
    "noise_gain",
    "pair_delay_of",
    "residual",
    "residual_of_taps",
    "transfer",
    "white_error",
]


class Residual(NamedTuple):
    """What is left of the reconstruction condition.

    Attributes
    ----------
    shifts : numpy.ndarray
        The integers r, int64, shape (R,): every r for which E[:, r] can differ from zero, and 0.
    values : numpy.ndarray
        E[tau, r], float64, shape (D, R).
    pair_delay : int
        The delay Delta it holds for, in samples.
    """

    shifts: np.ndarray
    values: np.ndarray
    pair_delay: int


def pair_delay_of(analysis, synthesis, pair_delay=None):
    """The delay of a pair in whole samples: the one given, the one the synthesis prototype
    carries, else the sum of the two group delays where that is whole.

    Raises ValueError where none of the three is there.
    """
    if pair_delay is not None:
        return pair_delay
    if synthesis.pair_delay is not None:
        return synthesis.pair_delay
    total = analysis.delay + synthesis.delay
    if abs(total - round(total)) > 1e-6:
        raise ValueError(
            "pair_delay must be given: the synthesis prototype carries none, and the two group "
            f"delays {analysis.delay:.6f} + {synthesis.delay:.6f} do not add up to whole samples"
        )
    return round(total)


def residual_of_taps(channels, hop, analysis, synthesis, pair_delay):
    """`residual` for bare tap arrays, without checks."""
    length, span = len(analysis), len(synthesis)
    low = min(0, -(pair_delay // channels))
    high = max(0, (length + span - 2 - pair_delay) // channels)
    shifts = np.arange(low, high + 1)
    rows = -(-span // hop)
    before = max(0, rows * hop - 1 - pair_delay - low * channels)
    after = max(0, pair_delay + high * channels - length + 1)
    padded = np.concatenate([np.zeros(before), analysis, np.zeros(after)])
    weights = np.zeros(rows * hop)
    weights[:span] = synthesis
    values = np.zeros((len(shifts), hop))
    step = padded.strides[0]
    for row in range(rows):
        # Only these r bring a tap of h under row j of g, for some tau.
        first = max(low, -((pair_delay - row * hop) // channels))
        last = (length - 1 + hop - 1 - pair_delay + row * hop) // channels
        last = min(high, last)
        if last < first:
            continue
        start = before + pair_delay + first * channels - row * hop
        taps = np.lib.stride_tricks.as_strided(
            padded[start:], (last - first + 1, hop), (channels * step, -step), writeable=False
        )
        values[first - low : last - low + 1] += taps * weights[row * hop : (row + 1) * hop]
    values *= channels
    values[-low] -= 1.0
    return Residual(shifts, values.T, pair_delay)


def _same_channels(plan, analysis, synthesis):
    for name, prototype in (("analysis", analysis), ("synthesis", synthesis)):
        if prototype.channels != plan.channels:
            raise wrong_value(
                f"{name}.channels",
                f"the plan's number of channels, {plan.channels}",
                prototype.channels,
            )


@checked(
    plan=Instance(ChannelPlan),
    analysis=Instance(Prototype),
    synthesis=Instance(Prototype),
    pair_delay=Optional(Integer(0)),
)
def residual(plan, analysis, synthesis, pair_delay=None):
    """What the pair leaves of the reconstruction condition.

    E[tau, r] = M sum_j g[tau + j D] h[Delta + r M - tau - j D] - (1 if r == 0 else 0),
    tau = 0..D-1, all integers r. The output of the two banks is
    x[t] + sum_r E[(t + Delta) mod D, r] exp(j 2 pi offset r) x[t - r M].

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D.
    analysis, synthesis : Prototype
        h and g with their own scales.
    pair_delay : int, optional
        Delta in samples; by default what `synthesis` carries, else the sum of the group delays.

    Returns
    -------
    Residual
        ``shifts`` (R,) int64, ``values`` (D, R) float64, ``pair_delay``.

    Raises
    ------
    TypeError, ValueError
        Wrong types; prototypes for another number of channels; no whole pair delay known.

    References
    ----------
    J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing 21, 207-220, 1990.

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, boxcar_prototype
    >>> from chanbank.synthesis.condition import residual, white_error
    >>> plan = ChannelPlan(8000, 8, 8)
    >>> h = boxcar_prototype(8)
    >>> g = Prototype([1.0] * 8, 8, pair_delay=7)
    >>> left = residual(plan, h, g)
    >>> left.shifts.tolist(), float(abs(left.values).max())
    ([0], 0.0)
    """
    _same_channels(plan, analysis, synthesis)
    delta = pair_delay_of(analysis, synthesis, pair_delay)
    return residual_of_taps(plan.channels, plan.hop, analysis.taps, synthesis.taps, delta)


@checked(
    plan=Instance(ChannelPlan),
    analysis=Instance(Prototype),
    synthesis=Instance(Prototype),
    pair_delay=Optional(Integer(0)),
)
def white_error(plan, analysis, synthesis, pair_delay=None):
    """Reconstruction error for white input: rms of the error over rms of the input.

    sqrt(mean over tau of sum over r of E[tau, r]^2), exact from the coefficients; in dB take
    20 log10.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D.
    analysis, synthesis : Prototype
        h and g with their own scales.
    pair_delay : int, optional
        As in `residual`.

    Returns
    -------
    float
        Amplitude ratio, 0 or more.

    Raises
    ------
    TypeError, ValueError
        As `residual`.

    References
    ----------
    J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing 21, 207-220, 1990.

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, boxcar_prototype
    >>> from chanbank.synthesis.condition import white_error
    >>> g = Prototype([1.0] * 7 + [0.9], 8, pair_delay=7)
    >>> round(white_error(ChannelPlan(8000, 8, 8), boxcar_prototype(8), g), 6)
    0.035355
    """
    return rms_error(residual(plan, analysis, synthesis, pair_delay))


def rms_error(left):
    """The white-input error of a `Residual`."""
    return float(np.sqrt((left.values**2).sum() / len(left.values)))


@checked(plan=Instance(ChannelPlan), analysis=Instance(Prototype), synthesis=Instance(Prototype))
def noise_gain(plan, analysis, synthesis):
    """How much more a pair amplifies noise added to its channels than a tight pair does.

    NG = (M / D) norm(g) norm(h), an amplitude ratio; 1 (0 dB) for a tight pair, never below 1
    for a pair that reconstructs.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D.
    analysis, synthesis : Prototype
        h and g.

    Returns
    -------
    float
        Amplitude ratio; in dB take 20 log10.

    Raises
    ------
    TypeError, ValueError
        Wrong types; prototypes for another number of channels.

    References
    ----------
    H. Boelcskei, F. Hlawatsch and H. G. Feichtinger, "Frame-theoretic analysis of oversampled
    filter banks", IEEE Trans. Signal Processing 46(12), 3256-3268, 1998.

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, boxcar_prototype
    >>> from chanbank.synthesis.condition import noise_gain
    >>> round(noise_gain(ChannelPlan(8000, 8, 8), boxcar_prototype(8), Prototype([1.0] * 8, 8)), 12)
    1.0
    """
    _same_channels(plan, analysis, synthesis)
    energy = float((analysis.taps**2).sum() * (synthesis.taps**2).sum())
    return plan.channels / plan.hop * energy**0.5


@checked(left=Instance(Residual), frequencies=Array(1))
def error_spectrum(left, frequencies):
    """Reconstruction error for a tone: rms of the error over the tone's amplitude.

    sqrt(mean over tau of abs(sum over r of E[tau, r] exp(-j 2 pi f r))^2)
    = sqrt(abs(T_0(f) - 1)^2 + sum over l != 0 of abs(T_l(f))^2).

    Parameters
    ----------
    left : Residual
        From `residual`.
    frequencies : array_like of float, shape (F,)
        f = (tone frequency in channel spacings) - offset, so that 0 is a channel's centre; the
        result has period 1.

    Returns
    -------
    numpy.ndarray
        float64, shape (F,), amplitude ratios.

    Raises
    ------
    TypeError, ValueError
        Not a `Residual`; frequencies that are not finite real numbers.

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, boxcar_prototype
    >>> from chanbank.synthesis.condition import error_spectrum, residual
    >>> g = Prototype([1.0] * 7 + [0.9], 8, pair_delay=7)
    >>> left = residual(ChannelPlan(8000, 8, 8), boxcar_prototype(8), g)
    >>> error_spectrum(left, [0.0, 0.5]).round(6)
    array([0.035355, 0.035355])
    """
    turns = np.exp(-2j * np.pi * np.mod(np.outer(frequencies, left.shifts), 1.0))
    # mean over tau of |E u|^2 = u^H (E^T E / D) u: a small matrix, whatever the hop.
    gram = left.values.T @ left.values / len(left.values)
    power = np.einsum("fr,rs,fs->f", turns.conj(), gram, turns).real
    return np.sqrt(np.maximum(power, 0.0))


@checked(left=Instance(Residual), frequencies=Array(1), order=Integer())
def transfer(left, frequencies, order=0):
    """Transfer of the pair from frequency f to f + order * M / D channel spacings.

    A tone exp(j 2 pi F t / M) comes out as sum over l of T_l(f) exp(j 2 pi (F + l M / D) t / M),
    f = F - offset:

    T_l(f) = (1 if l == 0) + (1/D) sum over tau, r of E[tau, r] exp(-j 2 pi (f r + l (tau - Delta)
    / D)).

    Parameters
    ----------
    left : Residual
        From `residual`.
    frequencies : array_like of float, shape (F,)
        f in channel spacings from a channel's centre; period 1.
    order : int, default 0
        l, taken modulo D: 0 is the distortion, the others are the alias transfers.

    Returns
    -------
    numpy.ndarray
        complex128, shape (F,).

    Raises
    ------
    TypeError, ValueError
        Not a `Residual`; frequencies that are not finite real numbers; order not an integer.

    References
    ----------
    P. P. Vaidyanathan, Multirate Systems and Filter Banks, 1993, ch. 5 (distortion and alias
    transfers).

    Examples
    --------
    >>> from chanbank import ChannelPlan, Prototype, boxcar_prototype
    >>> from chanbank.synthesis.condition import residual, transfer
    >>> g = Prototype([1.0] * 7 + [0.9], 8, pair_delay=7)
    >>> left = residual(ChannelPlan(8000, 8, 8), boxcar_prototype(8), g)
    >>> abs(transfer(left, [0.0])).round(4), abs(transfer(left, [0.0], 1)).round(4)
    (array([0.9875]), array([0.0125]))
    """
    hop = len(left.values)
    phase = np.exp(-2j * np.pi * ((order * (np.arange(hop) - left.pair_delay)) % hop) / hop)
    turns = np.exp(-2j * np.pi * np.mod(np.outer(frequencies, left.shifts), 1.0))
    return turns @ (phase @ left.values) / hop + (order % hop == 0)
