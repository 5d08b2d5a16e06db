"""What a measurement keeps: responses to tones, and leakage powers between channels."""

from dataclasses import dataclass

import numpy as np

__all__ = ["MeasuredLeakage", "NoiseResponse", "ToneResponse"]


@dataclass(frozen=True)
class ToneResponse:
    """What one complex tone of amplitude 1 did to the banks that were tested.

    Attributes
    ----------
    frequency : float
        Cycles per sample from the recording's centre.
    channels : numpy.ndarray
        The output channels, int64.
    responses : numpy.ndarray
        complex128, shape (channels,): the mean over the steady frames of
        y[n, k] exp(-2j pi (frequency - f_k) n D), which is H(frequency - f_k).
    residuals : numpy.ndarray
        float64, shape (channels,): largest distance of a single frame from that.
    frames : int
        Frames averaged.
    pair : numpy.ndarray or None
        With a synthesis bank: complex128, shape (D,), what the tone was multiplied by at output
        samples t with (t + pair delay) mod D = 0, 1 ...: the mean over the steady hops.
    pair_residual : float or None
        Largest distance of a single output sample from that.
    """

    frequency: float
    channels: np.ndarray
    responses: np.ndarray
    residuals: np.ndarray
    frames: int
    pair: np.ndarray | None = None
    pair_residual: float | None = None

    def to_dict(self):
        """JSON-safe; complex numbers as pairs of lists."""
        return {
            "frequency": self.frequency,
            "frequency_unit": "cycles per sample",
            "channels": self.channels.tolist(),
            "responses": _split(self.responses),
            "residuals": self.residuals.tolist(),
            "frames": self.frames,
            "pair": None if self.pair is None else _split(self.pair),
            "pair_residual": self.pair_residual,
        }

    @classmethod
    def from_dict(cls, held):
        """Rebuild what `to_dict` gave."""
        return cls(
            held["frequency"],
            np.array(held["channels"]),
            _joined(held["responses"]),
            np.array(held["residuals"]),
            held["frames"],
            None if held["pair"] is None else _joined(held["pair"]),
            held["pair_residual"],
        )


@dataclass(frozen=True)
class NoiseResponse:
    """What a bank made of white noise of which every sample is known.

    An analysis bank is fed with samples and answers with frames, a synthesis bank the other way.

    Attributes
    ----------
    seed : int
        `given` makes the input again.
    shape : tuple of int
        Of the input: (antennas, samples) or (antennas, frames, channels).
    real : bool
        Whether the input is real.
    absolute : bool
        Whether frames given to a synthesis bank have absolute phase.
    first : int
        Index of the first frame, or sample, held.
    channels : numpy.ndarray
        The channels.
    answer : numpy.ndarray
        complex128: frames with frame phase (antennas, frames, channels), or samples
        (antennas, samples).
    """

    seed: int
    shape: tuple
    real: bool
    absolute: bool
    first: int
    channels: np.ndarray
    answer: np.ndarray

    def given(self):
        """The input: signs, or quarter turns where it is complex."""
        rng = np.random.default_rng([self.seed, *self.shape])
        if self.real:
            return rng.integers(0, 2, self.shape) * 2.0 - 1.0
        return np.array([1, 1j, -1, -1j])[rng.integers(0, 4, self.shape)]

    def to_dict(self):
        """JSON-safe."""
        return {
            "seed": self.seed,
            "shape": list(self.shape),
            "real": self.real,
            "absolute": self.absolute,
            "first": self.first,
            "channels": self.channels.tolist(),
            "answer": _split(self.answer),
        }

    @classmethod
    def from_dict(cls, held):
        """Rebuild what `to_dict` gave."""
        return cls(
            held["seed"],
            tuple(held["shape"]),
            held["real"],
            held["absolute"],
            held["first"],
            np.array(held["channels"]),
            _joined(held["answer"]),
        )


def _split(values):
    return {"real": values.real.tolist(), "imag": values.imag.tolist()}


def _joined(held):
    return np.array(held["real"]) + 1j * np.array(held["imag"])


class MeasuredLeakage:
    """Measured power from every channel's occupied band in the outputs tested.

    Attributes
    ----------
    outputs : numpy.ndarray
        The channels tested, shape (K,).
    powers : numpy.ndarray
        P[row, j] as in `LeakageMatrix`, shape (K, channels); NaN for bands that were not run.
    """

    def __init__(self, outputs, powers):
        self.outputs, self.powers = np.array(outputs), np.array(powers, float)

    def power(self, outputs, inputs):
        """P[k, j] for arrays of channels that broadcast together; `outputs` must be tested ones."""
        rows = self._rows(np.asarray(outputs))
        return self.powers[rows, np.asarray(inputs)]

    def matrix_db(self, outputs=None, inputs=None):
        """The matrix in dB, each row relative to the channel's own signal.

        Parameters
        ----------
        outputs, inputs : sequence of int, optional
            Rows (tested channels) and columns wanted; by default all there are.

        Returns
        -------
        numpy.ndarray
            float64, shape (outputs, inputs); NaN for bands that were not run.
        """
        outputs = self.outputs if outputs is None else np.asarray(outputs)
        inputs = np.arange(self.powers.shape[1]) if inputs is None else np.asarray(inputs)
        power = self.power(outputs[:, None], inputs[None, :])
        own = self.power(outputs, outputs)
        with np.errstate(divide="ignore"):
            return 10 * np.log10(power / own[:, None])

    def _rows(self, outputs):
        order = np.argsort(self.outputs)
        at = np.searchsorted(self.outputs, outputs, sorter=order)
        rows = order[np.minimum(at, len(order) - 1)]
        if (self.outputs[rows] != outputs).any():
            raise ValueError(f"outputs must be channels tested, {self.outputs.tolist()}")
        return rows

    def to_dict(self):
        """JSON-safe."""
        return {
            "kind": "dense",
            "outputs": self.outputs.tolist(),
            "powers": [[None if np.isnan(p) else p for p in row] for row in self.powers.tolist()],
        }

    @classmethod
    def from_dict(cls, plan, held):
        """Rebuild what `to_dict` gave."""
        powers = [[np.nan if p is None else p for p in row] for row in held["powers"]]
        return cls(held["outputs"], powers)
