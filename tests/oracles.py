"""Direct sums, written for clarity, that whole outputs are compared with."""

from fractions import Fraction

import numpy as np
import scipy.signal


def unit(step, indices):
    """exp(-2j pi step t) for exact rational steps and any integer t."""
    step = Fraction(step)
    turns = np.array([float((step * int(t)) % 1) for t in indices], np.float64)
    return np.exp(-2j * np.pi * turns)


def channel_steps(plan):
    """f_k in cycles per sample, exact, of each output channel."""
    return [(Fraction(int(k)) + plan.exact_offset) / plan.channels for k in plan.dft_index]


def down_converters(samples, plan, taps, *, phase="absolute", first_sample=0, columns=None):
    """Each channel by itself: mix by the absolute index, filter with the taps, keep every D-th.

    SciPy's upfirdn does the filtering. Frames are those n with nD >= first_sample.
    """
    hop, count, length = plan.hop, len(samples), len(taps)
    frames = -(-(first_sample + count + length - 1) // hop) - -(-first_sample // hop)
    # upfirdn keeps the outputs 0, D, 2D ... of what it is given: start it on a multiple of D.
    pad = first_sample % hop
    first_frame = -(-first_sample // hop)
    steps = channel_steps(plan)
    columns = range(len(steps)) if columns is None else columns
    result = np.zeros((frames, len(columns)), np.complex128)
    if count == 0:
        return result
    wide = np.concatenate([np.zeros(pad), np.asarray(samples, np.complex128)])
    for place, column in enumerate(columns):
        step = steps[column]
        mixed = wide * unit(step, range(first_sample - pad, first_sample + count))
        filtered = scipy.signal.upfirdn(taps, mixed, 1, hop)
        if pad:
            filtered = filtered[1:]
        result[:, place] = filtered
        if phase == "frame":
            result[:, place] *= np.conj(
                unit(step, [(first_frame + n) * hop for n in range(frames)])
            )
    return result


def overlap_add(frames, plan, taps, delay, *, phase="absolute", gains=None):
    """The synthesis sum frame by frame and channel by channel."""
    hop, length = plan.hop, len(taps)
    count = len(frames)
    gains = np.ones(plan.output_channels) if gains is None else gains
    size = count * hop + max(0, length - hop)
    out = np.zeros(size, np.complex128)
    for n in range(count):
        origin = n * hop if phase == "frame" else 0
        for column, step in enumerate(channel_steps(plan)):
            turn = np.conj(
                unit(step, range(n * hop - delay - origin, n * hop - delay - origin + length))
            )
            weight = 1.0
            if plan.real and (2 * step).denominator != 1:
                weight = 2.0
            out[n * hop : n * hop + length] += (
                weight * gains[column] * frames[n, column] * taps * turn
            )
    return out.real if plan.real else out


def random_signal(rng, count, plan, dtype):
    """White noise of the kind and precision a bank of that dtype takes."""
    samples = rng.standard_normal(count)
    if not plan.real:
        samples = samples + 1j * rng.standard_normal(count)
        return samples.astype(dtype)
    return samples.astype("float32" if np.dtype(dtype) == np.complex64 else "float64")
