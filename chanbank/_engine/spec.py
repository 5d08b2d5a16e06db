"""What the engine is told: numbers and prepared arrays, nothing of hertz."""

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

__all__ = ["AnalysisSpec", "SynthesisSpec"]


@dataclass(frozen=True)
class AnalysisSpec:
    """One analysis bank as arithmetic.

    Frame n is built from the window of P*M samples that ends with sample n*hop, P = ceil(L/M):

        y[n, k] = sum_i taps[i] x[n*hop - i] exp(-2j pi (k/M + turn) (n*hop - i))     (absolute)

    and, with ``rotate=False``, the same times exp(+2j pi (k/M + turn) n*hop)         (frame).
    """

    taps: np.ndarray  # float64, length L, unpadded
    channels: int  # M
    hop: int  # D, 1..M
    dtype: np.dtype  # complex64 or complex128: output and arithmetic
    real: bool  # real samples in; columns then refer to the DFT bins kept
    rotate: bool  # True: absolute phase; False: frame phase
    turn: Fraction  # offset / M in cycles per sample, exact, 0 <= turn < 1
    columns: (
        np.ndarray | None
    )  # DFT bins to keep, in output order; None keeps 0..M-1 (0..M//2 real)
    channel_major: bool  # False: (antennas, frames, columns); True: (antennas, columns, frames)
    workers: int  # threads

    @property
    def column_count(self):
        if self.columns is not None:
            return len(self.columns)
        return self.channels // 2 + 1 if self.real and not self.turn else self.channels


@dataclass(frozen=True)
class SynthesisSpec:
    """One synthesis bank as arithmetic (the mirror of AnalysisSpec).

        z[t] = sum_n sum_k taps[t - n*hop] y[n, k] exp(+2j pi (k/M + turn) (t - delay))

    with absolute phase, z[t] being the pair's estimate of x[t - delay]; with ``rotate=False`` the
    frames lack the mixer's rotation, and the exponent is (t - delay - n*hop).
    """

    taps: np.ndarray  # float64, length L, unpadded
    channels: int  # M
    hop: int  # D, 1..M
    dtype: np.dtype  # complex64 or complex128: frames and arithmetic
    real: bool  # real samples out
    rotate: bool  # True: absolute phase; False: frame phase
    turn: Fraction  # offset / M in cycles per sample, exact, 0 <= turn < 1
    delay: int  # whole samples from the analysis input to this output
    columns: np.ndarray | None  # DFT bins of the frames' columns; None: 0..M-1 (0..M//2 real)
    column_weights: np.ndarray | None  # real with turn: 2 a mirrored pair, 1 a channel of its own
    channel_major: bool  # frames come as (antennas, columns, frames)
    workers: int  # threads

    @property
    def column_count(self):
        if self.columns is not None:
            return len(self.columns)
        return self.channels // 2 + 1 if self.real and not self.turn else self.channels
