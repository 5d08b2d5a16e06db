"""The analysis bank in integers, bit for bit as hardware would compute it."""

from dataclasses import dataclass

import numpy as np

from chanbank._checks import (
    Choice,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank.fixedpoint.arithmetic import OVERFLOWS, ROUNDINGS, Word, dft, shifted, twiddles
from chanbank.fixedpoint.noise import noise_report
from chanbank.fixedpoint.quantise import QuantisedPrototype
from chanbank.plan import ChannelPlan

__all__ = ["FixedPointBank", "FixedPointFrames"]

_BLOCK = 1 << 18

_SAMPLES = OwnCheck(
    "a one-dimensional array of finite numbers",
    ("text", TypeError),
    (np.ones((2, 2)), ValueError),
    ([float("nan")], ValueError),
)

_SCALING = (
    'a scaling: "stages" (1/2 at each stage), "input" (1/M before the first), "none", or one shift '
    "of 0 or 1 per stage"
)


@dataclass(frozen=True)
class FixedPointFrames:
    """What a fixed-point bank returns.

    Attributes
    ----------
    integers : numpy.ndarray
        int64, shape (frames, channels, 2): real and imaginary words.
    scale : float
        Value of one unit of the last place, full scale of the samples being 1.
    overflows : dict
        How many values did not fit, at "samples", "accumulator", "fold" and "stage 1" ...

    Examples
    --------
    See `FixedPointBank`.
    """

    integers: np.ndarray
    scale: float
    overflows: dict

    @property
    def frames(self):
        """complex128, shape (frames, channels): the values that the words stand for."""
        return (self.integers[..., 0] + 1j * self.integers[..., 1]) * self.scale

    @property
    def clean(self):
        """True when nothing overflowed."""
        return not any(self.overflows.values())


class FixedPointBank:
    """A bit-true model of the analysis bank: y[n, k] = sum_i h[i] x[nD - i] exp(-2j pi f_k (nD-i)).

    Samples of `sample_bits` bits meet coefficients in integers; P products are summed in an
    accumulator, which is rounded to the data word, and a radix-2 DFT of M points follows
    (decimation in time, one rounding per product and per shift). The sum over the branches is
    arranged so that absolute phase costs nothing but the order of the branches.

    Parameters
    ----------
    plan : ChannelPlan
        M must be a power of two and the offset 0.
    coefficients : QuantisedPrototype
        For the plan's number of channels.
    sample_bits : int, default 16
        Word length of the samples, 2 to 24; full scale is 1.
    accumulator_bits : int, default 48
        Word length of the sum over a branch, up to 62.
    data_bits : int, default 18
        Word length of the DFT's input, stages and output, 4 to 32.
    twiddle_bits : int, default 18
        Word length of the DFT's factors, 4 to 30.
    scaling : str or sequence of int, default "stages"
        "stages" halves at every stage, "input" divides by M before the first, "none" does neither;
        or one shift (0 or 1) per stage.
    fold_shift : int, optional
        Places by which the accumulator is shifted into the data word. By default the least for
        which no samples can overflow it.
    rounding : {"nearest", "even", "truncate"}, default "nearest"
        Of every shift: halves up, halves to even, or towards minus infinity.
    overflow : {"saturate", "wrap"}, default "saturate"
        What a register does with a value that does not fit. Either way it is counted.
    phase : {"absolute", "frame"}, default "absolute"
        As in `AnalysisBank`.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a number of channels that is not a power of
        two; an offset other than 0; coefficients for another number of channels.

    References
    ----------
    A. V. Oppenheim and C. J. Weinstein, "Effects of finite register length in digital filtering
    and the fast Fourier transform", Proc. IEEE 60(8), 957-976, 1972; P. D. Welch, "A fixed-point
    fast Fourier transform error analysis", IEEE Trans. Audio and Electroacoustics 17(2), 1969.

    Examples
    --------
    >>> import numpy as np
    >>> from chanbank import ChannelPlan, kaiser_prototype
    >>> from chanbank.fixedpoint.bank import FixedPointBank
    >>> from chanbank.fixedpoint.quantise import quantised
    >>> h = kaiser_prototype(16, stopband_db=60, passband=0.4, stopband=1.0)
    >>> bank = FixedPointBank(ChannelPlan(16.0, 16, 12), quantised(h, 16))
    >>> result = bank(0.5 * np.exp(2j * np.pi * 3 / 16 * np.arange(600)))
    >>> result.clean, bool(abs(abs(result.frames[20, 3]) - 0.5) < 1e-4)
    (True, True)
    """

    @checked(
        plan=Instance(ChannelPlan),
        coefficients=Instance(QuantisedPrototype),
        sample_bits=Integer(2, 24),
        accumulator_bits=Integer(8, 62),
        data_bits=Integer(4, 32),
        twiddle_bits=Integer(4, 30),
        scaling=OwnCheck(_SCALING, (3, TypeError), ("half", ValueError), ([2], ValueError)),
        fold_shift=Optional(Integer(0, 60)),
        rounding=Choice(*ROUNDINGS),
        overflow=Choice(*OVERFLOWS),
        phase=Choice("absolute", "frame"),
    )
    def __init__(
        self,
        plan,
        coefficients,
        *,
        sample_bits=16,
        accumulator_bits=48,
        data_bits=18,
        twiddle_bits=18,
        scaling="stages",
        fold_shift=None,
        rounding="nearest",
        overflow="saturate",
        phase="absolute",
    ):
        channels = plan.channels
        if channels & (channels - 1):
            raise ValueError(
                f"plan.channels must be a power of two (1, 2, 4 ... {1 << 20}) for the radix-2 DFT "
                f"of the fixed-point bank; got {channels}"
            )
        if plan.exact_offset != 0:
            raise ValueError(
                f"plan.offset must be 0 for the fixed-point bank; got {plan.offset} "
                "(mix the samples first)"
            )
        if coefficients.prototype.channels != channels:
            raise ValueError(
                "coefficients and plan must have the same number of channels; got a prototype for "
                f"{coefficients.prototype.channels} and a plan of {channels}"
            )
        self._plan, self._coefficients = plan, coefficients
        self._settings = {
            "sample_bits": sample_bits,
            "accumulator_bits": accumulator_bits,
            "data_bits": data_bits,
            "twiddle_bits": twiddle_bits,
            "rounding": rounding,
            "overflow": overflow,
            "phase": phase,
        }
        stages = channels.bit_length() - 1
        self._shifts, self._input_shift = _stage_shifts(scaling, stages)
        self._branches = coefficients.branches()
        reach = int(np.abs(self._branches).sum(axis=1).max()) << (sample_bits - 1)
        self._fold_shift = fold_shift
        if fold_shift is None:
            # The complex magnitude may be sqrt(2) of each part's; each part is what must fit.
            self._fold_shift = max(0, reach.bit_length() - (data_bits - 1))
        self._factors = twiddles(channels, twiddle_bits)

    plan = property(lambda self: self._plan, doc="The channel plan.")
    coefficients = property(lambda self: self._coefficients, doc="The quantised prototype.")
    settings = property(lambda self: dict(self._settings), doc="Word lengths and rules, a dict.")
    stage_shifts = property(lambda self: self._shifts, doc="Shift of every DFT stage.")
    fold_shift = property(lambda self: self._fold_shift, doc="Shift into the data word.")
    input_shift = property(lambda self: self._input_shift, doc="Further shift before the DFT.")

    @property
    def scale(self):
        """Value of one unit of the last place of the output."""
        places = self._fold_shift + self._input_shift + sum(self._shifts)
        return self._coefficients.step * 2.0 ** (places - self._settings["sample_bits"] + 1)

    @checked(samples=_SAMPLES, call=False)
    def quantise(self, samples):
        """Samples as the words that the bank receives.

        Parameters
        ----------
        samples : array_like, shape (N,)
            Complex or real, full scale 1 (for integers: 2^(sample_bits - 1), taken as they are).

        Returns
        -------
        real, imag : numpy.ndarray
            int64, rounded to nearest, saturated at full scale.
        lost : int
            How many did not fit.

        Raises
        ------
        TypeError, ValueError
            Samples that are not a one-dimensional array of finite numbers, or complex ones on a
            real plan.

        Examples
        --------
        See the class.
        """
        array = np.asarray(samples)
        if array.ndim != 1 or array.dtype.kind not in "iufc":
            if array.dtype.kind not in "iufc":
                raise wrong_type("samples", "a one-dimensional array of numbers", samples)
            raise wrong_value("samples", "a one-dimensional array of numbers", samples)
        if self._plan.real and array.dtype.kind == "c":
            raise wrong_type("samples", "real numbers, as the plan says", samples)
        if not np.isfinite(array).all():
            raise ValueError("samples must be finite; they hold NaN or infinity")
        unit = 1 if array.dtype.kind in "iu" else 1 << (self._settings["sample_bits"] - 1)
        word = Word(self._settings["sample_bits"], "saturate")
        parts = [np.rint(part * float(unit)) for part in (array.real, array.imag)]
        held = [word.store(np.clip(part, -(2.0**62), 2.0**62).astype(np.int64)) for part in parts]
        return held[0][0], held[1][0], held[0][1] + held[1][1]

    @checked(samples=_SAMPLES, call=False)
    def __call__(self, samples):
        """Run the bank over a whole signal.

        Parameters
        ----------
        samples : array_like, shape (N,)
            As in `quantise`; zero before and after.

        Returns
        -------
        FixedPointFrames
            ceil((N + L - 1) / D) frames.

        Raises
        ------
        TypeError, ValueError
            Samples that are not a one-dimensional array of finite numbers, or complex ones on a
            real plan.

        Examples
        --------
        See the class.
        """
        real, imag, lost = self.quantise(samples)
        channels, hop = self._plan.channels, self._plan.hop
        length = len(self._coefficients.integers)
        count = -(-(len(real) + length - 1) // hop) if len(real) else 0
        outputs = np.asarray(self._plan.dft_index)
        result = np.empty((count, len(outputs), 2), dtype=np.int64)
        overflows = {"samples": lost, "accumulator": 0, "fold": 0}
        overflows |= {f"stage {s + 1}": 0 for s in range(len(self._shifts))}
        span = self._branches.size
        edge = np.zeros(span, dtype=np.int64)
        padded = [np.concatenate([edge, part, edge]) for part in (real, imag)]
        step = max(1, _BLOCK // channels)
        for first in range(0, count, step):
            frames = np.arange(first, min(first + step, count))
            folded = [self._fold(part, frames, overflows) for part in padded]
            a, b, stages = dft(
                *folded,
                self._factors,
                self._settings["twiddle_bits"],
                self._shifts,
                Word(self._settings["data_bits"], self._settings["overflow"]),
                self._settings["rounding"],
            )
            for s, many in enumerate(stages):
                overflows[f"stage {s + 1}"] += many
            result[frames, :, 0], result[frames, :, 1] = a[:, outputs], b[:, outputs]
        return FixedPointFrames(result, self.scale, overflows)

    def _fold(self, padded, frames, overflows):
        """The sums of all branches, rounded into the data word, in the order the DFT wants."""
        channels, hop = self._plan.channels, self._plan.hop
        span = self._branches.size
        settings = self._settings
        accumulator = Word(settings["accumulator_bits"], settings["overflow"])
        newest = span + frames[:, None] * hop - np.arange(channels)
        total = np.zeros((len(frames), channels), dtype=np.int64)
        for row, taps in enumerate(self._branches.T):
            at = np.clip(newest - row * channels, 0, len(padded) - 1)
            total, lost = accumulator.store(total + taps * padded[at])
            overflows["accumulator"] += lost
        places = self._fold_shift + self._input_shift
        word = Word(settings["data_bits"], settings["overflow"])
        held, lost = word.store(shifted(total, places, settings["rounding"]))
        overflows["fold"] += lost
        if settings["phase"] == "absolute":
            # exp(-2j pi k nD / M) over the frames is a turn of the branches.
            order = (np.arange(channels) + frames[:, None] * hop) % channels
            held = np.take_along_axis(held, order, axis=1)
        return held

    @checked(samples=_SAMPLES, call=False)
    def noise(self, samples):
        """Run the bank beside double precision and say where the noise comes from.

        Parameters
        ----------
        samples : array_like
            As in a call; white noise at a level that does not clip gives the figures that the
            published formulas are for.

        Returns
        -------
        NoiseReport

        Raises
        ------
        TypeError, ValueError
            As `quantise`.

        Examples
        --------
        See the class.
        """
        return noise_report(self, samples, self(samples))

    def __repr__(self):
        settings = ", ".join(f"{name}={value!r}" for name, value in self._settings.items())
        return (
            f"FixedPointBank({self._plan.channels} channels, hop {self._plan.hop}, "
            f"{self._coefficients.bits} bit taps, {settings}, stage_shifts={self._shifts})"
        )


def _stage_shifts(scaling, stages):
    """(shift of each stage, shift before the first)."""
    if isinstance(scaling, str):
        known = {
            "stages": ((1,) * stages, 0),
            "input": ((0,) * stages, stages),
            "none": ((0,) * stages, 0),
        }
        if scaling not in known:
            raise wrong_value("scaling", _SCALING, scaling)
        return known[scaling]
    if not isinstance(scaling, (list, tuple)):
        raise wrong_type("scaling", _SCALING, scaling)
    if len(scaling) != stages or any(shift not in (0, 1) for shift in scaling):
        raise wrong_value("scaling", f"{_SCALING}; this bank has {stages} stages", scaling)
    return tuple(int(shift) for shift in scaling), 0
