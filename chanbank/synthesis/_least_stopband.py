"""The convex problem behind every dual: small reconstruction error and small stopband energy.

For a given h the condition residual splits into D independent small problems A_tau g_tau = e, but
the stopband energy of g ties them together:

    minimise  (1/D) sum over tau |A_tau g_tau - e|^2
              + weight * integral of abs(G(f)/G(0))^2 over the stopband.

The stopband energy is M |g|^2 minus the energy in the passband |f| < edge, and a function limited
to that band and to the length of g lives in about 2 * edge * Q dimensions, whatever M: the prolate
sequences. So the matrix is block diagonal minus a low rank, and Woodbury's identity solves the
whole problem exactly at the price of the D small ones. The same with the constraint met exactly
instead of weighed (`exact_correction`).
"""

import copy
import math

import numpy as np

from chanbank.synthesis.condition import residual_of_taps

__all__ = ["LeastStopband"]

_CHUNK = 1 << 22  # numbers in one batch of small problems (32 MB)
_KEEP = 1 << 27  # numbers of factors worth keeping between two passes (1 GB)
# Regularisation: the energy of g inside the passband, relative to the weight of its stopband.
# Enough to settle the directions that neither term sees, too little to move the figures.
_RIDGE = 1e-11
_EXACT_RIDGE = 1e-9
# Singular values of the condition (the large ones are about 1) below a cut count as zero: h's
# smallest taps make them, inverting them costs stopband, and a good start has already met their
# share of the condition. The first cut that leaves no more than rounding is taken.
_CUTS = (1e-8, 1e-9, 1e-10, 1e-11, 1e-12, 1e-13, 1e-14, 1e-16, 1e-18)
_ROUNDING = 7e-16
_SAMPLES = 48  # small problems looked at to choose the cut


class LeastStopband:
    """Least-stopband duals of one analysis prototype for one support and delay.

    `edge` in channel spacings; g has taps 0..length-1. `mirrored` says that h and the support are
    symmetric about the same delay: then g is symmetric too and half the problems suffice.
    """

    def __init__(self, taps, channels, hop, length, delay, edge, mirrored=False):
        self.taps, self.channels, self.hop = taps, channels, hop
        self.length, self.delay, self.edge = length, delay, edge
        self.mirrored = mirrored
        self.gain = hop / max(abs(taps.sum()), 1e-300)
        self.rows = -(-length // hop)
        tau = np.arange(min(hop, length))
        if mirrored:
            image = (length - 1 - tau) % hop
            keep = tau <= image
            self.tau, self.twice = tau[keep], np.where(tau == image, 1.0, 2.0)[keep]
        else:
            self.tau, self.twice = tau, np.ones(len(tau))
        low = min(0, -(delay // channels))
        high = max(0, (len(taps) + length - 2 - delay) // channels)
        self.shifts = np.arange(low, high + 1)
        self.zero = -low
        self._pad = max(0, self.rows * hop - 1 - delay - low * channels)
        after = max(0, delay + high * channels - len(taps) + 1)
        self._padded = np.concatenate([np.zeros(self._pad), taps * channels, np.zeros(after)])
        self._prolate()

    def _prolate(self):
        """Basis of the passband on the support: U = cos or sin(2 pi f (s - c) / M) @ mix."""
        span = self.length / self.channels
        count = math.ceil(2 * self.edge * span) + 24
        nodes, weights = np.polynomial.legendre.leggauss(count)
        self._nodes = (nodes + 1) * self.edge / 2
        root = np.sqrt(weights * self.edge)

        def overlap(difference):
            turn = np.pi * difference / self.channels
            small = np.abs(np.sin(turn)) < 1e-12
            safe = np.where(small, 1.0, np.sin(turn))
            return np.where(small, self.length, np.sin(self.length * turn) / safe)

        minus = overlap(self._nodes[:, None] - self._nodes)
        plus = overlap(self._nodes[:, None] + self._nodes)
        self._mix, values = [], []
        for sign in (1,) if self.mirrored else (1, -1):
            gram = (minus + sign * plus) / 2 * np.outer(root, root)
            level, vector = np.linalg.eigh(gram)
            keep = level > self.channels * 1e-15
            self._mix.append(root[:, None] * vector[:, keep] / np.sqrt(level[keep]))
            values.append(level[keep])
        self.values = np.concatenate(values)
        self.rank = len(self.values)

    def _basis(self, index):
        times = (index - (self.length - 1) / 2) / self.channels
        turn = 2 * np.pi * times[..., None] * self._nodes
        parts = [f(turn) @ mix for f, mix in zip((np.cos, np.sin), self._mix, strict=False)]
        return np.concatenate(parts, axis=-1) * (index < self.length)[..., None]

    def _blocks(self, size):
        """Batches (positions in self.tau, tap indices (n, J), A (n, R, J))."""
        for start in range(0, len(self.tau), size):
            at = slice(start, min(start + size, len(self.tau)))
            index = self.tau[at, None] + np.arange(self.rows) * self.hop
            where = (
                self._pad
                + self.delay
                + self.shifts[None, :, None] * self.channels
                - index[:, None, :]
            )
            matrix = self._padded[where]
            matrix *= (index < self.length)[:, None, :]
            yield at, index, matrix

    def _best_cut(self, left):
        """The cut, chosen on a sample of the small problems."""
        sample = np.unique(np.linspace(0, len(self.tau) - 1, _SAMPLES).astype(int))
        few = copy.copy(self)
        few.tau = self.tau[sample]
        (_, _, matrix), *_ = few._blocks(len(sample))
        best, lowest = _CUTS[0], math.inf
        for cut in _CUTS:
            step = _shortest(matrix, _singular(matrix, cut), left[sample])
            rest = left[sample] + (matrix @ step[..., None])[..., 0]
            error = float(np.sqrt((rest**2).sum() / len(sample)))
            if error < lowest / 1.3:
                best, lowest = cut, error
            if error <= _ROUNDING:
                break
        return best

    def _batch(self):
        widest = self.rows * (self.rank + len(self._nodes) + 2 * len(self.shifts) + 3 * self.rows)
        return max(8, _CHUNK // widest)

    def _filled(self, index, values, out):
        inside = index < self.length
        out[index[inside]] = values[inside]

    def _completed(self, g):
        """The taps in order, the mirrored half filled in, and the last bit of asymmetry removed."""
        if not self.mirrored:
            return g
        known = np.zeros(self.length, bool)
        index = self.tau[:, None] + np.arange(self.rows) * self.hop
        known[index[index < self.length]] = True
        g = np.where(known, g, g[::-1])
        return (g + g[::-1]) / 2

    def balanced(self, weight):
        """The minimum for one weight of the stopband energy against the squared error."""
        m = weight / self.gain**2
        diagonal = np.arange(self.rows)

        def factors(matrix):
            normal = matrix.transpose(0, 2, 1) @ matrix
            normal /= self.hop
            normal[:, diagonal, diagonal] += m * self.channels * (1 + _RIDGE)
            return normal, matrix[:, self.zero, :, None] / self.hop

        inner = np.zeros((self.rank, self.rank))
        right = np.zeros(self.rank)
        for at, index, matrix in self._blocks(self._batch()):
            normal, target = factors(matrix)
            basis = self._basis(index)
            solved = np.linalg.solve(normal, np.concatenate([target, basis], axis=2))
            weighted = (basis * self.twice[at, None, None]).reshape(-1, self.rank)
            part = weighted.T @ solved.reshape(-1, self.rank + 1)
            right += part[:, 0]
            inner += part[:, 1:]
        inner = np.diag(1 / (m * self.values)) - (inner + inner.T) / 2
        mixed = np.linalg.solve(inner, right)
        g = np.zeros(self.length)
        for _, index, matrix in self._blocks(self._batch()):
            normal, target = factors(matrix)
            target = target + (self._basis(index) @ mixed)[..., None]
            self._filled(index, np.linalg.solve(normal, target)[..., 0], g)
        return self._completed(g)

    def exact_correction(self, g, *, smooth=True):
        """g + the correction of least stopband energy that meets the condition to rounding.

        Without `smooth`, the shortest correction: from g = 0 that is the canonical dual, cut to
        the support.
        """
        error = residual_of_taps(self.channels, self.hop, self.taps, g, self.delay)
        pick = np.searchsorted(error.shifts, self.shifts)
        left = error.values[self.tau][:, pick]
        inner = np.zeros((self.rank, self.rank))
        right = np.zeros(self.rank)
        high = len(self.shifts)
        cut = self._best_cut(left)
        per = min(high, self.rows) * (self.rows + high)
        kept = [] if len(self.tau) * per <= _KEEP else None
        size = max(8, _CHUNK // (3 * per + self.rows * (self.rank + len(self._nodes))))
        for at, index, matrix in self._blocks(size) if smooth else ():
            factors = _singular(matrix, cut)
            if kept is not None:
                kept.append(factors)
            step = _shortest(matrix, factors, left[at])
            basis = self._basis(index)
            weighted = basis * self.twice[at, None, None]
            right += np.einsum("njk,nj->k", weighted, step)
            reached = (factors[2] @ basis).reshape(-1, self.rank)
            times = np.repeat(self.twice[at], factors[2].shape[1])[:, None]
            inner += weighted.reshape(-1, self.rank).T @ basis.reshape(-1, self.rank)
            inner -= (reached * times).T @ reached
        inner = np.diag(self.channels * (1 + _EXACT_RIDGE) / self.values) - (inner + inner.T) / 2
        mixed = np.linalg.solve(inner, right) if smooth else right
        delta = np.zeros(self.length)
        for number, (at, index, matrix) in enumerate(self._blocks(size)):
            factors = kept[number] if kept else _singular(matrix, cut)
            smooth = (self._basis(index) @ mixed)[..., None]
            reach = factors[2]
            free = (smooth - reach.transpose(0, 2, 1) @ (reach @ smooth))[..., 0]
            self._filled(index, _shortest(matrix, factors, left[at], free), delta)
        return g + self._completed(delta)


def _singular(matrix, cut):
    """U, 1/s (0 beyond the cut) and V^T with the rows beyond the cut set to zero."""
    left, value, right = np.linalg.svd(matrix, full_matrices=False)
    keep = value > cut
    inverse = np.where(keep, 1 / np.where(keep, value, 1.0), 0.0)
    return left, inverse, right * keep[..., None]


def _shortest(matrix, factors, left, step=0.0):
    """`step` + the shortest further step that takes the condition to zero, refined twice."""
    turn, inverse, reach = factors
    step = np.zeros((len(matrix), matrix.shape[2])) + step
    for _ in range(3):
        rest = left + (matrix @ step[..., None])[..., 0]
        part = inverse * (turn.transpose(0, 2, 1) @ rest[..., None])[..., 0]
        step -= (reach.transpose(0, 2, 1) @ part[..., None])[..., 0]
    return step
