"""The analysis bank: a wideband signal in, frames of channels out."""

import math
from fractions import Fraction

import numpy as np

from chanbank._checks import (
    Choice,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    Real,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank._engine import AnalysisSpec, make_analysis_engine
from chanbank.analysis.arrays import bank_dtype, checked_out, flat_leading
from chanbank.analysis.base import Bank, same_channels
from chanbank.analysis.samples import SampleDoor
from chanbank.plan import ChannelPlan
from chanbank.prototype.prototype import Prototype

__all__ = ["AnalysisBank"]

_SAMPLES = OwnCheck(
    "an array (..., samples) that the bank's dtype can hold", ("text", TypeError), (3, ValueError)
)
_OUT = OwnCheck("None or an array that fits the result", ("text", TypeError))


class AnalysisBank(Bank):
    """Split a signal into the channels of a plan, in one call or as a stream.

    With absolute phase, channel k at f_k = (k + offset) / M cycles per sample gives

        y[n, k] = sum_i h[i] x[nD - i] exp(-2j pi f_k (nD - i)),

    which is the down-converter that mixes by the absolute sample index, filters with the
    prototype h and keeps every D-th sample: ``scipy.signal.upfirdn(h, x * lo, 1, D)``, with the
    same numbers and the same ceil((N + L - 1) / D) frames. x is zero before its first and after
    its last sample.

    Parameters
    ----------
    plan : ChannelPlan
        Channels M, hop D, offset, real or complex samples.
    prototype : Prototype
        For the same number of channels. Its taps are used as they are.
    dtype : {"complex64", "complex128"}, default "complex64"
        Of the frames, and the precision of the arithmetic.
    phase : {"absolute", "frame"}, default "absolute"
        "absolute" keeps every channel's phase on one clock that starts at sample 0: wanted to
        demodulate, to combine channels, to compare antennas or to synthesise. "frame" omits the
        mixer's rotation over frames, y[n, k] exp(+2j pi f_k nD): each frame's phases count from
        its own newest sample nD, as in a sliding DFT; wanted when frames are used one by one.
    select : sequence of int, optional
        The output channels to return, as indices into ``plan.frequencies``, in the order given;
        all by default.
    layout : {"frames", "channels"}, default "frames"
        Frames come as (..., frames, channels) or (..., channels, frames), contiguous.
    workers : int, default 1
        Threads. The bits do not depend on it.
    full_scale : float, optional
        The integer value that maps to 1.0: by default 32768 for int16 and 128 for int8 and uint8
        (whose zero level is 128).

    Attributes
    ----------
    delay : float
        Group delay of the prototype in samples.
    frequencies : numpy.ndarray
        Centres of the channels returned, in hertz.
    next_sample, next_frame : int
        Absolute indices of the next sample to come and of the next frame to leave.
    engine : str
        Which engine runs it: "numba" or "numpy".

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type or out of range; a prototype for another number of channels.

    Notes
    -----
    Samples are arrays whose last axis is time; leading axes are antennas or polarisations. A
    complex plan takes complex or real floats, or integers (int8, uint8, int16) interleaved I/Q
    along the last axis, 2 N long (an array of shape (N, 2) would be N antennas: ravel it first); a
    real plan takes real floats or integers. A real tone of
    amplitude A leaves its channel with A/2 (A at zero frequency and at half the sample rate).
    Samples of higher precision than the bank are refused, lower ones widened. Samples that are
    not finite pass through to the frames whose window (the prototype's length rounded up to whole
    branches) touches them.

    References
    ----------
    M. Bellanger, G. Bonnerot and M. Coudreuse, "Digital filtering by polyphase network", IEEE
    Trans. ASSP 24(2), 1976; R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal
    Processing, 1983, ch. 7.

    Examples
    --------
    >>> import numpy as np
    >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
    >>> plan = ChannelPlan(64e3, 16, 8)
    >>> bank = AnalysisBank(plan, boxcar_prototype(16), dtype="complex128")
    >>> tone = np.exp(2j * np.pi * 3 / 16 * np.arange(160))
    >>> frames = bank(tone)
    >>> frames.shape
    (22, 16)
    >>> abs(frames[10, [2, 3, 4]]).round(12)
    array([0., 1., 0.])
    """

    _kept = ("_parameters", "_lead", "_finished")

    @checked(
        plan=Instance(ChannelPlan),
        prototype=Instance(Prototype),
        dtype=OwnCheck("complex64 or complex128", ("float32", ValueError), (3, ValueError)),
        phase=Choice("absolute", "frame"),
        select=OwnCheck(
            "None or a non-empty sequence of distinct channel indices",
            ([], ValueError),
            ([1.5], TypeError),
            (3, TypeError),
            ([-1], ValueError),
            ([1 << 30], ValueError),
            ([0, 0], ValueError),
        ),
        layout=Choice("frames", "channels"),
        workers=Integer(1, 1024),
        full_scale=Optional(Real(above=0)),
    )
    def __init__(
        self,
        plan,
        prototype,
        *,
        dtype="complex64",
        phase="absolute",
        select=None,
        layout="frames",
        workers=1,
        full_scale=None,
    ):
        same_channels(plan, prototype)
        self._parameters = {
            "plan": plan,
            "prototype": prototype,
            "dtype": bank_dtype(dtype).name,
            "phase": phase,
            "select": _checked_select(select, plan.output_channels),
            "layout": layout,
            "workers": workers,
            "full_scale": full_scale,
        }
        self._build()
        self.reset()

    def _build(self):
        held = self._parameters
        plan = held["plan"]
        index = plan.dft_index
        columns = index if held["select"] is None else index[list(held["select"])]
        turn = (plan.exact_offset / plan.channels) % 1
        if held["select"] is None and not (plan.real and turn):
            columns = None
        self._spec = AnalysisSpec(
            taps=held["prototype"].taps,
            channels=plan.channels,
            hop=plan.hop,
            dtype=np.dtype(held["dtype"]),
            real=plan.real,
            rotate=held["phase"] == "absolute",
            turn=turn,
            columns=columns,
            channel_major=held["layout"] == "channels",
            workers=held["workers"],
        )
        self._engine = make_analysis_engine(self._spec)
        self._whole = None
        self._columns = self._spec.column_count
        self._door = SampleDoor(self._spec.dtype, plan.real, held["full_scale"])

    @property
    def select(self):
        """Indices of the channels returned, a tuple, or None for all."""
        return self._parameters["select"]

    @property
    def full_scale(self):
        """Integer value that maps to 1.0, or None for the type's own."""
        return self._parameters["full_scale"]

    @property
    def delay(self):
        return self.prototype.delay

    @property
    def frequencies(self):
        frequencies = self.plan.frequencies
        return frequencies if self.select is None else frequencies[list(self.select)]

    @property
    def next_sample(self):
        return self._engine.position

    @property
    def next_frame(self):
        return -(-self._engine.position // self.plan.hop)

    def __repr__(self):
        extras = [] if self.select is None else [f"select=<{len(self.select)} channels>"]
        if self.full_scale is not None:
            extras.append(f"full_scale={self.full_scale!r}")
        return self._described(("dtype", "phase", "layout", "workers"), extras)

    @checked(samples=_SAMPLES, out=_OUT, call=False)
    def __call__(self, samples, out=None):
        """Split a whole signal that starts at sample 0, the filter's ends included.

        Parameters
        ----------
        samples : array_like, shape (..., N) (interleaved integers: (..., 2 N))
            The signal; N may be 0.
        out : numpy.ndarray, optional
            Where the frames go: the exact shape, the bank's dtype, contiguous, writable.

        Returns
        -------
        numpy.ndarray
            (..., frames, channels) or (..., channels, frames), ceil((N + L - 1) / D) frames. A
            stream in progress on this bank is not touched.

        Raises
        ------
        TypeError, ValueError
            Samples the bank cannot take, or an `out` that does not fit.

        Examples
        --------
        See the class.
        """
        samples, count, lead, scaling = self._door.take(samples)
        total = count + self.prototype.length - 1
        shape = self._shape(lead, -(-total // self.plan.hop))
        out = checked_out(out, shape, self.dtype)
        if self._whole is None:
            self._whole = make_analysis_engine(self._spec)
        self._whole.reset(0, math.prod(lead))
        frames = -(-count // self.plan.hop)
        self._run(self._whole, samples, scaling, self._part(out, 0, frames))
        self._whole.push_zeros(total - count, flat_leading(self._part(out, frames, None), 2))
        return out

    @checked(samples=_SAMPLES, out=_OUT, call=False)
    def push(self, samples, out=None):
        """Take the next samples of a stream and return every frame that they complete.

        Nothing is held back: after m samples in all, the pushes have returned ceil(m / D) frames.
        Pieces of any sizes, then `finish`, give bit for bit what one call gives.

        Parameters
        ----------
        samples : array_like, shape (..., n) (interleaved integers: (..., 2 n))
            The next n samples, n >= 0; the leading axes are fixed by the first push.
        out : numpy.ndarray, optional
            Where the frames go; its frame axis must be ``frame_count(n)`` long.

        Returns
        -------
        numpy.ndarray
            (..., frames, channels) or (..., channels, frames); `out` when given.

        Raises
        ------
        TypeError, ValueError
            Samples the bank cannot take, leading axes that changed, or an `out` that does not fit.
        RuntimeError
            The stream is finished; `reset` starts a new one.

        Examples
        --------
        >>> import numpy as np
        >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
        >>> bank = AnalysisBank(ChannelPlan(8.0, 8, 4), boxcar_prototype(8))
        >>> [len(bank.push(np.ones(n, "float32"))) for n in (1, 3, 4)], len(bank.finish())
        ([1, 0, 1], 2)
        """
        # A push of a few thousand samples takes some microseconds, and feels every call in vain.
        if self._finished:
            self._refuse_finished()
        samples, count, lead, scaling = self._door.take(samples)
        if lead != self._lead:
            self._refuse_other_lead("samples", lead)
        out = checked_out(out, self._shape(lead, self._frames_for(count)), self._spec.dtype)
        if self._lead is None:
            self._accept_lead(lead)
        self._run(self._engine, samples, scaling, out)
        return out

    @checked(out=_OUT, call=False)
    def finish(self, out=None):
        """End the stream: the frames of the filter's tail, as if L - 1 zeros had come.

        Parameters
        ----------
        out : numpy.ndarray, optional
            Where the frames go; its frame axis must be ``frame_count(L - 1)`` long.

        Returns
        -------
        numpy.ndarray
            The last frames, as from `push`.

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
        frames = self._zeros(self.prototype.length - 1, out)
        self._finished = True
        return frames

    @checked(
        count=Integer(0),
        out=_OUT,
    )
    def skip(self, count, out=None):
        """Pass over lost samples, as if `count` zeros had come: time and phase are kept.

        Parameters
        ----------
        count : int
            Samples lost, 0 or more.
        out : numpy.ndarray, optional
            Where the frames go; its frame axis must be ``frame_count(count)`` long.

        Returns
        -------
        numpy.ndarray
            The frames of the gap, as from `push`: the filter's decay, then zeros.

        Raises
        ------
        RuntimeError
            The stream is finished.
        TypeError, ValueError
            A count that is not an integer of 0 or more, or an `out` that does not fit.

        Examples
        --------
        >>> import numpy as np
        >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
        >>> bank = AnalysisBank(ChannelPlan(8.0, 8, 4), boxcar_prototype(8))
        >>> bank.skip(10**3).shape, bank.next_sample, bank.next_frame
        ((250, 8), 1000, 250)
        """
        return self._zeros(count, out)

    @checked(first_sample=Integer(-(1 << 62), 1 << 62))
    def reset(self, first_sample=0):
        """Forget all samples; the next to come has the absolute index `first_sample`.

        The frames that follow are those n with nD >= first_sample, and x is zero before it. The
        leading axes may change.

        Parameters
        ----------
        first_sample : int, default 0

        Raises
        ------
        TypeError, ValueError
            Not an integer, or beyond 2**62 in magnitude.

        Examples
        --------
        >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
        >>> bank = AnalysisBank(ChannelPlan(8.0, 8, 4), boxcar_prototype(8))
        >>> bank.reset(10**12 + 1)
        >>> bank.next_frame, bank.frame_count(3), bank.frame_count(4)
        (250000000001, 0, 1)
        """
        self._lead = None
        self._finished = False
        self._engine.reset(first_sample, 1)

    @checked(samples=Integer(0))
    def frame_count(self, samples):
        """How many frames a push of that many samples will return.

        Parameters
        ----------
        samples : int
            0 or more.

        Returns
        -------
        int

        Raises
        ------
        TypeError, ValueError
            Not an integer of 0 or more.

        Examples
        --------
        See `reset`.
        """
        return self._frames_for(samples)

    @checked(first=Integer(-(1 << 62), 1 << 62), count=Integer(0))
    def frame_times(self, first, count):
        """The time that each frame describes: (nD - delay) / sample_rate.

        Parameters
        ----------
        first : int
            Absolute index n of the first frame (`next_frame` before a push is that push's first).
        count : int
            Number of frames.

        Returns
        -------
        numpy.ndarray
            float64 seconds after sample 0, each correctly rounded, shape (count,).

        Raises
        ------
        TypeError, ValueError
            Not integers, or a negative count.

        Examples
        --------
        >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
        >>> bank = AnalysisBank(ChannelPlan(8.0, 8, 4), boxcar_prototype(8))
        >>> bank.frame_times(2, 3)
        array([0.5625, 1.0625, 1.5625])
        """
        rate, hop = self.plan.exact_sample_rate, self.plan.hop
        # In rational arithmetic until one rounding; a step that is a whole number of units of
        # the common denominator lets integers do it.
        start, step = (first * hop - Fraction(self.delay)) / rate, hop / rate
        unit = math.lcm(start.denominator, step.denominator)
        low, stride = int(start * unit), int(step * unit)
        return np.array([(low + n * stride) / unit for n in range(count)], np.float64)

    def _frames_for(self, samples):
        hop, position = self._spec.hop, self._engine.position
        return -(-(position + samples) // hop) - -(-position // hop)

    def _zeros(self, count, out):
        self._refuse_finished()
        lead = self._lead or ()
        out = checked_out(out, self._shape(lead, self._frames_for(count)), self._spec.dtype)
        self._engine.push_zeros(count, flat_leading(out, 2))
        return out

    def _accept_lead(self, lead):
        self._lead = lead
        # Zeros skipped before the first samples leave no history behind.
        self._engine.reset(self._engine.position, math.prod(lead))

    def _shape(self, lead, frames):
        columns = self._columns
        if self._spec.channel_major:
            return (*lead, columns, frames)
        return (*lead, frames, columns)

    def _part(self, out, start, stop):
        return out[..., start:stop] if self._spec.channel_major else out[..., start:stop, :]

    def _run(self, engine, samples, scaling, out):
        if samples.ndim > 1:
            samples, out = flat_leading(samples, 1), flat_leading(out, 2)
        engine.push(samples, out, *scaling)


def _checked_select(select, count):
    accepted = f"None or a non-empty sequence of distinct channel indices from 0 to {count - 1}"
    if select is None:
        return None
    if isinstance(select, (str, bytes)) or not hasattr(select, "__iter__"):
        raise wrong_type("select", accepted, select)
    rule = Integer(0, count - 1)
    chosen = tuple(rule.check("each index in select", index) for index in select)
    if not chosen or len(set(chosen)) != len(chosen):
        raise wrong_value("select", accepted, select)
    return chosen
