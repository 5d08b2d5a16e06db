"""Root-Nyquist prototypes: power-complementary, so that analysis and synthesis can share them."""

import numpy as np

from chanbank._checks import Choice, Integer, Optional, Real, checked
from chanbank.prototype._measure import decibels, stopband_peak
from chanbank.prototype.prototype import Prototype

__all__ = ["nyquist_prototype"]

# H_1 ... H_{K-1} of the frequency-sampling prototypes, H_0 = 1, H_k^2 + H_{K-k}^2 = 1. "smooth":
# h and its first even derivatives vanish at the ends; "optimised": the remaining freedom went into
# the sidelobes near the main lobe.
_SMOOTH = {
    2: (0.70710678,),
    3: (0.91143783, 0.41143783),
    4: (0.97195983, 0.70710678, 0.23514695),
    5: (0.99184131, 0.86541624, 0.50105361, 0.12747868),
    6: (0.99818572, 0.94838678, 0.70710678, 0.31711593, 0.06021021),
    7: (0.99938080, 0.97838560, 0.84390076, 0.53649931, 0.20678881, 0.03518546),
    8: (0.99932588, 0.98203168, 0.89425129, 0.70710678, 0.44756522, 0.18871614, 0.03671221),
}
_OPTIMISED = {
    2: _SMOOTH[2],
    3: _SMOOTH[3],
    4: _SMOOTH[4],
    6: (0.99722723, 0.94136732, 0.70710678, 0.33738340, 0.07441672),
    8: (0.99988389, 0.99315513, 0.92708081, 0.70710678, 0.37486185, 0.11680273, 0.01523841),
}
_SOURCES = {
    2: "Martin 1998",
    3: "Martin 1998; Bellanger 2001",
    4: "Martin 1998; Bellanger 2001",
    5: "Mirabbasi and Martin 2003",
    6: "Mirabbasi and Martin 2003",
    7: "Mirabbasi and Martin 2003",
    8: "Mirabbasi and Martin 2003",
}


@checked(
    channels=Integer(2, 1 << 20),
    taps_per_branch=Integer(2, 512),
    method=Choice("root-raised-cosine", "smooth", "optimised"),
    rolloff=Optional(Real(above=0, high=1)),
)
def nyquist_prototype(channels, taps_per_branch, *, method="smooth", rolloff=None):
    """A root-Nyquist prototype: abs(H(f))^2 + abs(H(1 - f))^2 = 1, 3 dB down where channels meet.

    Used on both sides of a bank with M/D = 2 (or, with a small roll-off, less) it reconstructs
    nearly: `dual_prototype` and `prototype_pair` do much better at the same length, but these are
    what published designs and transmitters use.

    "root-raised-cosine", t in channel periods from the centre, roll-off a:

        h(t) = [sin(pi t (1 - a)) + 4 a t cos(pi t (1 + a))] / [pi t (1 - (4 a t)^2)],

    cut to P periods, symmetric over the full length. "smooth" and "optimised", frequency
    sampling with K = P: i = 0..KM-1,

        h[i] = 1 + 2 sum over 0 < k < K of (-1)^k H_k cos(2 pi k i / (K M)),

    symmetric about KM/2, with h[0] = 0 (to the eight printed digits of H; it is set to zero) from
    K = 3 on. All are scaled to sum(h) = 1.

    Parameters
    ----------
    channels : int
        Number of channels M, 2 or more.
    taps_per_branch : int
        P. For "smooth" 2 to 8, for "optimised" 2, 3, 4, 6 or 8 (2, 3, 4 are the same in both);
        up to 512 for "root-raised-cosine".
    method : {"smooth", "optimised", "root-raised-cosine"}, default "smooth"
        Which family.
    rolloff : float, optional
        Roll-off a of the root-raised cosine, 0 < a <= 1; 1 by default. The response ends at
        (1 + a)/2 spacings. Not for the other families.

    Returns
    -------
    Prototype
        PM taps; ``design`` holds the family, its source and ``stopband_db``, the measured peak
        beyond ``stopband_edge``.

    Raises
    ------
    TypeError, ValueError
        Wrong types or ranges; a length the family is not published for; a roll-off for a family
        that has none.

    Notes
    -----
    The pair delay of two frequency-sampling prototypes is KM samples, of two root-raised cosines
    PM - 1.

    References
    ----------
    K. W. Martin, "Small side-lobe filter design for multitone data-communication applications",
    IEEE Trans. Circuits Syst. II 45(8), 1155-1161, 1998; M. Bellanger, "Specification and design
    of a prototype filter for filter bank based multicarrier transmission", ICASSP 2001,
    2417-2420; S. Mirabbasi and K. Martin, "Overlapped complex-modulated transmultiplexer filters
    with simplified design and superior stopbands", IEEE Trans. Circuits Syst. II 50(8), 456-469,
    2003.

    Examples
    --------
    >>> from chanbank import nyquist_prototype
    >>> h = nyquist_prototype(64, 4)
    >>> abs(h.response([0.0, 0.5, 1.5])).round(3)
    array([1.   , 0.707, 0.   ])
    >>> h.delay, round(h.design["stopband_db"], 1)
    (128.0, -39.9)
    """
    if method == "root-raised-cosine":
        a = 1.0 if rolloff is None else rolloff
        taps = _root_raised_cosine(channels, taps_per_branch, a)
        edge, source = (1 + a) / 2, "closed form, common practice"
        design = {"rolloff": a}
    else:
        if rolloff is not None:
            raise ValueError(
                f"rolloff must be None for method {method!r} (only the root-raised cosine has "
                f"one); got {rolloff}"
            )
        table = _SMOOTH if method == "smooth" else _OPTIMISED
        if taps_per_branch not in table:
            raise ValueError(
                f"taps_per_branch must be one of {', '.join(map(str, table))} for method "
                f"{method!r}; got {taps_per_branch}"
            )
        values = table[taps_per_branch]
        taps = _frequency_sampling(channels, taps_per_branch, values)
        edge = 1.0
        source = _SOURCES[taps_per_branch] if method == "smooth" else "Martin 1998"
        design = {"frequency_samples": [1.0, *values]}
    taps = taps / taps.sum()
    edge = min(edge, channels / 2)
    design |= {
        "method": method,
        "source": source,
        "stopband_edge": edge,
        "stopband_db": float(decibels(stopband_peak(taps, channels, edge))),
    }
    return Prototype(taps, channels, label=f"root-Nyquist, {method}", design=design)


def _frequency_sampling(channels, branches, values):
    length = branches * channels
    turn = 2 * np.pi * np.arange(length // 2 + 1) / length
    half = np.ones(len(turn))
    for k, value in enumerate(values, start=1):
        half += 2 * (-1) ** k * value * np.cos(k * turn)
    taps = np.concatenate([half, half[1 : (length + 1) // 2][::-1]])
    if branches >= 3:
        taps[0] = 0.0
    return taps


def _root_raised_cosine(channels, branches, a):
    length = branches * channels
    t = (np.arange(length) - (length - 1) / 2) / channels
    # The two removable points: t = 0 and abs(t) = 1 / (4 a).
    middle, corner = np.abs(t) < 1e-9, np.abs(np.abs(4 * a * t) - 1) < 1e-9
    safe = np.where(middle | corner, 0.123, t)
    taps = (np.sin(np.pi * safe * (1 - a)) + 4 * a * safe * np.cos(np.pi * safe * (1 + a))) / (
        np.pi * safe * (1 - (4 * a * safe) ** 2)
    )
    taps[middle] = 1 - a + 4 * a / np.pi
    angle = np.pi / (4 * a)
    taps[corner] = (a / np.sqrt(2)) * (
        (1 + 2 / np.pi) * np.sin(angle) + (1 - 2 / np.pi) * np.cos(angle)
    )
    return taps
