"""Complex floats into scaled integers, block by block."""

import numpy as np

__all__ = ["copy_scaled", "peak_of"]


def peak_of(samples):
    """Largest finite abs(I) or abs(Q) of complex samples, 0 without any."""
    parts = samples.view(samples.real.dtype)
    peak = max(parts.max(initial=0), -parts.min(initial=0))
    if not np.isfinite(peak):
        peak = np.abs(parts[np.isfinite(parts)]).max(initial=0)
    return float(peak)


def copy_scaled(recording, writer, scale):
    """Write every sample of `recording`, divided by `scale`, to `writer`.

    Returns the number of samples that are not finite; they become 0, for integers hold no others.
    """
    size = max(1, (1 << 20) // recording.streams)
    lost = 0
    for block in recording.blocks(size):
        bad = ~np.isfinite(block)
        if bad.any():
            lost += int(np.count_nonzero(bad))
            block[bad] = 0
        block /= scale
        writer.write(block)
    return lost
