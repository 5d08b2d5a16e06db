"""Samples of any accepted type into the working precision."""

import numpy as np

__all__ = ["to_working"]


def to_working(samples, target, zero, scale):
    """Write samples (antennas, n) into `target`, in the target's precision.

    Integers become (value - zero) * scale; where the target is complex they come interleaved,
    I first, twice as many.
    """
    if samples.dtype.kind not in "iu":
        target[...] = samples
        return
    real = target.real.dtype
    if target.dtype.kind == "c":
        if samples.shape[1] == target.shape[1]:  # real samples of a bank that mixes
            target.imag[...] = 0
            _affine(samples, target.real, zero, scale)
            return
        for part, place in ((samples[:, 0::2], target.real), (samples[:, 1::2], target.imag)):
            _affine(part, place, zero, scale)
        return
    _affine(samples, target, real.type(zero), real.type(scale))


def _affine(samples, target, zero, scale):
    kind = target.dtype.type
    np.subtract(samples, kind(zero), out=target, dtype=target.dtype, casting="unsafe")
    np.multiply(target, kind(scale), out=target)
