"""The synthesis bank: frames of channels in, the wideband signal out."""

import math

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
from chanbank._engine import SynthesisSpec, make_synthesis_engine
from chanbank.analysis.arrays import bank_dtype, checked_out, flat_leading
from chanbank.analysis.base import Bank, same_channels
from chanbank.plan import ChannelPlan
from chanbank.prototype.prototype import Prototype

__all__ = ["SynthesisBank"]

_FRAMES = OwnCheck(
    "an array (..., frames, channels) that the bank's dtype can hold",
    ("text", TypeError),
    (3, TypeError),
    (np.ones(3), ValueError),
)
_OUT = OwnCheck("None or an array that fits the result", ("text", TypeError))
_GAINS = OwnCheck(
    "None or one finite number per channel",
    ("loud", TypeError),
    ([1.0, math.nan], ValueError),
    (np.ones((2, 2, 2)), ValueError),
)


class SynthesisBank(Bank):
    """Put the channels of an analysis bank back together, in one call or as a stream.

    The output is the overlap-add

        z[s] = sum_n sum_k gains[k] g[s - nD] y[n, k] exp(+2j pi f_k (s - delay)),

    the estimate of the analysis bank's input x[s - delay]; it is exact when the prototypes g and h
    meet the Wexler-Raz condition for `delay`.

    Parameters
    ----------
    plan : ChannelPlan
        The analysis bank's plan.
    prototype : Prototype
        The synthesis prototype g, for the same number of channels; `dual_prototype` and
        `prototype_pair` make them.
    pair_delay : int, optional
        Delay of both banks together in whole samples; by default the prototype's own
        ``pair_delay``.
    gains : array_like, optional
        One real or complex number per channel (0 mutes); 1 by default. May be set between pushes.
    dtype : {"complex64", "complex128"}, default "complex64"
        Of the frames and the arithmetic; a real plan's samples are float32 or float64.
    phase : {"absolute", "frame"}, default "absolute"
        As the analysis bank's.
    layout : {"frames", "channels"}, default "frames"
        As the analysis bank's: frames come as (..., frames, channels) or (..., channels, frames).
    workers : int, default 1
        Threads. The bits do not depend on it.

    Attributes
    ----------
    delay : int
        Whole samples from the analysis bank's input to this bank's output.
    next_sample, next_frame : int
        Absolute indices of the next sample to leave and of the next frame to come.
    engine : str
        Which engine runs it.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a prototype for another number of channels
        or another hop, or without a pair delay; gains of the wrong shape or not finite; a real plan
        whose offset is not a multiple of 1/2.

    Notes
    -----
    A real plan holds one channel of each mirrored pair; the bank adds the mirror image, which
    needs the images to fall on the plan's own grid: an offset that is a multiple of 1/2.

    References
    ----------
    J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing 21, 1990;
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.

    Examples
    --------
    Without overlap the bare DFT is its own inverse:

    >>> import numpy as np
    >>> from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank, boxcar_prototype
    >>> plan = ChannelPlan(8.0, 8, 8)
    >>> x = np.arange(20.0) + 0j
    >>> frames = AnalysisBank(plan, boxcar_prototype(8), dtype="complex128")(x)
    >>> back = SynthesisBank(plan, Prototype(np.ones(8), 8), pair_delay=7, dtype="complex128")
    >>> bool(abs(back(frames, length=20) - x).max() < 1e-12)
    True
    """

    _kept = ("_parameters", "_gains", "_lead", "_finished")

    @checked(
        plan=Instance(ChannelPlan),
        prototype=Instance(Prototype),
        pair_delay=Optional(Integer(0)),
        gains=_GAINS,
        dtype=OwnCheck("complex64 or complex128", ("float32", ValueError), (3, ValueError)),
        phase=Choice("absolute", "frame"),
        layout=Choice("frames", "channels"),
        workers=Integer(1, 1024),
    )
    def __init__(
        self,
        plan,
        prototype,
        *,
        pair_delay=None,
        gains=None,
        dtype="complex64",
        phase="absolute",
        layout="frames",
        workers=1,
    ):
        same_channels(plan, prototype)
        hop = prototype.design.get("hop", plan.hop)
        if hop != plan.hop:
            raise ValueError(
                f"plan and prototype must have the same hop; got a plan of hop {plan.hop} and a "
                f"prototype that was designed to reconstruct at hop {hop}. "
                "Prototype(prototype.taps, channels, pair_delay=...) uses its taps all the same"
            )
        if pair_delay is None and prototype.pair_delay is None:
            raise ValueError(
                "pair_delay must be given, since this prototype carries none; it is the delay of "
                "analysis and synthesis together in whole samples. dual_prototype(plan, h) and "
                "prototype_pair(...) return synthesis prototypes that carry it"
            )
        if plan.real and (2 * plan.exact_offset).denominator != 1:
            raise ValueError(
                "plan.offset must be a multiple of 1/2 to synthesise real samples, so that mirror "
                f"images fall on channels of the plan; got {plan.offset}. Use a complex plan and "
                "complex samples"
            )
        self._parameters = {
            "plan": plan,
            "prototype": prototype,
            "pair_delay": prototype.pair_delay if pair_delay is None else pair_delay,
            "dtype": bank_dtype(dtype).name,
            "phase": phase,
            "layout": layout,
            "workers": workers,
        }
        self._gains = self._checked_gains(gains)
        self._build()
        self.reset()

    def _build(self):
        held = self._parameters
        plan = held["plan"]
        columns = weights = None
        turn = (plan.exact_offset / plan.channels) % 1
        if plan.real and turn:
            columns = plan.dft_index
            # A channel at zero frequency or at half the sample rate is its own mirror image.
            twice = 2 * plan.normalised_frequencies
            weights = np.where(twice == np.round(twice), 1.0, 2.0)
        self._spec = SynthesisSpec(
            taps=held["prototype"].taps,
            channels=plan.channels,
            hop=plan.hop,
            dtype=np.dtype(held["dtype"]),
            real=plan.real,
            rotate=held["phase"] == "absolute",
            turn=turn,
            delay=held["pair_delay"],
            columns=columns,
            column_weights=weights,
            channel_major=held["layout"] == "channels",
            workers=held["workers"],
        )
        self._engine = make_synthesis_engine(self._spec)
        self._whole = None

    @property
    def sample_dtype(self):
        """NumPy dtype of the samples returned."""
        if not self.plan.real:
            return self.dtype
        return np.dtype(np.float32 if self.dtype == np.complex64 else np.float64)

    @property
    def delay(self):
        return self._parameters["pair_delay"]

    @property
    def next_frame(self):
        return self._engine.frame

    @property
    def next_sample(self):
        return self._engine.frame * self.plan.hop

    @property
    def gains(self):
        """One gain per channel (read-only array) or None; set it to change the frames to come."""
        return self._gains

    @gains.setter
    def gains(self, gains):
        self._gains = self._checked_gains(gains)

    def __repr__(self):
        extras = [] if self._gains is None else [f"gains=<{len(self._gains)} gains>"]
        return self._described(("pair_delay", "dtype", "phase", "layout", "workers"), extras)

    @checked(frames=_FRAMES, length=Optional(Integer(0)), out=_OUT)
    def __call__(self, frames, length=None, out=None):
        """Synthesise a whole signal from its first frame to its last.

        Parameters
        ----------
        frames : array_like, shape (..., frames, channels), or (..., channels, frames)
            All frames of an analysis bank's one call, frame 0 first.
        length : int, optional
            Number of samples N of the analysis bank's input. Given, the result is aligned with
            the input and N long; otherwise it is the whole overlap-add, ``delay`` samples late.
        out : numpy.ndarray, optional
            Where the samples go: the exact shape, `sample_dtype`, contiguous, writable.

        Returns
        -------
        numpy.ndarray
            (..., N), or (..., frames * D + max(0, L - D)) without `length`. A stream in progress
            on this bank is not touched.

        Raises
        ------
        TypeError, ValueError
            Frames with the wrong number of channels or of higher precision than the bank, fewer
            frames than `length` samples need, an `out` that does not fit.

        Examples
        --------
        See the class.
        """
        frames, count, lead = self._checked_frames(frames)
        whole = count * self.plan.hop + self._tail
        start, size = (0, whole) if length is None else (self.delay, length)
        if length is not None and self.delay + length > whole:
            raise ValueError(
                f"length must be at most {max(0, whole - self.delay)}, since {count} frames give "
                f"{whole} samples of which the first {self.delay} are the pair's delay; got "
                f"{length}. Were the analysis bank's last frames (its finish) left out?"
            )
        out = checked_out(out, (*lead, size), self.sample_dtype)
        if self._whole is None:
            self._whole = make_synthesis_engine(self._spec)
        self._whole.reset(0, math.prod(lead))
        sink = _Aligned(flat_leading(out, 1), start)
        flat, step = flat_leading(frames, 2), self._step
        for first in range(0, count, step):
            sink.take(self._run(self._whole, self._slice(flat, first, first + step)))
        sink.take(self._flush(self._whole, math.prod(lead)))
        return out

    @checked(frames=_FRAMES, out=_OUT, call=False)
    def push(self, frames, out=None):
        """Take the next frames of a stream and return the samples that they complete.

        Each frame completes D samples: after n frames in all, the pushes have returned n D.
        Frames in pieces of any sizes, then `finish`, give bit for bit what one call without
        `length` gives.

        Parameters
        ----------
        frames : array_like, shape (..., n, channels), or (..., channels, n)
            The next n frames, n >= 0; the leading axes are fixed by the first push.
        out : numpy.ndarray, optional
            Where the samples go, shape (..., n * D).

        Returns
        -------
        numpy.ndarray
            (..., n * D) of `sample_dtype`; `out` when given.

        Raises
        ------
        TypeError, ValueError
            Frames the bank cannot take, leading axes that changed, an `out` that does not fit.
        RuntimeError
            The stream is finished; `reset` starts a new one.

        Examples
        --------
        >>> import numpy as np
        >>> from chanbank import ChannelPlan, Prototype, SynthesisBank
        >>> back = SynthesisBank(ChannelPlan(8.0, 8, 4), Prototype(np.ones(10), 8), pair_delay=8)
        >>> back.push(np.ones((3, 8), "complex64")).shape, back.finish().shape
        ((12,), (6,))
        """
        self._refuse_finished()
        frames, count, lead = self._checked_frames(frames)
        self._refuse_other_lead("frames", lead)
        out = checked_out(out, (*lead, count * self.plan.hop), self.sample_dtype)
        if self._lead is None:
            self._lead = lead
            self._engine.reset(self._engine.frame, math.prod(lead))
        self._engine.push(flat_leading(frames, 2), self._gains, flat_leading(out, 1))
        return out

    @checked(out=_OUT, call=False)
    def finish(self, out=None):
        """End the stream: the last max(0, L - D) samples of the overlap.

        Parameters
        ----------
        out : numpy.ndarray, optional
            Where the samples go.

        Returns
        -------
        numpy.ndarray
            (..., max(0, L - D)) of `sample_dtype`.

        Raises
        ------
        RuntimeError
            The stream is finished already.
        TypeError, ValueError
            An `out` that does not fit.

        Examples
        --------
        See `push`.
        """
        self._refuse_finished()
        lead = self._lead or ()
        out = checked_out(out, (*lead, self._tail), self.sample_dtype)
        flat_leading(out, 1)[...] = self._flush(self._engine, math.prod(lead))
        self._finished = True
        return out

    @checked(first_frame=Integer(-(1 << 50), 1 << 50))
    def reset(self, first_frame=0):
        """Forget all frames; the next to come has the absolute index `first_frame`.

        Parameters
        ----------
        first_frame : int, default 0
            ``next_frame`` of an analysis bank after ``reset(first_sample)``; the samples then
            start at s = first_frame * D.

        Raises
        ------
        TypeError, ValueError
            Not an integer, or beyond 2**50 in magnitude.

        Examples
        --------
        >>> import numpy as np
        >>> from chanbank import ChannelPlan, Prototype, SynthesisBank
        >>> back = SynthesisBank(ChannelPlan(8.0, 8, 4), Prototype(np.ones(8), 8), pair_delay=8)
        >>> back.reset(10)
        >>> back.next_frame, back.next_sample
        (10, 40)
        """
        self._lead = None
        self._finished = False
        self._engine.reset(first_frame, 1)

    @property
    def _tail(self):
        return max(0, self.prototype.length - self.plan.hop)

    @property
    def _step(self):
        """Frames of a one-call block: some 64 Ki samples, so that nothing grows with the signal."""
        return max(1, (1 << 16) // self.plan.channels)

    def _slice(self, frames, start, stop):
        return frames[..., start:stop] if self.layout == "channels" else frames[:, start:stop]

    def _run(self, engine, frames):
        count = frames.shape[2 if self.layout == "channels" else 1]
        samples = np.empty((len(frames), count * self.plan.hop), self.sample_dtype)
        engine.push(frames, self._gains, samples)
        return samples

    def _flush(self, engine, antennas):
        count = -(-self._tail // self.plan.hop)
        shape = (count, self._spec.column_count)
        if self.layout == "channels":
            shape = shape[::-1]
        return self._run(engine, np.zeros((antennas, *shape), self.dtype))[:, : self._tail]

    def _checked_frames(self, frames):
        array = np.asarray(frames)
        if array.dtype.kind not in "fc":
            raise wrong_type("frames", "complex numbers", array)
        columns = self._spec.column_count
        wanted = (
            "(..., channels, frames)" if self.layout == "channels" else "(..., frames, channels)"
        )
        axis = -2 if self.layout == "channels" else -1
        if array.ndim < 2 or array.shape[axis] != columns:
            raise wrong_value("frames", f"of shape {wanted} with {columns} channels", array)
        if np.result_type(array.dtype, np.complex64).itemsize > self.dtype.itemsize:
            raise TypeError(
                f"frames must not be of higher precision than the bank's {self.dtype.name}; got "
                f'{array.dtype.name}. Ask for dtype="complex128", or pass '
                "frames.astype('complex64')"
            )
        if not array.dtype.isnative or array.dtype.name == "float16":
            array = array.astype(self.dtype)
        array = np.ascontiguousarray(array)
        return array, array.shape[-1 if self.layout == "channels" else -2], array.shape[:-2]

    def _checked_gains(self, gains):
        if gains is None:
            return None
        count = self._parameters["plan"].output_channels
        accepted = f"None or {count} finite real or complex numbers"
        try:
            array = np.asarray(gains)
        except ValueError:
            raise wrong_value("gains", accepted, gains) from None
        if array.dtype.kind not in "iufc":
            raise wrong_type("gains", accepted, gains)
        if array.shape != (count,):
            raise wrong_value("gains", accepted, array)
        if not np.isfinite(array).all():
            where = int(np.flatnonzero(~np.isfinite(array))[0])
            raise ValueError(f"gains must be {accepted}; gain {where} is {array[where]}")
        array = array.astype(np.complex128)
        array.flags.writeable = False
        return array


class _Aligned:
    """Collects a stream of samples into `out`, without the first `skip` of them."""

    def __init__(self, out, skip):
        self._out, self._position = out, -skip

    def take(self, samples):
        low = max(0, -self._position)
        high = min(samples.shape[1], self._out.shape[1] - self._position)
        if high > low:
            self._out[:, self._position + low : self._position + high] = samples[:, low:high]
        self._position += samples.shape[1]
