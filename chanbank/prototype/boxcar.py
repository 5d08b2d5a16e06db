"""The bare DFT as a filter bank: the reference that every design is compared with."""

import numpy as np

from chanbank._checks import Integer, checked
from chanbank.prototype.prototype import Prototype

__all__ = ["boxcar_prototype"]


@checked(channels=Integer(1, 1 << 20))
def boxcar_prototype(channels):
    """The prototype of the bare DFT: h[i] = 1/M for i = 0..M-1.

    Its response is the Dirichlet kernel abs(H(f)) = abs(sin(pi f) / (M sin(pi f / M))), f in
    channel spacings: zero at every other channel's centre, but only 13.26 dB down (many channels)
    at its first sidelobe and 3.92 dB down where two channels meet.

    Parameters
    ----------
    channels : int
        Number of channels M, 1 to 2**20.

    Returns
    -------
    Prototype
        M taps, one per branch, sum(h) = 1.

    Raises
    ------
    TypeError, ValueError
        `channels` is not an integer from 1 to 2**20.

    References
    ----------
    F. J. Harris, "On the use of windows for harmonic analysis with the discrete Fourier
    transform", Proc. IEEE 66(1), 1978.

    Examples
    --------
    >>> from chanbank import boxcar_prototype
    >>> h = boxcar_prototype(4)
    >>> h.taps
    array([0.25, 0.25, 0.25, 0.25])
    """
    return Prototype(
        np.full(channels, 1.0 / channels), channels, label="boxcar", design={"method": "boxcar"}
    )
