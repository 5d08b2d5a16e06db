"""Numerical core of the joint designs: least squares over cosine series, by Levenberg-Marquardt.

Unknown are the series of h and of g (or one series that serves as both). Minimised is

    lambda * (reconstruction condition)^2 + weighted stopband energies + rho * energies
    + weight * (passband deviation)^2,

lambda rising from a small value, then the weights are led until error and stopbands are where
they are wanted. All in channel periods and spacings; the number of channels does not enter.
"""

import math

import numpy as np
import scipy.linalg
from scipy.ndimage import maximum_filter1d

from chanbank.prototype._measure import decibels

__all__ = ["JointProblem", "lead", "lead_tight", "stopband_edge"]

_GRID = 16  # samples to a channel period where nothing finer is needed
_TAUS = 16  # phases of the condition looked at; it is smooth in between
_LONG, _FEWER_TAUS = 40, 10  # many taps a branch make it smoother still
_JITTER = 1e-4
_WIDEST = 3.5  # stopband edge in spacings where the oversampling would allow a wider one


def stopband_edge(channels, hop, wanted):
    """The stopband edge of a design in channel spacings: as wanted, else M/D - 1/2, where the
    images of the wanted channel begin."""
    top = min(channels, _GRID) / 2
    if wanted is None:
        return max(0.5, min(channels / hop - 0.5, _WIDEST, top - 0.5))
    if wanted >= top:
        raise ValueError(
            f"stopband must satisfy stopband < min(channels, {_GRID}) / 2; got "
            f"{wanted:g} >= {top:g} channel spacings"
        )
    return wanted


class JointProblem:
    """Grids and bases for one ratio M/D and one or two lengths in channel periods.

    `lengths` is (P, Q) for a pair, (P,) for one series that is its own dual.
    """

    def __init__(self, ratio, lengths, edge, passband, *, channels, hop, whole=False, terms=None):
        self.ratio, self.edge = ratio, edge
        self.tied = len(lengths) == 1
        self.lengths = lengths
        # Enough terms to span the passband, the transition and a little beyond.
        wanted = [terms or math.ceil(span * (1.5 * edge + 0.7)) for span in lengths]
        grid = min(_GRID, channels)
        self.terms = [
            max(1, min(n, span * grid // 2)) for n, span in zip(wanted, lengths, strict=False)
        ]
        self.splits = np.cumsum(self.terms)[:-1]
        self._condition(channels, hop, whole, grid)
        self._frequency(grid, passband, whole)

    def _condition(self, channels, hop, whole, grid):
        p, q = self.lengths[0], self.lengths[-1]
        span = 1 / self.ratio
        exact = grid == channels
        count = hop if exact else _TAUS if p + q < _LONG else _FEWER_TAUS
        tau = (np.arange(count) + (0.0 if whole and exact else 0.5)) / count * span
        rows = math.ceil(q / span)
        when_g = tau[:, None] + np.arange(rows) * span
        shifts = np.arange(-(p + q), p + q + 1)
        when_h = (p + q) / 2 + shifts[None, :, None] - when_g[:, None, :]
        inside = (when_h > 0) & (when_h < p) & (when_g < q)[:, None, :]
        live = inside.any(axis=(0, 2)) | (shifts == 0)
        shifts, when_h, inside = shifts[live], when_h[:, live], inside[:, live]
        h = np.cos(2 * np.pi * np.arange(self.terms[0]) * (when_h[..., None] / p - 0.5))
        h *= inside[..., None]
        g = np.cos(2 * np.pi * np.arange(self.terms[-1]) * (when_g[..., None] / q - 0.5))
        # bilinear[n, k, l]: what a_k b_l adds to condition n = (tau, r).
        self.bilinear = np.matmul(h.transpose(0, 1, 3, 2), g[:, None]).reshape(
            -1, self.terms[0], self.terms[-1]
        )
        self.bilinear_g = np.ascontiguousarray(self.bilinear.transpose(0, 2, 1))
        self.wanted = np.tile((shifts == 0).astype(float), count)
        self.scale = 1 / math.sqrt(count)

    def _frequency(self, grid, passband, whole):
        self.stop, self.base, self.level, self.energy, self.flat = [], [], [], [], []
        top = grid / 2
        for side, (span, terms) in enumerate(zip(self.lengths, self.terms, strict=False)):
            shift = 0.0 if whole and side == 1 and grid < _GRID else 0.5
            times = (np.arange(span * grid) + shift) / grid
            series = np.cos(2 * np.pi * np.arange(terms) * (times[:, None] / span - 0.5))
            count = max(16, int(4 * span * (top - self.edge)))
            frequencies = np.linspace(self.edge, top, count + 1)
            at = lambda f, t=times, s=series, c=span / 2: (  # noqa: E731
                np.cos(2 * np.pi * np.outer(f, t - c)) @ s / grid
            )
            self.stop.append(at(frequencies))
            self.base.append(np.full(count + 1, (top - self.edge) / count))
            self.level.append(at(np.linspace(0, 0.5, 33)))
            self.energy.append(series / math.sqrt(grid))
            inner = at(np.linspace(0, passband, 33))
            self.flat.append(inner - inner[:1])

    def parts(self, x):
        return (x, x) if self.tied else np.split(x, self.splits)

    def start(self, seed):
        """A Kaiser-windowed lowpass, 3 dB down at the channel's edge, with a fixed jitter."""
        out = []
        for span, energy in zip(self.lengths, self.energy, strict=False):
            times = (np.arange(len(energy)) + 0.5) * span / len(energy) - span / 2
            depth = 2.285 * 4 * np.pi * max(self.edge - 0.5, 0.1) * span + 7.95
            beta = min(20.0, max(2.0, 0.1102 * (depth - 8.7)))
            window = np.i0(beta * np.sqrt(np.maximum(0, 1 - (2 * times / span) ** 2)))
            low, high = 0.2, 1.0
            for _ in range(40):
                cutoff = (low + high) / 2
                h = np.sinc(2 * cutoff * times) * window
                passed = abs((h * np.cos(np.pi * times)).sum() / h.sum()) ** 2
                low, high = (cutoff, high) if passed < 0.5 else (low, cutoff)
            h /= np.linalg.norm(h) * math.sqrt(self.ratio)
            out.append(scipy.linalg.lstsq(energy, h)[0])
        x = np.concatenate(out)
        return x + _JITTER * np.random.default_rng(seed).standard_normal(len(x))

    def error(self, x):
        """Condition residuals and their derivative."""
        a, b = self.parts(x)
        by_h = self.bilinear @ b
        by_g = self.bilinear_g @ a
        slope = by_h + by_g if self.tied else np.hstack([by_h, by_g])
        return by_h @ a - self.wanted, slope

    def figures(self, x):
        """Error rms, both stopband peaks (dB), noise gain (dB), worst passband ripple (dB)."""
        error, _ = self.error(x)
        stops, ripples, energies = [], [], []
        for side, series in enumerate(self.parts(x)):
            side = 0 if self.tied else side
            level = np.abs(self.level[side] @ series)
            stops.append(float(decibels(np.abs(self.stop[side] @ series).max() / level.max())))
            flat = np.abs(self.flat[side] @ series + self.level[side][0] @ series)
            ripples.append(float(decibels(flat.max() / max(flat.min(), 1e-30))))
            energies.append(np.linalg.norm(self.energy[side] @ series))
        gain = float(decibels(self.ratio * energies[0] * energies[1]))
        return float(decibels(self.scale * np.linalg.norm(error))), stops, gain, max(ripples)

    def linear_rows(self, weights, rho, flatness):
        """The rows that are linear in the unknowns, compressed to a triangle."""
        blocks = []
        for side in range(len(self.lengths)):
            rows = [
                self.stop[side] * np.sqrt(weights[side])[:, None],
                self.energy[side] * math.sqrt(rho),
            ]
            if flatness:
                rows.append(self.flat[side] * flatness)
            blocks.append(np.linalg.qr(np.vstack(rows), mode="r"))
        return scipy.linalg.block_diag(*blocks)

    def solve(self, x, factor, linear, iterations, tolerance=1e-4):
        """Levenberg-Marquardt on factor * condition^2 + (linear @ x)^2."""
        weight = math.sqrt(factor) * self.scale

        def rows(x):
            error, slope = self.error(x)
            return np.concatenate([weight * error, linear @ x]), np.vstack([weight * slope, linear])

        damping = 1e-10
        residual, slope = rows(x)
        cost = residual @ residual
        eye = np.eye(len(x))
        for _ in range(iterations):
            turn, triangle = np.linalg.qr(slope)
            target = np.concatenate([-(turn.T @ residual), np.zeros(len(x))])
            for _ in range(12):
                # A QR of the stacked rows: the normal equations would lose half the digits.
                q, r = np.linalg.qr(np.vstack([triangle, math.sqrt(damping) * eye]))
                step = scipy.linalg.solve_triangular(r, q.T @ target, check_finite=False)
                moved, tilt = rows(x + step)
                if moved @ moved < cost:
                    break
                damping *= 10
            else:
                return x
            gain = 1 - (moved @ moved) / cost
            x, residual, slope, cost = x + step, moved, tilt, moved @ moved
            damping = max(damping / 10, 1e-24)
            if gain < tolerance:
                break
        return x


def _reweighted(problem, x, shape, strength):
    """Weights that grow where the response is high: from least energy towards least peak."""
    for side, series in enumerate(problem.parts(x)[: len(problem.lengths)]):
        height = maximum_filter1d(np.abs(problem.stop[side] @ series), 9)
        base = problem.base[side]
        shape[side] *= (height / height.max()) ** strength + 1e-3
        shape[side] *= base.sum() / (base * shape[side]).sum()


def lead(problem, balance, *, ripple=None, gain_limit=1.0, seed=0, rounds=40):
    """Lead a pair to error = stopband + balance on both sides; returns (score, series).

    The score in dB is the worst of error and stopbands shifted by the balance, plus penalties for
    a noise gain above `gain_limit` dB and a ripple above `ripple` dB: lower is better.
    """
    x = problem.start(seed)
    rho, flatness, factor = 1e-14, (1e-6 if ripple is not None else 0.0), 1e-5
    weights = [base.copy() for base in problem.base]
    for factor in 10.0 ** np.arange(-5, 1):
        linear = problem.linear_rows(weights, rho, flatness)
        x = problem.solve(x, factor, linear, 40, 1e-3)
    shape = [np.ones(len(base)) for base in problem.base]
    side_weight = [1.0, 1.0]
    best, since = (math.inf, x), 0
    for _ in range(rounds):
        error, stops, gain, uneven = problem.figures(x)
        levels = [error, stops[0] + balance[0], stops[1] + balance[1]]
        score = max(levels) + 20 * max(0.0, gain - gain_limit)
        if ripple is not None:
            score += 100 * max(0.0, uneven / ripple - 1)
        since = since + 1 if score > best[0] - 0.02 else 0
        if score < best[0]:
            best = (score, x)
        if since >= 12:
            break
        factor *= 10 ** ((error - (levels[1] + levels[2]) / 2) / 40)
        tilt = 10 ** ((levels[1] - levels[2]) / 80)
        side_weight = [side_weight[0] * tilt, side_weight[1] / tilt]
        if gain > 0.7 * gain_limit:
            rho = min(max(rho, 1e-12) * 10 ** (2 * (gain - 0.9 * gain_limit)), 1.0)
        else:
            rho = max(rho / 4, 1e-16)
        if ripple is not None:
            flatness *= 10 ** float(np.clip(uneven / ripple - 0.9, -0.5, 0.5))
        _reweighted(problem, x, shape, 0.3)
        weights = [b * s * w for b, s, w in zip(problem.base, shape, side_weight, strict=False)]
        x = problem.solve(x, factor, problem.linear_rows(weights, rho, flatness), 8)
    return best


def lead_tight(problem, *, top=1e6, rounds=12):
    """One series as its own dual, the condition met as far as a factor of `top` drives it."""
    x = problem.start(0)
    weights = [base.copy() for base in problem.base]
    linear = problem.linear_rows(weights, 1e-14, 0.0)
    for factor in 10.0 ** np.arange(-4, math.log10(top) + 0.1, 0.5):
        x = problem.solve(x, factor, linear, 100, 1e-5)
    shape = [np.ones(len(base)) for base in problem.base]
    for _ in range(rounds):
        _reweighted(problem, x, shape, 0.3)
        weights = [b * s for b, s in zip(problem.base, shape, strict=False)]
        x = problem.solve(x, top, problem.linear_rows(weights, 1e-14, 0.0), 8, 1e-5)
    return x
