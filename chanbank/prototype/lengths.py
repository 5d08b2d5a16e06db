"""How long a lowpass must be: the published estimates, as starting points for real designs."""

import math

from chanbank._checks import Integer, Real, checked

__all__ = ["LENGTH_SOURCES", "length_estimates", "require_band_edges"]

LENGTH_SOURCES = {
    "kaiser window": "J. F. Kaiser, Proc. IEEE Int. Symp. Circuits and Systems, 1974, 20-23",
    "kaiser equiripple": "J. F. Kaiser, Proc. IEEE Int. Symp. Circuits and Systems, 1974, 20-23",
    "herrmann-rabiner-chan": "O. Herrmann, L. R. Rabiner, D. S. K. Chan, Bell Syst. Tech. J. "
    "52(6), 1973, 769-799",
    "bellanger": "M. Bellanger, Digital Processing of Signals, 1984",
    "harris": "f. j. harris, Multirate Signal Processing for Communication Systems, 2004",
}


def require_band_edges(channels, passband, stopband):
    """Refuse one-sided band edges (channel spacings) that no lowpass can have."""
    if not passband < stopband <= channels / 2:
        raise ValueError(
            "band edges must satisfy passband < stopband <= channels / 2; got "
            f"passband {passband:g}, stopband {stopband:g}, channels / 2 = {channels / 2:g}"
        )


def deviation(passband_db):
    """The deviation d of a passband of 20 log10((1 + d)/(1 - d)) dB from lowest to highest."""
    return math.tanh(passband_db * math.log(10) / 40)


def ripple_db(deviation):
    """The ripple 20 log10((1 + d)/(1 - d)) in dB of a passband that deviates by d."""
    return 40 / math.log(10) * math.atanh(deviation)


@checked(
    channels=Integer(1, 1 << 20),
    passband=Real(0),
    stopband=Real(above=0),
    passband_db=Real(above=0),
    stopband_db=Real(above=0),
)
def length_estimates(channels, *, passband, stopband, passband_db, stopband_db):
    """Taps that a lowpass needs, by each of the published estimates.

    With dF = (stopband - passband)/M in cycles per sample, d2 = 10^(-stopband_db/20) and the
    passband between 1 - d1 and 1 + d1, passband_db = 20 log10((1 + d1)/(1 - d1)):

    ========================= ====================================================== ==========
    "kaiser window"           1 + (-20 log10(min(d1, d2)) - 7.95) / (14.36 dF)        to 2 %
    "kaiser equiripple"       1 + (-20 log10(sqrt(d1 d2)) - 13) / (14.6 dF)           to 10 %
    "herrmann-rabiner-chan"   1 + D/dF - f dF (below)                                 to 10 %
    "bellanger"               (2/3) log10(1 / (10 d1 d2)) / dF                        to 10 %
    "harris"                  stopband_db / (22 dF), blind to the passband            to 25 %
    ========================= ====================================================== ==========

    with L1 = log10 d1, L2 = log10 d2 (the smaller as d2),
    D = L2 (0.005309 L1^2 + 0.07114 L1 - 0.4761) - (0.00266 L1^2 + 0.5941 L1 + 0.4278) and
    f = 11.01217 + 0.51244 (L1 - L2). The third column is the accuracy against the shortest design
    that meets the figures (of the window's own kind for the first, minimax for the others).

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.
    passband, stopband : float
        One-sided band edges in channel spacings, 0 <= passband < stopband <= M/2.
    passband_db : float
        Passband ripple, highest over lowest, in dB, above 0.
    stopband_db : float
        Stopband attenuation in dB below the passband, above 0.

    Returns
    -------
    dict of str to float
        Taps, not rounded, at least 1; keys as in the table (`LENGTH_SOURCES` has the sources).

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; ``passband >= stopband`` or
        ``stopband > channels / 2``.

    References
    ----------
    J. F. Kaiser, Proc. IEEE Int. Symp. Circuits and Systems, 1974; O. Herrmann, L. R. Rabiner,
    D. S. K. Chan, Bell Syst. Tech. J. 52(6), 1973; M. Bellanger, Digital Processing of Signals,
    1984; f. j. harris, Multirate Signal Processing for Communication Systems, 2004.

    Examples
    --------
    >>> from chanbank import length_estimates
    >>> taps = length_estimates(
    ...     64, passband=0.4, stopband=0.6, passband_db=0.1, stopband_db=60
    ... )
    >>> {method: round(value) for method, value in taps.items()}
    {'kaiser window': 1161, 'kaiser equiripple': 865, 'herrmann-rabiner-chan': 870,
     'bellanger': 905, 'harris': 873}
    """
    require_band_edges(channels, passband, stopband)
    width = (stopband - passband) / channels
    d1, d2 = deviation(passband_db), 10 ** (-stopband_db / 20)
    product = d1 * d2
    taps = {
        "kaiser window": 1 + (-20 * math.log10(min(d1, d2)) - 7.95) / (14.36 * width),
        "kaiser equiripple": 1 + (-10 * math.log10(product) - 13) / (14.6 * width),
        "herrmann-rabiner-chan": _herrmann(max(d1, d2), min(d1, d2), width),
        "bellanger": 2 / 3 * math.log10(1 / (10 * product)) / width,
        "harris": stopband_db / (22 * width),
    }
    return {method: max(1.0, value) for method, value in taps.items()}


def _herrmann(d1, d2, width):
    l1, l2 = math.log10(d1), math.log10(d2)
    gain = l2 * (0.005309 * l1**2 + 0.07114 * l1 - 0.4761) - (
        0.00266 * l1**2 + 0.5941 * l1 + 0.4278
    )
    return gain / width - (11.01217 + 0.51244 * (l1 - l2)) * width + 1
