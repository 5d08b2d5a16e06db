"""The arithmetic of recombination: small inverse DFTs, weighted and overlap-added at a new rate."""

import math

import numpy as np

from chanbank.synthesis._between import between_taps

__all__ = ["Recombination"]

_LARGEST_TABLE = 1 << 25  # weights kept (256 MB)
_BLOCK = 1 << 14  # output samples weighted at a time


class Recombination:
    """Weights and turns for K = `count` channels at K' = `spacings`, and what they do to frames.

    Everything is in separate real products in one fixed order, so that the rounding does not
    depend on how many frames come at once.
    """

    def __init__(self, plan, prototype, indices, spacings, dtype):
        self.plan, self.prototype, self.indices = plan, prototype, indices
        self.count, self.spacings, self.dtype = len(indices), spacings, dtype
        self.delay = prototype.pair_delay
        self._set_weights()
        self._set_turns()

    def _set_weights(self):
        """weights[m mod period, j] = g(m R + Delta - n D), n the newest frame in reach less j."""
        hop, over = self.plan.hop, self.spacings
        # m M / K' modulo D comes back after `period` output samples.
        self._period = over * hop // math.gcd(self.plan.channels, over * hop)
        self.reach = -(-self.prototype.length // hop) + 1
        if self._period * self.reach > _LARGEST_TABLE:
            raise ValueError(
                "spacings must leave a table of at most "
                f"{_LARGEST_TABLE} weights; got {self._period} phases x {self.reach} frames at "
                f"spacings {over}. Take a multiple of {over // math.gcd(over, self._period)} or a "
                f"divisor of {self.plan.channels}"
            )
        newest = self.newest(np.arange(self._period))
        whole = np.arange(self._period) * self.plan.channels + (self.delay - newest * hop) * over
        positions = whole[:, None] / over + np.arange(self.reach) * hop
        weights = between_taps(self.prototype, positions)
        self._weights = weights.astype(self.dtype.type(0).real.dtype)

    def _set_turns(self):
        """Turns exp(2j pi (k - k_c) m / K'): one period of m, and its sign in the next one."""
        steps = 2 * np.arange(self.count) - (self.count - 1)
        phase = np.outer(steps, np.arange(self.spacings)) % (2 * self.spacings)
        turns = np.exp(1j * np.pi * phase / self.spacings).astype(self.dtype)
        self._cosine, self._sine = turns.real.copy(), turns.imag.copy()
        self._flips = self.count % 2 == 0

    def newest(self, m):
        """Index of the last frame that output sample m needs."""
        return (m * self.plan.channels + self.delay * self.spacings) // (
            self.plan.hop * self.spacings
        )

    def turned(self, frames, first=None):
        """(..., n, 2, K') real and imaginary parts of each frame's K'-point inverse DFT.

        `first` is given for frames that lack the mixer's rotation: the index of the first.
        """
        if first is not None:
            frames = frames * self._rotation(first, frames.shape[-2])
        shape = (*frames.shape[:-1], 2, self.spacings)
        out = np.zeros(shape, self._weights.dtype)
        for k in range(self.count):
            real, imag = frames[..., k, None].real, frames[..., k, None].imag
            out[..., 0, :] += real * self._cosine[k] - imag * self._sine[k]
            out[..., 1, :] += real * self._sine[k] + imag * self._cosine[k]
        return out

    def _rotation(self, first, count):
        """exp(-2j pi f_k n D), the mixer's turn that frame phase lacks, in exact integers."""
        offset = self.plan.exact_offset
        whole = offset.denominator * self.plan.channels
        index = self.plan.dft_index[self.indices]
        turns = np.empty((count, self.count), self.dtype)
        for k, channel in enumerate(index):
            step = (int(channel) * offset.denominator + offset.numerator) * self.plan.hop % whole
            phase = [(first + n) * step % whole / whole for n in range(count)]
            turns[:, k] = np.exp(-2j * np.pi * np.array(phase))
        return turns

    def weighted(self, known, begin, start, last):
        """Output samples start .. last-1 from frames begin, begin + 1, ..."""
        lead = known.shape[:-3]
        out = np.zeros((*lead, max(0, last - start)), self.dtype)
        for at in range(start, last, _BLOCK):
            m = np.arange(at, min(at + _BLOCK, last))
            newest = self.newest(m) - begin
            weights = self._weights[m % self._period]
            column = m % self.spacings
            part = np.zeros((*lead, 2, len(m)), known.dtype)
            for back in range(self.reach):
                frames = newest - back
                inside = frames >= 0
                frames = np.where(inside, frames, 0)
                weight = np.where(inside, weights[:, back], 0).astype(known.dtype)
                for side in range(2):
                    part[..., side, :] += known[..., frames, side, column] * weight
            if self._flips:
                part *= 1 - 2 * ((m // self.spacings) % 2).astype(known.dtype)
            place = slice(at - start, at - start + len(m))
            out[..., place].real = part[..., 0, :]
            out[..., place].imag = part[..., 1, :]
        return out
