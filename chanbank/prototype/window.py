"""The windowed sinc: an ideal lowpass cut to length by a window."""

import numbers

import numpy as np
import scipy.signal

from chanbank._checks import Boolean, Integer, OwnCheck, Real, checked, wrong_type, wrong_value
from chanbank.prototype.cosine_windows import COSINE_WINDOWS, cosine_window
from chanbank.prototype.prototype import Prototype

__all__ = ["window_prototype"]

_ACCEPTED = (
    "the name of a window ('hann', 'hft95'), a tuple of name and parameters "
    "(('dolph-chebyshev', 80), ('slepian', 4)), the beta of a Kaiser window, or L numbers"
)

_SCIPY_NAMES = {"dolph-chebyshev": "chebwin", "slepian": "dpss", "kaiser-bessel": "kaiser"}


@checked(
    channels=Integer(1, 1 << 20),
    taps_per_branch=Integer(1),
    window=OwnCheck(_ACCEPTED, (None, TypeError), ("no such window", ValueError), (1j, TypeError)),
    cutoff=Real(0),
    periodic=Boolean(),
)
def window_prototype(channels, taps_per_branch, window, *, cutoff=0.5, periodic=False):
    """Windowed sinc: h[i] = c w[i] sinc(2 cutoff (i - (L - 1)/2) / M), L = P M, sum(h) = 1.

    Here sinc(x) = sin(pi x)/(pi x) and c sets the sum. The -6 dB point lies at `cutoff` (for a
    main lobe of the window narrower than that). ``cutoff=0`` leaves the window itself: with one
    tap per branch, the windowed DFT.

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.
    taps_per_branch : int
        P, 1 or more; L = P M taps.
    window : str, tuple, float or array_like
        Any window that `scipy.signal.get_window` knows, by the same name or tuple (a bare number
        is the beta of a Kaiser window); ``("dolph-chebyshev", sidelobe_db)`` for equal
        sidelobes; ``("slepian", NW)`` for the discrete prolate spheroidal sequence of time
        half-bandwidth NW; ``("kaiser-bessel", beta)``; the cosine sums "nuttall3", "nuttall3a",
        "nuttall3b", "nuttall4", "nuttall4a", "nuttall4b", "nuttall4c", "blackman-harris-3",
        "blackman-harris-4", "blackman-harris-4-74db", "exact-blackman", "flat-top-5", "sft3f",
        "sft4f", "sft5f", "sft3m", "sft4m", "sft5m", "hft70", "hft95", "hft90d", "hft116d",
        "hft144d", "hft169d", "hft196d", "hft223d", "hft248d" in any case; or L numbers of one's
        own.
    cutoff : float, default 0.5
        One-sided cut-off in channel spacings, 0 to M/2.
    periodic : bool, default False
        True for the periodic ("DFT-even") form, symmetric about sample L/2 instead of (L - 1)/2:
        the form in which windows overlap-add to a constant.

    Returns
    -------
    Prototype
        L taps, sum(h) = 1.

    Raises
    ------
    TypeError
        A parameter of the wrong type.
    ValueError
        A value out of range, ``cutoff > channels / 2``, a window that is unknown, refuses its
        parameters or this length, or makes the taps sum to zero.

    References
    ----------
    F. J. Harris, "On the use of windows for harmonic analysis with the discrete Fourier
    transform", Proc. IEEE 66(1), 1978; G. Heinzel, A. Ruediger, R. Schilling, "Spectrum and
    spectral density estimation by the discrete Fourier transform (DFT)", MPI fuer
    Gravitationsphysik, 2002; A. V. Oppenheim and R. W. Schafer, Discrete-Time Signal Processing,
    ch. 7 (the window method).

    Examples
    --------
    >>> from chanbank import window_prototype
    >>> h = window_prototype(64, 8, ("kaiser", 8.0))
    >>> h
    Prototype(length=512, channels=64, taps_per_branch=8, label='kaiser 8')
    >>> float(abs(h.response([0.5]))[0].round(3))
    0.5
    >>> window_prototype(16, 1, "HFT95", cutoff=0).length
    16
    """
    if cutoff > channels / 2:
        raise ValueError(
            f"cutoff must satisfy cutoff <= channels / 2; got {cutoff:g} > {channels / 2:g} "
            "(half the sample rate)"
        )
    length = channels * taps_per_branch
    weights = _weights(window, length, periodic)
    centre = length / 2 if periodic else (length - 1) / 2
    taps = weights * np.sinc(2 * cutoff * (np.arange(length) - centre) / channels)
    total = taps.sum()
    # A sum that is all cancellation cannot be scaled to one.
    if not abs(total) > 1e-9 * np.abs(taps).sum():
        raise ValueError(f"window must leave taps that do not sum to zero; got {window!r}")
    return Prototype(
        taps / total,
        channels,
        label=_label(window),
        design={
            "method": "window",
            "window": _plain(window),
            "cutoff": cutoff,
            "periodic": periodic,
        },
    )


def _weights(window, length, periodic):
    if isinstance(window, (bool, np.bool_)):
        raise wrong_type("window", _ACCEPTED, window)
    if isinstance(window, numbers.Real):
        window = ("kaiser", float(window))
    if isinstance(window, str):
        window = (window,)
    if isinstance(window, tuple) and window and isinstance(window[0], str):
        weights = _named(window, length, periodic)
    else:
        weights = _given(window, length)
    if weights.shape != (length,) or not np.isfinite(weights).all():
        raise wrong_value("window", f"one that gives {length} finite numbers", window)
    return weights


def _named(window, length, periodic):
    name = window[0].lower()
    if name in COSINE_WINDOWS and len(window) == 1:
        return cosine_window(name, length, periodic=periodic)
    known = (_SCIPY_NAMES.get(name, window[0]), *window[1:])
    try:
        return np.asarray(
            scipy.signal.get_window(known if len(known) > 1 else known[0], length, periodic)
        )
    except (TypeError, ValueError, IndexError) as error:
        raise ValueError(f"window must be {_ACCEPTED}; got {window!r}: {error}") from None


def _given(window, length):
    try:
        weights = np.asarray(window)
    except (TypeError, ValueError):
        raise wrong_type("window", _ACCEPTED, window) from None
    if weights.dtype.kind not in "fiu" or weights.ndim != 1:
        raise wrong_type("window", _ACCEPTED, window)
    if len(weights) != length:
        raise wrong_value("window", f"taps_per_branch * channels = {length} numbers", window)
    return weights.astype(np.float64)


def _plain(window):
    """The window as JSON can hold it; one's own numbers are in the taps already."""
    if isinstance(window, str):
        return window
    if isinstance(window, numbers.Real):
        return ["kaiser", float(window)]
    if isinstance(window, tuple):
        return [part if isinstance(part, str) else np.asarray(part).tolist() for part in window]
    return "given"


def _label(window):
    plain = _plain(window)
    return plain if isinstance(plain, str) else " ".join(_short(part) for part in plain)


def _short(part):
    return f"{part:g}" if isinstance(part, numbers.Real) else str(part)
