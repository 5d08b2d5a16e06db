"""The noise of a fixed-point bank, measured beside double precision and by published formulas."""

import math
from dataclasses import dataclass

import numpy as np

from chanbank._checks import Choice, Integer, checked
from chanbank.fixedpoint.quantise import rounding_floor_db
from chanbank.prototype._measure import decibels

__all__ = ["NoiseReport", "dft_rounding_db", "noise_report"]


@checked(points=Integer(1, 1 << 20), bits=Integer(2, 48), scaling=Choice("stages", "input"))
def dft_rounding_db(points, bits, *, scaling="stages"):
    """Noise over signal of a fixed-point radix-2 DFT for white input at full scale, published.

    With b = bits - 1 fraction bits, N points and input parts uniform over (-1/sqrt(2),
    1/sqrt(2)), variance 1/3 in all: 4 N 2^(-2 b) when each stage halves (half a bit per doubling
    of N), N^2 2^(-2 b) when only the input is scaled, by 1/N (one bit per doubling).

    Parameters
    ----------
    points : int
        N, 1 to 2**20.
    bits : int
        Word length, sign included, 2 to 48.
    scaling : {"stages", "input"}, default "stages"

    Returns
    -------
    float
        dB.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range.

    References
    ----------
    A. V. Oppenheim and C. J. Weinstein, Proc. IEEE 60(8), 957-976, 1972.

    Examples
    --------
    >>> from chanbank.fixedpoint.noise import dft_rounding_db
    >>> round(dft_rounding_db(1024, 16), 1)
    -54.2
    """
    ratio = (4 * points if scaling == "stages" else points**2) * 2.0 ** (-2 * (bits - 1))
    return 10 * math.log10(ratio)


@dataclass(frozen=True)
class NoiseReport:
    """Noise of a fixed-point bank relative to the signal at its output, dB.

    Attributes
    ----------
    total_db : float
        Fixed point against the ideal prototype in double precision.
    coefficients_db : float
        What the rounded taps alone do, in double precision.
    samples_db : float
        What rounding the samples alone does.
    arithmetic_db : float
        What accumulators, roundings and DFT do: fixed point against double precision with the
        rounded taps on the rounded samples.
    floor_dbfs : float
        Arithmetic noise per channel in dB relative to a full-scale tone at its centre.
    published : dict
        What the published formulas say: "coefficients, rms over response" and "coefficients,
        bound" (Chan and Rabiner 1973, relative to H(0)), "dft" (Oppenheim and Weinstein 1972, for
        this signal's own level at the DFT; absent for scalings the formula does not cover) and
        "samples" (step^2/12 through the prototype, white).
    overflows : dict
        As in `FixedPointFrames`.

    Examples
    --------
    See `FixedPointBank.noise`.
    """

    total_db: float
    coefficients_db: float
    samples_db: float
    arithmetic_db: float
    floor_dbfs: float
    published: dict
    overflows: dict

    def table(self):
        """The figures as text.

        Examples
        --------
        See the class.
        """
        rows = [
            ("total", self.total_db),
            ("rounded taps", self.coefficients_db),
            ("rounded samples", self.samples_db),
            ("arithmetic", self.arithmetic_db),
            ("arithmetic, re a full-scale tone", self.floor_dbfs),
            *((f"published: {name}", value) for name, value in self.published.items()),
        ]
        width = max(len(name) for name, _ in rows)
        lines = [f"{name.ljust(width)}  {value:8.1f} dB" for name, value in rows]
        lost = {name: many for name, many in self.overflows.items() if many}
        lines.append(f"overflows: {lost}" if lost else "no overflow")
        return "\n".join(lines)

    def __str__(self):
        return self.table()

    def to_dict(self):
        """The figures as a dict that JSON can hold; infinities become None.

        Examples
        --------
        See the class.
        """
        plain = lambda v: v if math.isfinite(v) else None  # noqa: E731
        names = ("total_db", "coefficients_db", "samples_db", "arithmetic_db", "floor_dbfs")
        held = {name: plain(getattr(self, name)) for name in names}
        held["published"] = {name: plain(value) for name, value in self.published.items()}
        return held | {"overflows": dict(self.overflows)}


def noise_report(bank, samples, result):
    """Measure `result`, what `bank` made of `samples`."""
    settings, coefficients = bank.settings, bank.coefficients
    real, imag, _ = bank.quantise(samples)
    given = np.asarray(samples)
    unit = 2.0 ** (1 - settings["sample_bits"])
    exact = given * unit if given.dtype.kind in "iu" else given
    rounded = (real + 1j * imag) * unit
    ideal = _double(bank, coefficients.ideal.taps, exact)
    taps_only = _double(bank, coefficients.prototype.taps, exact)
    samples_only = _double(bank, coefficients.ideal.taps, rounded)
    same = _double(bank, coefficients.prototype.taps, rounded)
    signal = np.mean(np.abs(ideal) ** 2)

    def ratio(difference):
        power = np.mean(np.abs(difference) ** 2)
        return float(decibels(math.sqrt(power / signal))) if signal else math.inf

    arithmetic = result.frames - same
    level = np.mean(np.abs(arithmetic) ** 2)
    gain = abs(coefficients.prototype.taps.sum())
    rms, bound = rounding_floor_db(coefficients.ideal, coefficients.bits)
    published = {"coefficients, rms over response": rms, "coefficients, bound": bound}
    parts = 1 if bank.plan.real else 2
    noise = parts * unit**2 / 12 * (coefficients.ideal.taps**2).sum()
    if signal:
        published["samples"] = float(10 * math.log10(noise / signal))
        published |= _published_dft(bank, result, signal)
    return NoiseReport(
        ratio(result.frames - ideal),
        ratio(taps_only - ideal),
        ratio(samples_only - ideal),
        ratio(arithmetic),
        float(decibels(math.sqrt(level) / gain)) if level else -math.inf,
        published,
        dict(result.overflows),
    )


def _published_dft(bank, result, signal):
    """Oppenheim and Weinstein's ratio, moved from their input level to this one's."""
    stages = len(bank.stage_shifts)
    halves = bank.stage_shifts == (1,) * stages
    if not (halves or bank.input_shift == stages) or not stages:
        return {}
    points, bits = bank.plan.channels, bank.settings["data_bits"]
    ratio = dft_rounding_db(points, bits, scaling="stages" if halves else "input")
    # Their output has the variance 1/(3 N) of full scale squared.
    theirs = 1 / (3 * points)
    unit = result.scale * 2.0 ** (bits - 1)
    return {"dft": float(ratio + 10 * math.log10(theirs / (signal / unit**2)))}


def _double(bank, taps, samples):
    """The bank in double precision: the same sums, frame by frame."""
    channels, hop = bank.plan.channels, bank.plan.hop
    rows = -(-len(taps) // channels)
    padded = np.zeros(rows * channels)
    padded[: len(taps)] = taps
    length = len(bank.coefficients.integers)
    count = -(-(len(samples) + length - 1) // hop) if len(samples) else 0
    span = rows * channels
    signal = np.concatenate([np.zeros(span), samples, np.zeros(span)])
    outputs = np.asarray(bank.plan.dft_index)
    frames = np.empty((count, len(outputs)), dtype=np.complex128)
    step = max(1, (1 << 18) // channels)
    for first in range(0, count, step):
        n = np.arange(first, min(first + step, count))
        newest = span + n[:, None] * hop - np.arange(channels)
        total = np.zeros((len(n), channels), dtype=np.complex128)
        for row in range(rows):
            at = np.clip(newest - row * channels, 0, len(signal) - 1)
            total += padded[row * channels : (row + 1) * channels] * signal[at]
        if bank.settings["phase"] == "absolute":
            order = (np.arange(channels) + n[:, None] * hop) % channels
            total = np.take_along_axis(total, order, axis=1)
        frames[n] = (np.fft.ifft(total, axis=1) * channels)[:, outputs]
    return frames
