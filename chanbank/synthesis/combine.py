"""Neighbouring channels recombined into one wider channel at its own rate."""

import math
from fractions import Fraction

import numpy as np

from chanbank._checks import Choice, Instance, Integer, Optional, OwnCheck, checked, wrong_type
from chanbank.analysis.arrays import bank_dtype
from chanbank.plan import ChannelPlan
from chanbank.prototype.prototype import Prototype
from chanbank.synthesis._recombine import Recombination

__all__ = ["ChannelCombiner", "combine_channels"]

_FRAMES = OwnCheck(
    "an array (..., frames, channels) of the plan's channels, or of the K combined ones",
    ("text", TypeError),
    (3, TypeError),
    (np.ones(3), ValueError),
)
_DTYPE = OwnCheck("complex64 or complex128", ("float32", ValueError), (3, ValueError))


class ChannelCombiner:
    """Combine K neighbouring channels into one at K' spacings' sample rate, as a stream.

    With R = M / K' input samples to an output sample and g the synthesis prototype,

        z[m] = sum_n g(m R + Delta - n D) sum_k y[n, k] exp(+2j pi (f_k - f_c) m R),

    the sum over the K channels: the estimate, at input sample m R, of the input mixed down by
    f_c, the middle of the K channels. Every R-th tap of a dual pair is a dual pair for K'
    channels, so what reconstructs the whole band reconstructs this part of it. g is evaluated
    between its taps where R is not an integer, so that any K' will do.

    Parameters
    ----------
    plan : ChannelPlan
        The analysis bank's plan.
    prototype : Prototype
        The synthesis prototype g with its ``pair_delay``, as for a `SynthesisBank`.
    first : int
        Output channel of the plan that is the lowest in frequency of the K; the next ones follow
        in frequency (for a complex plan they wrap around at channel M - 1).
    count : int
        K, 1 to the number of channels.
    spacings : int, optional
        K', the output rate in channel spacings, K to M; by default the least that is free of
        aliases.
    dtype : {"complex64", "complex128"}, default "complex64"
        Of the samples and the arithmetic.
    phase : {"absolute", "frame"}, default "absolute"
        As the analysis bank's.
    layout : {"frames", "channels"}, default "frames"
        As the analysis bank's.

    Attributes
    ----------
    sample_rate : float
        Of the output, K' * spacing, in hertz.
    center_frequency : float
        Absolute frequency in hertz that the output's zero frequency stands for.
    ratio : Fraction
        R, input samples to an output sample.
    flat_band : (float, float) or None
        Absolute frequencies in hertz between which the result is the input (to the pair's error):
        K + 2 - 2 M/D spacings wide. None where no such band is left.
    alias_free : bool
        Whether K' >= K - 1 + 2 (M/D - 1/2): nothing folds into the output band, except at the
        level of the prototypes' stopbands. Otherwise aliases fall outside the flat band first.
    least_spacings : int
        The least K' that is free of aliases.

    Raises
    ------
    TypeError, ValueError
        Wrong types or ranges; a prototype for another number of channels or without a pair
        delay; more channels than the plan has from `first` on (real plans do not wrap); a K' so
        incommensurate with M / D that its table of weights would exceed 256 MB.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.3
    (weighted overlap-add); J. Wexler and S. Raz, "Discrete Gabor expansions", Signal Processing
    21, 207-220, 1990.

    Examples
    --------
    >>> from chanbank import ChannelCombiner, ChannelPlan, prototype_pair
    >>> plan = ChannelPlan(1.6e6, 64, 48, center_frequency=156.8e6)
    >>> h, g = prototype_pair(plan, 8)
    >>> wide = ChannelCombiner(plan, g, first=4, count=6, spacings=8)
    >>> wide.sample_rate, wide.center_frequency, wide.alias_free
    (200000.0, 156962500.0, True)
    >>> [round(edge) for edge in wide.flat_band]
    [156895833, 157029167]
    """

    @checked(
        plan=Instance(ChannelPlan),
        prototype=Instance(Prototype),
        first=Integer(0),
        count=Integer(1),
        spacings=Optional(Integer(1)),
        dtype=_DTYPE,
        phase=Choice("absolute", "frame"),
        layout=Choice("frames", "channels"),
    )
    def __init__(
        self,
        plan,
        prototype,
        first,
        count,
        *,
        spacings=None,
        dtype="complex64",
        phase="absolute",
        layout="frames",
    ):
        channels, hop = plan.channels, plan.hop
        _same_pair(plan, prototype)
        width = plan.output_channels
        if first >= width:
            raise ValueError(f"first must be below the plan's {width} channels; got {first}")
        if count > width or (plan.real and first + count > width):
            raise ValueError(
                "first + count must not exceed the plan's number of channels; got "
                f"{first} + {count} > {width}"
            )
        edge = Fraction(channels, hop) - Fraction(1, 2)
        self.least_spacings = min(channels, math.ceil(count - 1 + 2 * edge))
        spacings = self.least_spacings if spacings is None else spacings
        if not count <= spacings <= channels:
            raise ValueError(
                "spacings must satisfy count <= spacings <= channels; got "
                f"count {count}, spacings {spacings}, channels {channels}"
            )
        self.plan, self.prototype = plan, prototype
        self.first, self.count, self.spacings = first, count, spacings
        self.phase, self.layout = phase, layout
        self.dtype = bank_dtype(dtype)
        self.delay = prototype.pair_delay
        self.ratio = Fraction(channels, spacings)
        self.alias_free = spacings >= count - 1 + 2 * edge
        self._indices = (first + np.arange(count)) % width
        self._set_frequencies(float(edge))
        self._engine = Recombination(plan, prototype, self._indices, spacings, self.dtype)
        self.reset()

    def _set_frequencies(self, edge):
        plan = self.plan
        lowest = plan.frequencies[self._indices[0]]
        self.sample_rate = plan.spacing * self.spacings
        self.center_frequency = float(lowest + plan.spacing * (self.count - 1) / 2)
        low, high = edge - 1, self.count - edge
        self.flat_band = None
        if low < high:
            self.flat_band = tuple(float(lowest + plan.spacing * step) for step in (low, high))

    def __repr__(self):
        names = ("first", "count", "spacings", "phase", "layout")
        shown = ", ".join(f"{name}={getattr(self, name)!r}" for name in names)
        return f"ChannelCombiner({self.plan!r}, {self.prototype!r}, {shown}, dtype={self.dtype})"

    def reset(self):
        """Forget the stream; the next frame is frame 0.

        Examples
        --------
        See the class.
        """
        self._frame = 0
        self._sample = 0
        self._held = None

    @checked(frames=_FRAMES, length=Optional(Integer(0)))
    def __call__(self, frames, length=None):
        """Combine a whole signal from its first frame to its last.

        Parameters
        ----------
        frames : array_like, shape (..., frames, channels), or (..., channels, frames)
            All frames of an analysis bank, frame 0 first: all the plan's channels, or only the K
            in order of frequency.
        length : int, optional
            Number of samples N of the analysis bank's input: ceil(N / R) samples come back, else
            all that any frame reaches.

        Returns
        -------
        numpy.ndarray
            Samples (..., m), sample m standing for input sample m R. A stream in progress is not
            touched.

        Raises
        ------
        TypeError, ValueError
            Frames of the wrong shape or of higher precision than the combiner.

        Examples
        --------
        See `combine_channels`.
        """
        one = object.__new__(type(self))
        one.__dict__.update(self.__dict__)
        one.reset()
        parts = [one.push(frames), one.finish()]
        out = np.concatenate(parts, axis=-1)
        if length is None:
            return out
        wanted = math.ceil(length / self.ratio)
        if wanted > out.shape[-1]:
            raise ValueError(
                f"length must be at most {math.floor(out.shape[-1] * self.ratio)}, what the frames "
                f"reach; got {length}. Were the analysis bank's last frames left out?"
            )
        return np.ascontiguousarray(out[..., :wanted])

    @checked(frames=_FRAMES, call=False)
    def push(self, frames):
        """Take the next frames and return the output samples that they complete.

        Frames in pieces of any sizes, then `finish`, give bit for bit what one call gives.

        Parameters
        ----------
        frames : array_like, shape (..., n, channels), or (..., channels, n)
            The next n frames, n >= 0.

        Returns
        -------
        numpy.ndarray
            Samples (..., m), m >= 0.

        Raises
        ------
        TypeError, ValueError
            Frames of the wrong shape or of higher precision than the combiner.

        Examples
        --------
        See the class.
        """
        frames = self._picked(frames)
        first = self._frame if self.phase == "frame" else None
        turned = self._engine.turned(frames, first)
        back = self._engine.reach - 1
        if self._held is None:
            # Before frame 0 there was silence.
            shape = (*turned.shape[:-3], back, *turned.shape[-2:])
            held = np.zeros(shape, turned.dtype)
        elif self._held.shape[:-3] != turned.shape[:-3]:
            raise ValueError(
                "frames must keep their leading axes within a stream; got "
                f"{turned.shape[:-3]} after {self._held.shape[:-3]}"
            )
        else:
            held = self._held
        known = np.concatenate([held, turned], axis=-3)
        end = self._frame + frames.shape[-2]
        # Samples whose newest frame is before `end`.
        most = end * self.plan.hop - self.delay
        last = max(self._sample, -((-most * self.spacings) // self.plan.channels))
        out = self._engine.weighted(known, self._frame - back, self._sample, last)
        self._held = known[..., known.shape[-3] - back :, :, :].copy()
        self._frame, self._sample = end, last
        return out

    def finish(self):
        """End the stream: the samples that the last frames still reach. Resets the combiner.

        Returns
        -------
        numpy.ndarray
            Samples (..., m).

        Examples
        --------
        See the class.
        """
        if self._held is None:
            self.reset()
            return np.zeros(0, self.dtype)
        end = (self._frame - 1) * self.plan.hop + self.prototype.length - self.delay
        last = max(self._sample, -((-end * self.spacings) // self.plan.channels))
        more = int(self._engine.newest(max(last - 1, 0))) + 1 - self._frame
        silence = np.zeros((*self._held.shape[:-3], max(0, more), *self._held.shape[-2:]))
        known = np.concatenate([self._held, silence.astype(self._held.dtype)], axis=-3)
        begin = self._frame - (self._engine.reach - 1)
        out = self._engine.weighted(known, begin, self._sample, last)
        self.reset()
        return out

    def _picked(self, frames):
        frames = np.asarray(frames)
        if frames.dtype.kind not in "cfiu":
            raise wrong_type("frames", _FRAMES.accepted, frames)
        if frames.ndim == 0:
            raise wrong_type("frames", _FRAMES.accepted, frames)
        if frames.ndim < 2:
            raise ValueError(f"frames must be {_FRAMES.accepted}; got shape {frames.shape}")
        if np.result_type(frames.dtype, self.dtype) != self.dtype:
            raise TypeError(
                f"frames of dtype {frames.dtype} need a combiner of dtype complex128; this one "
                f"computes in {self.dtype}"
            )
        if self.layout == "channels":
            frames = np.swapaxes(frames, -1, -2)
        width = frames.shape[-1]
        if width == self.plan.output_channels:
            frames = frames[..., self._indices]
        elif width != self.count:
            raise ValueError(
                f"frames must hold all {self.plan.output_channels} channels of the plan or the "
                f"{self.count} combined ones; got {width}"
            )
        return frames.astype(self.dtype)


def _same_pair(plan, prototype):
    if plan.channels != prototype.channels:
        raise ValueError(
            "plan and prototype must have the same number of channels; got a plan of "
            f"{plan.channels} and a prototype for {prototype.channels}"
        )
    if prototype.pair_delay is None:
        raise ValueError(
            "prototype must be a synthesis prototype with a pair_delay, as dual_prototype and "
            "prototype_pair return them; this one carries none"
        )


@checked(
    frames=_FRAMES,
    plan=Instance(ChannelPlan),
    prototype=Instance(Prototype),
    first=Integer(0),
    count=Integer(1),
    spacings=Optional(Integer(1)),
    length=Optional(Integer(0)),
    dtype=_DTYPE,
    phase=Choice("absolute", "frame"),
    layout=Choice("frames", "channels"),
)
def combine_channels(
    frames,
    plan,
    prototype,
    first,
    count,
    *,
    spacings=None,
    length=None,
    dtype="complex64",
    phase="absolute",
    layout="frames",
):
    """K neighbouring channels of a finished analysis combined into one wider channel.

    z[m] = sum_n g(m R + Delta - n D) sum_k y[n, k] exp(+2j pi (f_k - f_c) m R), R = M / K'; the
    one-shot form of `ChannelCombiner`, which also reports the flat band and the alias-free
    condition.

    Parameters
    ----------
    frames : array_like, shape (..., frames, channels), or (..., channels, frames)
        All frames of an analysis bank, frame 0 first.
    plan, prototype, first, count, spacings, dtype, phase, layout
        As for `ChannelCombiner`.
    length : int, optional
        Number of samples N of the analysis bank's input: ceil(N / R) samples come back.

    Returns
    -------
    numpy.ndarray
        Samples (..., m) at `spacings` channel spacings' rate, sample m standing for input sample
        m R, mixed down by the middle of the K channels.

    Raises
    ------
    TypeError, ValueError
        As `ChannelCombiner` and its call.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.3.

    Examples
    --------
    A tone inside the flat band keeps its amplitude and its phase:

    >>> import numpy as np
    >>> from chanbank import AnalysisBank, ChannelPlan, combine_channels, prototype_pair
    >>> plan = ChannelPlan(64.0, 64, 48)
    >>> h, g = prototype_pair(plan, 8)
    >>> tone = np.exp(2j * np.pi * 6.9 * np.arange(6400) / 64)
    >>> frames = AnalysisBank(plan, h, dtype="complex128")(tone)
    >>> wide = combine_channels(
    ...     frames, plan, g, 4, 6, spacings=8, length=6400, dtype="complex128"
    ... )
    >>> same = np.exp(2j * np.pi * (6.9 - 6.5) * np.arange(800) / 8)
    >>> wide.shape, bool(abs(wide - same)[100:700].max() < 0.002)
    ((800,), True)
    """
    combiner = ChannelCombiner(
        plan, prototype, first, count, spacings=spacings, dtype=dtype, phase=phase, layout=layout
    )
    return combiner(frames, length=length)
