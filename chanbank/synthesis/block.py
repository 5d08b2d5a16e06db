"""Inverting a critically sampled bank, as far as that goes: a finished block at a time."""

import math

import numpy as np
import scipy.linalg

from chanbank._blas import one_blas_thread
from chanbank._checks import Choice, Instance, Integer, Optional, OwnCheck, Real, checked
from chanbank.plan import ChannelPlan
from chanbank.prototype._measure import decibels
from chanbank.prototype.prototype import Prototype

__all__ = ["BlockInverse"]

_PROBES = 8  # seeded noise signals from which error profile and noise gain are measured


class BlockInverse:
    """Least-squares inverse of a critically sampled bank (hop = channels) over one block.

    At hop M the bank splits into M filters, one to a polyphase branch:

        (1/M) sum_k y[n, k] exp(-2j pi k rho / M) = sum_p h[rho + p M] x[n M - rho - p M].

    For each rho this solves, with T the band matrix of the branch,

        minimise |T x - v|^2 + regularisation * max(gain)^2 * |x|^2,

    of which the solution is T^H (T T^H + lambda)^{-1} v. No FIR synthesis prototype does this (the
    inverse of a branch is an infinite response), and the frame bound A is next to nothing: the
    response of the branches has near-zeros. So it is a method for finished blocks:

    - of a whole signal (`length` given: silence before and after it, all frames kept) the inverse
      is exact to rounding over the whole length, noise apart;
    - of frames cut from a longer stream (`length` None) samples beyond the block act on its first
      and last frames; the error is large at both ends and decays towards the middle, by about
      10/M dB a frame.

    Parameters
    ----------
    plan : ChannelPlan
        A critically sampled plan, hop = channels; complex, or real with offset 0.
    prototype : Prototype
        The analysis prototype h.
    frames : int
        Number of frames in the block.
    length : int, optional
        Number of samples N of the whole signal; the block must then hold all its frames,
        ceil((N + L - 1) / M) of them. By default the block is cut from a stream.
    regularisation : float, default 0.0
        lambda over the square of the largest branch gain, 0 to 1: tames the noise at the price of
        an error of its own.
    phase : {"absolute", "frame"}, default "absolute"
        As the analysis bank's.

    Attributes
    ----------
    first_sample : int
        Index of the first sample returned, relative to the sample n M of the block's first frame
        n (0 for a whole signal).
    samples : int
        Number of samples returned.
    noise_gain_db : float
        Noise of the result for white noise in the channels, over that of a tight bank with the
        same norm(h).
    error_db : numpy.ndarray
        Reconstruction error over the block for white input, one figure for each M samples
        returned, in dB of error rms over input rms.

    Raises
    ------
    TypeError, ValueError
        Wrong types or ranges; a plan that is not critically sampled (take `dual_prototype`), or a
        real one with an offset; a prototype for another number of channels; too few frames for
        the `length`; branches that vanish.

    Notes
    -----
    `noise_gain_db` and `error_db` are measured, by running seeded white noise through the bank
    and the inverse, and are steady to a few tenths of a dB from 64 channels on.

    References
    ----------
    P. P. Vaidyanathan, Multirate Systems and Filter Banks, 1993 (uniform DFT banks at critical
    sampling); H. Boelcskei and F. Hlawatsch, "Discrete Zak transforms, polyphase transforms, and
    applications", IEEE Trans. Signal Processing 45(4), 851-866, 1997.

    Examples
    --------
    >>> import numpy as np
    >>> from chanbank import AnalysisBank, BlockInverse, ChannelPlan, nyquist_prototype
    >>> plan = ChannelPlan(1.0, 16, 16)
    >>> h = nyquist_prototype(16, 4)
    >>> x = np.exp(2j * np.pi * 0.123 * np.arange(500))
    >>> y = AnalysisBank(plan, h, dtype="complex128")(x)
    >>> inverse = BlockInverse(plan, h, len(y), length=500)
    >>> bool(abs(inverse(y) - x).max() < 1e-9)
    True
    >>> inverse.within(-150)
    (0, 500)
    """

    @checked(
        plan=Instance(ChannelPlan),
        prototype=Instance(Prototype),
        frames=Integer(1),
        length=Optional(Integer(1)),
        regularisation=Real(0, 1),
        phase=Choice("absolute", "frame"),
    )
    @one_blas_thread
    def __init__(
        self, plan, prototype, frames, *, length=None, regularisation=0.0, phase="absolute"
    ):
        channels = plan.channels
        if plan.hop != channels:
            raise ValueError(
                "hop must equal the number of channels for a block inverse; got hop "
                f"{plan.hop}, channels {channels}. Below that dual_prototype reconstructs"
            )
        if plan.real and plan.offset != 0:
            raise ValueError(f"offset must be 0 for a real plan's block inverse; got {plan.offset}")
        if prototype.channels != channels:
            raise ValueError(
                "prototype must be for the plan's number of channels; got a plan of "
                f"{channels} and a prototype for {prototype.channels}"
            )
        if length is not None:
            needed = -(-(length + prototype.length - 1) // channels)
            if frames < needed:
                raise ValueError(
                    "frames must hold all frames of the signal, ceil((length + taps - 1) / "
                    f"channels) = ceil(({length} + {prototype.length} - 1) / {channels}) = "
                    f"{needed}; got {frames}"
                )
        self.plan, self.prototype, self.phase = plan, prototype, phase
        self.frames, self.length, self.regularisation = frames, length, regularisation
        branches = prototype.branches()
        if not branches.any(axis=1).all():
            dead = int(np.flatnonzero(~branches.any(axis=1))[0])
            raise ValueError(
                "prototype must have a tap other than zero in every branch; branch "
                f"{dead} has none, and the samples it would see are lost"
            )
        self._branches = branches
        if length is None:
            self._first, self._count = 1 - branches.shape[1], frames + branches.shape[1] - 1
            self.first_sample = self._first * channels - (channels - 1)
            self.samples = self._count * channels
        else:
            self._first, self._count = 0, -(-length // channels) + 1
            self.first_sample, self.samples = 0, length
        self._factor()
        self._error = self._gain = None

    def __repr__(self):
        names = ("frames", "length", "regularisation", "phase")
        shown = ", ".join(f"{name}={getattr(self, name)!r}" for name in names)
        return f"BlockInverse({self.plan!r}, {self.prototype!r}, {shown})"

    def _factor(self):
        """Band Cholesky factors of T T^H + lambda, or of T^H T + lambda for a whole signal."""
        taps = self._branches.shape[1]
        spread = np.zeros((len(self._branches), taps))
        for lag in range(taps):
            spread[:, lag] = (self._branches[:, lag:] * self._branches[:, : taps - lag]).sum(axis=1)
        gain = np.abs(np.fft.rfft(self._branches, 8 * taps, axis=1)).max() ** 2
        size = self.frames if self.length is None else self._count
        # A floor of rounding size keeps the factorisation positive.
        floor = max(self.regularisation, 4 * np.finfo(float).eps) * gain
        self._factors = []
        for row in spread:
            band = np.zeros((taps, size))
            for lag in range(taps):
                band[lag, : size - lag] = row[lag]
            band[0] += floor
            self._factors.append((scipy.linalg.cholesky_banded(band, lower=True), True))

    def _forward(self, x):
        """T for every branch: (M, count, columns) to (M, frames, columns)."""
        out = np.zeros((len(x), self.frames, x.shape[2]))
        for power in range(self._branches.shape[1]):
            at = np.arange(self.frames) - power - self._first
            inside = (at >= 0) & (at < self._count)
            out[:, inside] += self._branches[:, power, None, None] * x[:, at[inside]]
        return out

    def _backward(self, v):
        out = np.zeros((len(v), self._count, v.shape[2]))
        for power in range(self._branches.shape[1]):
            at = np.arange(self.frames) - power - self._first
            inside = (at >= 0) & (at < self._count)
            out[:, at[inside]] += self._branches[:, power, None, None] * v[:, inside]
        return out

    def _solved(self, right):
        return np.stack(
            [
                scipy.linalg.cho_solve_banded(factor, part, check_finite=False)
                for factor, part in zip(self._factors, right, strict=True)
            ]
        )

    def _inverse(self, v):
        """(M, frames, columns) to (M, count, columns), refined twice where nothing is damped."""
        x = np.zeros((len(v), self._count, v.shape[2]))
        for _ in range(1 if self.regularisation else 3):
            rest = v - self._forward(x)
            if self.length is None:
                x += self._backward(self._solved(rest))
            else:
                x += self._solved(self._backward(rest))
        return x

    @checked(
        frames=OwnCheck(
            "an array (..., frames, channels)",
            ("text", TypeError),
            (np.ones(3), ValueError),
        ),
        first_frame=Integer(),
    )
    @one_blas_thread
    def __call__(self, frames, first_frame=0):
        """The samples that a block of frames came from.

        Parameters
        ----------
        frames : array_like, shape (..., frames, channels)
            The block, of the size given at construction.
        first_frame : int, default 0
            Index n of the block's first frame in its stream (it sets the phase at an offset).

        Returns
        -------
        numpy.ndarray
            complex128 (float64 for a real plan), shape (..., samples); sample i of the result is
            sample ``first_frame * M + first_sample + i`` of the stream.

        Raises
        ------
        TypeError, ValueError
            Frames that are not numbers, of another shape, or not finite.

        Examples
        --------
        See the class.
        """
        plan, channels = self.plan, self.plan.channels
        frames = np.asarray(frames)
        if frames.dtype.kind not in "cfiu":
            raise TypeError(f"frames must be an array of numbers; got dtype {frames.dtype}")
        if frames.ndim < 2 or frames.shape[-2:] != (self.frames, plan.output_channels):
            raise ValueError(
                f"frames must be of shape (..., {self.frames}, {plan.output_channels}); got "
                f"{frames.shape}"
            )
        if not np.isfinite(frames).all():
            raise ValueError("frames must be finite; some are NaN or infinite")
        lead = frames.shape[:-2]
        flat = frames.reshape(-1, self.frames, plan.output_channels).astype(complex)
        if plan.real:
            v = np.fft.irfft(flat.conj(), channels, axis=-1)
        else:
            if self.phase == "frame" and plan.offset:
                flat = flat * self._turns(-(first_frame + np.arange(self.frames)), 1)[:, None]
            v = np.fft.fft(flat, axis=-1) / channels
        columns = np.moveaxis(v, 0, -1).transpose(1, 0, 2)  # (M, frames, signals)
        if not plan.real:
            columns = np.concatenate([columns.real, columns.imag], axis=2)
        x = self._inverse(np.ascontiguousarray(columns))
        if not plan.real:
            half = x.shape[2] // 2
            x = x[..., :half] + 1j * x[..., half:]
        # Branch rho holds samples u M - rho: reversed, the branches interleave in order.
        out = x[::-1].transpose(2, 1, 0).reshape(len(flat), -1)
        begin = self._first * channels - (channels - 1)
        out = out[:, self.first_sample - begin :][:, : self.samples]
        if plan.offset and not plan.real:
            start = first_frame * channels + self.first_sample
            out = out * self._turns(start + np.arange(self.samples), channels)
        return np.ascontiguousarray(out.reshape(*lead, self.samples))

    def _turns(self, index, divisor):
        """exp(2j pi offset index / divisor), reduced in integers."""
        offset = self.plan.exact_offset
        whole = offset.denominator * divisor
        cycles = [(int(i) * offset.numerator) % whole / whole for i in index]
        return np.exp(2j * np.pi * np.array(cycles))

    def _measure(self):
        random = np.random.default_rng(0)
        channels, columns = len(self._branches), _PROBES
        x = random.standard_normal((channels, self._count, columns))
        x /= math.sqrt((x**2).mean())
        if self.length is not None:
            sample = np.arange(self._count) * channels - np.arange(channels)[:, None]
            x *= ((sample >= 0) & (sample < self.length))[..., None]
        wrong = self._inverse(self._forward(x)) - x
        # Row u of the branches holds samples (u - 1) M + 1 ... u M of the block.
        power = (wrong**2).mean(axis=(0, 2))
        self._error = decibels(np.sqrt(power))
        noise = random.standard_normal((channels, self.frames, columns))
        noise /= math.sqrt((noise**2).mean())
        passed = (self._inverse(noise) ** 2).sum() / (self.samples * columns)
        energy = float((self.prototype.taps**2).sum())
        self._gain = float(decibels(math.sqrt(passed * energy / channels)))

    @property
    def noise_gain_db(self):
        if self._gain is None:
            self._measure()
        return self._gain

    @property
    def error_db(self):
        if self._error is None:
            self._measure()
        return self._error.copy()

    @checked(level_db=Real(unit="decibels"))
    def within(self, level_db):
        """Where the reconstruction error stays below a level.

        Parameters
        ----------
        level_db : float
            Error rms over input rms in dB, for example -60.

        Returns
        -------
        (int, int) or None
            First sample and the one after the last, as indices into what the inverse returns, of
            the longest run of whole M-sample rows with `error_db` at most `level_db`; None where
            there is none.

        Raises
        ------
        TypeError, ValueError
            Not a finite number.

        Examples
        --------
        See the class.
        """
        good = np.concatenate([[False], self.error_db <= level_db, [False]])
        edges = np.flatnonzero(good[1:] != good[:-1])
        if not len(edges):
            return None
        runs = edges.reshape(-1, 2)
        first, last = runs[np.argmax(runs[:, 1] - runs[:, 0])]
        shift = self._first * self.plan.channels - (self.plan.channels - 1) - self.first_sample
        begin = max(0, int(first) * self.plan.channels + shift)
        return begin, min(self.samples, int(last) * self.plan.channels + shift)
