"""Signals through actual banks, as a user streams them, and what comes back in one convention.

A bank is taken as a linear system on complex signals: one for real samples is run twice, with the
real and with the imaginary part, and the two answers are put together. Frames come back with frame
phase, H(f) exp(2j pi f n D) for a tone at f, whatever phase and layout the bank has. Each run
pushes pieces of random sizes, none and one among them, and carries several antennas at once, so
that a fault at the border of two pushes or between antennas is heard.
"""

import copy
import itertools

import numpy as np

__all__ = ["Driver", "Exact", "tone"]

# Tones lie on multiples of 2^-32 cycles per sample, so that their phase is exact at any sample.
_TURN = 1 << 32

_SMALL_PIECES, _LARGE_PIECE = 24, 1 << 15


class Exact:
    """A frequency in cycles per sample on the grid of exact phases."""

    def __init__(self, frequency):
        self.step = round((frequency % 1.0) * _TURN) % _TURN
        self.cycles = self.step / _TURN

    def phases(self, first, count, stride=1):
        """Cycles at samples first, first + stride ..., reduced in integers."""
        start = (self.step * first) % _TURN
        hop = (self.step * stride) % _TURN
        steps = np.arange(count, dtype=np.uint64) * np.uint64(hop) + np.uint64(start)
        return (steps % np.uint64(_TURN)).astype(float) / _TURN


def tone(exact, first, count):
    """exp(2j pi f t) for t = first .. first + count - 1."""
    return np.exp(2j * np.pi * exact.phases(first, count))


class Driver:
    """Fresh copies of an analysis bank and perhaps a synthesis bank, and how to run them."""

    def __init__(self, analysis, synthesis, rng):
        # Copies: the stream in progress on the caller's banks is not touched.
        self.bank = copy.deepcopy(analysis)
        self.back = None if synthesis is None else copy.deepcopy(synthesis)
        self.rng = rng
        self.plan = plan = analysis.plan
        self.channels, self.hop, self.real = plan.channels, plan.hop, plan.real
        self.length = analysis.prototype.length
        self.dtype = np.dtype(analysis.dtype)
        self.epsilon = float(np.finfo(self.dtype).eps)
        select = getattr(analysis, "select", None)
        every = np.arange(plan.output_channels)
        self.outputs = every if select is None else np.array(select)
        self._index = plan.dft_index[self.outputs]
        self._turn = plan.exact_offset / plan.channels
        self.absolute = analysis.phase == "absolute"
        self.pushed = 0

    def settle(self):
        """Frames after which the filter is full."""
        return -(-(self.length - 1) // self.hop)

    def pieces(self, count):
        """Borders of a random cut: a run of small pieces somewhere, and large ones all along."""
        sizes = self.rng.integers(0, 2 * self.hop + 2, _SMALL_PIECES)
        # One sample and none at all, more often than by chance.
        sizes[:: _SMALL_PIECES // 4] = self.rng.integers(0, 2, 4)
        start = int(self.rng.integers(0, max(1, count - int(sizes.sum()))))
        small = np.minimum(count, start + np.cumsum(sizes))
        large = self.rng.integers(0, count + 1, _SMALL_PIECES // 2 + count // _LARGE_PIECE)
        return sorted([0, start, *small.tolist(), *large.tolist(), count])

    def rotation(self, first, count, columns):
        """exp(2j pi f_k n D) for frames n (absolute index) and chosen columns, exactly reduced."""
        start = (first * self.hop) % self.channels
        steps = (start + np.arange(count) * (self.hop % self.channels)) % self.channels
        turns = (steps[:, None] * self._index[columns]) % self.channels / self.channels
        if self._turn:
            step = (self._turn * self.hop) % 1
            begin, over = step.numerator, step.denominator
            extra = np.array([((first + n) * begin) % over / over for n in range(count)])
            turns = turns + extra[:, None]
        return np.exp(2j * np.pi * turns)

    def _input(self, signals):
        """What the bank is given: its own dtype; real and imaginary parts for real samples."""
        if not self.real:
            return signals.astype(self.dtype)
        parts = np.concatenate([signals.real, signals.imag])
        return parts.astype(np.float32 if self.dtype == np.complex64 else np.float64)

    def _together(self, outputs):
        if not self.real:
            return outputs
        half = len(outputs) // 2
        return outputs[:half] + 1j * outputs[half:]

    def _push(self, piece):
        frames = self.bank.push(piece)
        self.pushed += piece.size
        return frames.swapaxes(-1, -2) if self.bank.layout == "channels" else frames

    def frames(self, signals, skip, count, columns=None, first_sample=0):
        """Frame-phase frames skip .. skip + count - 1 (after the first) for signals (antennas, n).

        Returns complex128 (antennas, count, columns).
        """
        columns = np.arange(len(self.outputs)) if columns is None else np.asarray(columns)
        fed = self._input(signals)
        kept = np.empty((len(fed), count, len(columns)), np.complex128)
        self.bank.reset(first_sample)
        done = 0
        cuts = self.pieces(fed.shape[1])
        for low, high in itertools.pairwise(cuts):
            frames = self._push(fed[:, low:high])
            size = frames.shape[1]
            a, b = max(skip, done), min(skip + count, done + size)
            if b > a:
                kept[:, a - skip : b - skip] = frames[:, a - done : b - done][..., columns]
            done += size
        kept = self._together(kept)
        if self.absolute:
            first = -(-first_sample // self.hop) + skip
            step = max(1, (1 << 20) // len(columns))
            for begin in range(0, count, step):
                part = kept[:, begin : begin + step]
                part *= self.rotation(first + begin, part.shape[1], columns)
        return kept

    def synthesise(self, frames):
        """Frames (antennas, frames, channels) through the synthesis bank, cut at random places."""
        fed = frames.astype(self.dtype)
        fed = fed.swapaxes(-1, -2) if self.back.layout == "channels" else fed
        axis = -1 if self.back.layout == "channels" else -2
        cuts = np.sort(self.rng.integers(0, frames.shape[1] + 1, 5))
        self.back.reset()
        parts = np.split(fed, cuts, axis=axis)
        return np.concatenate([self.back.push(np.ascontiguousarray(p)) for p in parts], axis=-1)

    def round_trip(self, signals, first_frame=0):
        """Signals (antennas, n) through both banks, pushed and finished.

        The first sample has the absolute index first_frame * D. Returns complex128
        (antennas, at least n + delay): output s is the pair's estimate of input s - delay.
        """
        fed = self._input(signals)
        self.bank.reset(first_frame * self.hop)
        self.back.reset(first_frame)
        out = []
        cuts = self.pieces(fed.shape[1])
        for low, high in itertools.pairwise(cuts):
            self._back(self.bank.push(fed[:, low:high]), out)
            self.pushed += fed[:, low:high].size
        self._back(self.bank.finish(), out)
        out.append(self.back.finish())
        result = np.concatenate(out, axis=-1).astype(np.complex128 if not self.real else float)
        short = signals.shape[1] + self.back.delay - result.shape[1]
        if short > 0:
            result = np.pad(result, [(0, 0), (0, short)])
        return self._together(result)

    def _back(self, frames, out):
        """Frames into the synthesis bank, cut once more at a random place."""
        axis = -1 if self.bank.layout == "channels" else -2
        if self.bank.layout != self.back.layout:
            frames, axis = frames.swapaxes(-1, -2), -1 if self.back.layout == "channels" else -2
        cut = int(self.rng.integers(0, frames.shape[axis] + 1))
        for part in np.split(frames, [cut], axis=axis):
            out.append(self.back.push(np.ascontiguousarray(part)))
