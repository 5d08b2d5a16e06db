"""Frame bounds of an analysis bank, exact from its polyphase matrices."""

import math
from dataclasses import dataclass

import numpy as np
import scipy.linalg
import scipy.sparse
from scipy.optimize import minimize_scalar

from chanbank._blas import one_blas_thread
from chanbank._checks import Instance, checked
from chanbank.plan import ChannelPlan
from chanbank.prototype._measure import decibels
from chanbank.prototype.prototype import Prototype

__all__ = ["FrameBounds", "frame_bounds"]

_DENSE = 96  # columns up to which a polyphase matrix is decomposed as a dense one
_WIDE = 512  # columns beyond which theta makes no difference in double precision
_BANDED = 4096  # columns up to which a sparse one is reduced as a band
_CHUNK = 1 << 21  # complex numbers in one batch of matrices (32 MB)
_STEPS = 500  # Lanczos steps for larger ones
_FINALISTS = 6  # extremes of the grid that are refined over theta


@dataclass(frozen=True)
class FrameBounds:
    """How a bank scales energy: lower * |x|^2 <= sum abs(y[n, k])^2 <= upper * |x|^2.

    Attributes
    ----------
    lower, upper : float
        The frame bounds A and B, tight: the extremes of the spectrum of the frame operator.
    condition : float
        B / A, inf where A is 0: 1 for a tight bank.
    lower_db, upper_db, condition_db : float
        10 log10 of each (-inf and inf where A is 0).

    Examples
    --------
    See `frame_bounds`.
    """

    lower: float
    upper: float

    @property
    def condition(self):
        return self.upper / self.lower if self.lower > 0 else math.inf

    @property
    def lower_db(self):
        return float(decibels(self.lower)) / 2

    @property
    def upper_db(self):
        return float(decibels(self.upper)) / 2

    @property
    def condition_db(self):
        return self.upper_db - self.lower_db


@checked(plan=Instance(ChannelPlan), prototype=Instance(Prototype))
@one_blas_thread
def frame_bounds(plan, prototype):
    """Frame bounds and condition number of the analysis bank of any plan and prototype.

    With c = gcd(M, D), p = M/c, q = D/c, the bounds A and B are the squares of the least and the
    greatest singular value, over theta in 0..2 pi and b = 0..c-1, of the p x q matrices

        sqrt(M) sum over i of h[j D - b - s M + i M q] exp(-j theta i),  j < p, s < q.

    They are the exact extremes of the bank's energy gain over all signals: with them the noise
    that a dual adds, the convergence of frame iterations and the loss of bits in the inverse are
    bounded. A is 0 (to rounding) where the bank cannot be inverted.

    Parameters
    ----------
    plan : ChannelPlan
        Gives M and D; the offset and the phase convention do not matter. For a real plan these are
        the bounds of the full bank, mirror images included.
    prototype : Prototype
        h, for the plan's number of channels.

    Returns
    -------
    FrameBounds

    Raises
    ------
    TypeError, ValueError
        Wrong types; a prototype for another number of channels.

    Notes
    -----
    theta is searched on a grid finer than the matrices' degree and the best few grid points are
    refined. Matrices of more than 96 columns (M and D with a small common divisor) are sparse and
    span more samples than a prototype does, so that theta hardly matters: five angles up to 512
    columns leave less than 1e-7 of the bounds, two beyond that nothing. Above 4096 columns the
    extremes come from 500 Lanczos steps and lie inside the true bounds by some 1e-4 of them.

    References
    ----------
    H. Boelcskei, F. Hlawatsch and H. G. Feichtinger, "Frame-theoretic analysis of oversampled
    filter banks", IEEE Trans. Signal Processing 46(12), 3256-3268, 1998.

    Examples
    --------
    The sine window at M/D = 2 is tight (the Princen-Bradley condition):

    >>> from chanbank import ChannelPlan, Prototype, frame_bounds
    >>> import numpy as np
    >>> h = Prototype(np.sin(np.pi * np.arange(64) / 64), 64)
    >>> bounds = frame_bounds(ChannelPlan(1.0, 64, 32), h)
    >>> round(bounds.lower, 9), round(bounds.upper, 9), round(bounds.condition_db, 9)
    (64.0, 64.0, 0.0)
    """
    if prototype.channels != plan.channels:
        raise ValueError(
            "prototype must be for the plan's number of channels; got a plan of "
            f"{plan.channels} and a prototype for {prototype.channels}"
        )
    matrices = _Polyphase(prototype.taps, plan.channels, plan.hop)
    # For real taps theta and -theta give conjugate matrices.
    if matrices.q > _DENSE:
        low, high = matrices.extremes(np.linspace(0, np.pi, 5 if matrices.q <= _WIDE else 2))
        return FrameBounds(float(low.min()), float(high.max()))
    count = 1 if matrices.degree == 0 else 12 * matrices.degree + 5
    grid = np.linspace(0, np.pi, count)
    low, high = matrices.extremes(grid)
    lower = _refined(matrices, grid, low, 0)
    upper = _refined(matrices, grid, -high, 1)
    return FrameBounds(max(lower, 0.0), -upper)


def _refined(matrices, grid, values, side):
    """The least value over theta, from the best grid points (b, theta)."""
    sign = 1 if side == 0 else -1
    best = float(values.min())
    if len(grid) == 1:
        return best
    step = grid[1] - grid[0]
    order = np.argsort(values, axis=None)[: _FINALISTS * 3]
    tried = set()
    for flat in order:
        b, at = (int(v) for v in np.unravel_index(flat, values.shape))
        if (b, at - 1) in tried or (b, at + 1) in tried:
            continue
        tried.add((b, at))
        if len(tried) > _FINALISTS:
            break
        found = minimize_scalar(
            lambda theta, b=b: sign * matrices.extremes(np.array([theta]), [b])[side][0, 0],
            bounds=(max(0.0, grid[at] - step), min(np.pi, grid[at] + step)),
            method="bounded",
            options={"xatol": 1e-9},
        )
        best = min(best, float(found.fun))
    return best


class _Polyphase:
    """The matrices of every class b, tap by tap.

    Tap e belongs to class b = -e mod c; with u = (e + b) / c = j q - s p + i p q it stands in row
    j = u / q mod p, column s = -u / p mod q, at power i.
    """

    def __init__(self, taps, channels, hop):
        self.common = math.gcd(channels, hop)
        self.p, self.q = channels // self.common, hop // self.common
        index = np.arange(len(taps))
        self.b = -index % self.common
        u = (index + self.b) // self.common
        self.row = u * pow(self.q, -1, self.p) % self.p if self.p > 1 else u * 0
        self.column = -u * pow(self.p, -1, self.q) % self.q if self.q > 1 else u * 0
        self.power = (u - self.row * self.q + self.column * self.p) // (self.p * self.q)
        self.power -= self.power.min()
        self.degree = int(self.power.max())
        self.weight = taps * math.sqrt(channels)

    def extremes(self, thetas, classes=None):
        """Least and greatest squared singular value: two arrays (classes, thetas)."""
        if self.q > _DENSE:
            return self._sparse(thetas, classes)
        few = classes is not None
        classes = np.arange(self.common) if classes is None else np.asarray(classes)
        low = np.empty((len(classes), len(thetas)))
        high = np.empty_like(low)
        size = max(1, _CHUNK // (self.p * self.q * len(thetas)))
        dense = self._dense(classes) if few else self._dense_all()
        turns = np.exp(-1j * np.outer(np.arange(self.degree + 1), thetas))
        for start in range(0, len(classes), size):
            block = np.einsum("bjsi,it->btjs", dense[start : start + size], turns, optimize=True)
            at = slice(start, start + size)
            if self.q == 1:
                low[at] = high[at] = (np.abs(block) ** 2).sum(axis=(2, 3))
            elif few:
                value = np.linalg.svd(block, compute_uv=False)
                low[at], high[at] = value[..., -1] ** 2, value[..., 0] ** 2
            else:
                value = np.linalg.eigvalsh(block.conj().transpose(0, 1, 3, 2) @ block)
                low[at], high[at] = value[..., 0], value[..., -1]
        return low, high

    def _dense_all(self):
        dense = np.zeros((self.common, self.p, self.q, self.degree + 1))
        dense[self.b, self.row, self.column, self.power] = self.weight
        return dense

    def _dense(self, classes):
        dense = np.zeros((len(classes), self.p, self.q, self.degree + 1))
        for number, b in enumerate(classes):
            mine = slice((-int(b)) % self.common, None, self.common)
            dense[number, self.row[mine], self.column[mine], self.power[mine]] = self.weight[mine]
        return dense

    def _sparse(self, thetas, classes):
        low = np.empty((self.common, len(thetas)))
        high = np.empty_like(low)
        for b in range(self.common):
            mine = slice(-b % self.common, None, self.common)
            for at, theta in enumerate(thetas):
                # At 0 and pi the matrices are real, which costs a quarter.
                real = theta in (0.0, np.pi)
                turn = np.exp(-1j * theta * self.power[mine])
                weight = self.weight[mine] * (np.round(turn.real) if real else turn)
                matrix = scipy.sparse.csr_matrix(
                    (weight, (self.row[mine], self.column[mine])), shape=(self.p, self.q)
                )
                solve = _banded if self.q <= _BANDED else _lanczos
                low[b, at], high[b, at] = solve(matrix)
        return low, high


def _banded(matrix):
    """Extreme eigenvalues of A^H A, all digits.

    Samples M apart are neighbouring columns, so A^H A is a band bent to a ring; taken from both
    ends alternately, the ring is a band of twice the width.
    """
    size = matrix.shape[1]
    order = np.empty(size, int)
    order[0::2], order[1::2] = np.arange((size + 1) // 2), np.arange(size - 1, (size - 1) // 2, -1)
    gram = (matrix.conj().T @ matrix).tocsr()[order][:, order].tocoo()
    below = gram.row - gram.col
    kept = below >= 0
    band = np.zeros((below.max() + 1, size), gram.dtype)
    band[below[kept], gram.col[kept]] = gram.data[kept]
    values = scipy.linalg.eig_banded(band, lower=True, eigvals_only=True)
    return max(values[0], 0.0), values[-1]


def _lanczos(matrix):
    """Extreme eigenvalues of A^H A, by Lanczos steps with full reorthogonalisation."""
    adjoint = matrix.conj().T.tocsr()
    size = matrix.shape[1]
    steps = min(size, _STEPS)
    basis = np.zeros((steps + 1, size), complex)
    basis[0] = np.random.default_rng(0).standard_normal(size)
    basis[0] /= np.linalg.norm(basis[0])
    diagonal, beside = np.zeros(steps), np.zeros(steps)
    for n in range(steps):
        after = adjoint @ (matrix @ basis[n])
        diagonal[n] = np.vdot(basis[n], after).real
        for _ in range(2):
            after -= basis[: n + 1].T @ (basis[: n + 1].conj() @ after)
        beside[n] = np.linalg.norm(after)
        if beside[n] < 1e-13 * diagonal[0]:
            steps = n + 1
            break
        basis[n + 1] = after / beside[n]
    values = scipy.linalg.eigvalsh_tridiagonal(diagonal[:steps], beside[: steps - 1])
    return max(values[0], 0.0), values[-1]
