"""Integer arithmetic of a given word length: rounding shifts, overflow, and the radix-2 DFT."""

import numpy as np

__all__ = ["Word", "dft", "shifted", "twiddles"]

ROUNDINGS = ("nearest", "even", "truncate")
OVERFLOWS = ("saturate", "wrap")


def shifted(values, places, rounding):
    """values / 2^places in integers: nearest (half up), nearest with halves to even, or floor."""
    if places == 0:
        return values
    if rounding == "truncate":
        return values >> places
    half = 1 << (places - 1)
    result = (values + half) >> places
    if rounding == "even":
        # A tie was rounded up: take it back where that left an odd number.
        tie = (values & ((1 << places) - 1)) == half
        result = result - (tie & (result & 1 == 1))
    return result


class Word:
    """A register of `bits` bits, sign included, that counts what does not fit."""

    def __init__(self, bits, overflow):
        self.low, self.high = -(1 << (bits - 1)), (1 << (bits - 1)) - 1
        self.bits, self.overflow = bits, overflow

    def store(self, values):
        """What the register holds after the values, and how many did not fit."""
        lost = int(((values < self.low) | (values > self.high)).sum())
        if not lost:
            return values, 0
        if self.overflow == "saturate":
            return np.clip(values, self.low, self.high), lost
        span = 1 << self.bits
        return (values - self.low) % span + self.low, lost


def twiddles(size, bits):
    """exp(+2j pi k / size), k < size/2, as integers of `bits` bits at scale 2^(bits-1) - 1 ...

    ... except that 1 and j need no multiplier and are exact; see `dft`.
    """
    scale = 1 << (bits - 1)
    angle = 2 * np.pi * np.arange(size // 2) / size
    limit = scale - 1
    real = np.clip(np.rint(scale * np.cos(angle)), -scale, limit).astype(np.int64)
    imag = np.clip(np.rint(scale * np.sin(angle)), -scale, limit).astype(np.int64)
    return real, imag


def dft(real, imag, factors, bits, shifts, word, rounding):
    """Inverse-sign DFT of the last axis, sum over m of x[m] exp(+2j pi k m / M), radix 2.

    Decimation in time: bit-reversed input, log2 M stages of butterflies (a + w b, a - w b). Each
    product w b is rounded once to the word's last place, and stage s then shifts its sums right by
    shifts[s], rounding again. Products with 1 and j are exact. Returns the parts and the overflows
    of each stage.
    """
    size = real.shape[-1]
    order = _bit_reversed(size)
    real, imag = real[..., order], imag[..., order]
    lost = []
    half = 1
    for shift in shifts:
        step = size // (2 * half)
        wr, wi = factors[0][::step][:half], factors[1][::step][:half]
        shape = (*real.shape[:-1], size // (2 * half), 2, half)
        a = [part.reshape(shape)[..., 0, :] for part in (real, imag)]
        b = [part.reshape(shape)[..., 1, :] for part in (real, imag)]
        product = [
            shifted(b[0] * wr - b[1] * wi, bits - 1, rounding),
            shifted(b[0] * wi + b[1] * wr, bits - 1, rounding),
        ]
        # The factors 1 and j: wires, not multipliers.
        product[0][..., 0], product[1][..., 0] = b[0][..., 0], b[1][..., 0]
        if half > 1:
            at = half // 2
            product[0][..., at], product[1][..., at] = -b[1][..., at], b[0][..., at]
        stage_lost, parts = 0, []
        for x, t in zip(a, product, strict=True):
            both = np.stack([x + t, x - t], axis=-2)
            held, count = word.store(shifted(both, shift, rounding))
            stage_lost += count
            parts.append(held.reshape(real.shape))
        real, imag = parts
        lost.append(stage_lost)
        half *= 2
    return real, imag, lost


def _bit_reversed(size):
    order = np.zeros(1, dtype=np.int64)
    while len(order) < size:
        order = np.concatenate([2 * order, 2 * order + 1])
    return order
