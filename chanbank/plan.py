"""The channel plan: rates, hop and centre frequencies; no samples, no filters.

Channel k of M sits at f_k = (k + offset) / M cycles per sample above the recording's centre,
k = 0..M-1 in DFT order, wrapped into [-1/2, 1/2). Rates, spacings and offsets may be given as
floats, integers, Fractions or text such as "25000/3"; they are kept exactly.
"""

import math
from dataclasses import dataclass, field
from fractions import Fraction

import numpy as np

from chanbank._checks import (
    Boolean,
    Frequency,
    Integer,
    Optional,
    Rational,
    checked,
    wrong_value,
)

__all__ = ["ChannelPlan"]

_MOST_CHANNELS = 1 << 20

# A ratio this close to an integer is one: a rate or spacing that was rounded to a float (25000/3)
# misses by parts in 1e16, a raster that truly does not fit misses by far more.
_NEAR_INTEGER = Fraction(1, 10**9)


def _whole(ratio):
    """The integer that `ratio` is within 1e-9 of, or None."""
    nearest = round(ratio)
    return nearest if abs(ratio - nearest) <= _NEAR_INTEGER else None


def _decimal(value):
    """A Fraction for people: a plain number where that is exact, else the fraction and about."""
    if value == round(value):
        return str(round(value))
    number = float(value)
    if Fraction(repr(number)) == value:
        return repr(number)
    return f"{value} (about {number:.6f})"


@dataclass(frozen=True, init=False)
class ChannelPlan:
    """Where the channels sit and how fast they run.

    Channel k has its centre at ``center_frequency + sample_rate * f_k`` with
    f_k = (k + offset) / M wrapped into [-1/2, 1/2), and leaves the bank at
    ``sample_rate / hop`` samples per second.

    Parameters
    ----------
    sample_rate : number or text
        Samples per second of the recording, above 0 (complex samples when `real` is False).
    channels : int
        Number of channels M, 1 to 2**20; any integer, primes included.
    hop : int
        Samples D from one frame to the next, 1 to `channels`; need not divide `channels`.
    center_frequency : number or text, default 0.0
        Absolute frequency in hertz that zero frequency of the samples stands for.
    offset : number or text, default 0.0
        Shift of the whole grid in channels: 0 is even stacking, 1/2 odd stacking; any real number.
    real : bool, default False
        True for real samples: the plan then holds the channels whose centre lies in
        0..sample_rate/2 (0..M//2 at offset 0); the others carry nothing new.

    Attributes
    ----------
    spacing : float
        Channel spacing sample_rate / channels, in hertz.
    channel_rate : float
        Sample rate of each channel, sample_rate / hop, in hertz.
    oversampling : float
        channels / hop.
    frequencies : numpy.ndarray
        Centre of each output channel in hertz, absolute, in output order (read-only float64).
    dft_index : numpy.ndarray
        DFT index k of each output channel (read-only int64). It is 0, 1, 2 ... except for a real
        plan whose offset is outside 0..1.
    output_channels : int
        Number of channels that a bank on this plan returns.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type, not finite or out of range; ``hop > channels``.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7
    (even and odd stacking).

    Examples
    --------
    >>> from chanbank import ChannelPlan
    >>> plan = ChannelPlan(4.8e6, 192, 128, center_frequency=158e6)
    >>> plan.spacing, plan.channel_rate, plan.oversampling
    (25000.0, 37500.0, 1.5)
    >>> plan.index_of(157.8e6)
    184
    >>> float(plan.frequencies[184])
    157800000.0
    """

    sample_rate: float
    channels: int
    hop: int
    center_frequency: float = 0.0
    offset: float = 0.0
    real: bool = False
    _exact: tuple = field(init=False, repr=False, compare=False)

    @checked(
        sample_rate=Rational(above=0, unit="hertz"),
        channels=Integer(1, _MOST_CHANNELS),
        hop=Integer(1, _MOST_CHANNELS),
        center_frequency=Frequency(),
        offset=Rational(unit="channels"),
        real=Boolean(),
    )
    def __init__(self, sample_rate, channels, hop, *, center_frequency=0.0, offset=0.0, real=False):
        if hop > channels:
            raise ValueError(
                f"hop must satisfy 1 <= hop <= channels; got hop {hop} > channels {channels} "
                "(frames further apart than M samples lose part of the band)"
            )
        setter = object.__setattr__
        for name, value in (
            ("sample_rate", float(sample_rate)),
            ("channels", channels),
            ("hop", hop),
            ("center_frequency", float(center_frequency)),
            ("offset", float(offset)),
            ("real", real),
            ("_exact", (sample_rate, center_frequency, offset)),
        ):
            setter(self, name, value)

    @classmethod
    @checked(
        sample_rate=Rational(above=0, unit="hertz"),
        spacing=Rational(above=0, unit="hertz"),
        oversampling=Rational(above=0),
        center_frequency=Frequency(),
        align_to=Optional(Frequency()),
        real=Boolean(),
    )
    def from_spacing(
        cls, sample_rate, spacing, *, oversampling, center_frequency=0.0, align_to=None, real=False
    ):
        """The smallest plan on a raster: M = sample_rate / spacing, D = floor(M / oversampling).

        Parameters
        ----------
        sample_rate, spacing : number or text
            In hertz, above 0. Their ratio must be an integer to within 1e-9.
        oversampling : number or text
            Least ratio of channel rate to spacing, 1 or more. The hop is the largest that keeps it.
        center_frequency : number or text, default 0.0
            Absolute frequency in hertz of the recording's zero frequency.
        align_to : number or text, optional
            Any absolute frequency in hertz that must be a channel centre. By default the
            recording's centre is one.
        real : bool, default False
            True for real samples.

        Returns
        -------
        ChannelPlan

        Raises
        ------
        ValueError
            The raster does not fit the sample rate: the message names the nearest sample rates
            that fit and the rational ratio to resample by. Or the oversampling is below 1 or
            above the number of channels.

        Examples
        --------
        >>> from chanbank import ChannelPlan
        >>> plan = ChannelPlan.from_spacing(2.4e6, "25000/3", oversampling=1.5)
        >>> plan.channels, plan.hop
        (288, 192)
        >>> ChannelPlan.from_spacing(2.048e6, 25000, oversampling=2)
        Traceback (most recent call last):
        ...
        ValueError: spacing must divide sample_rate; got 2048000 / 25000 = 81.92 channels. The
        nearest sample rates that fit: 2025000 Hz (81 channels: resample by 2025/2048) or
        2050000 Hz (82 channels: resample by 1025/1024)
        """
        ratio = sample_rate / spacing
        channels = _whole(ratio)
        if channels is None or channels < 1:
            raise ValueError(_no_fit(sample_rate, spacing, ratio))
        if channels > _MOST_CHANNELS:
            raise ValueError(
                f"sample_rate / spacing must be at most {_MOST_CHANNELS} channels; "
                f"got {_decimal(sample_rate)} / {_decimal(spacing)} = {channels}"
            )
        if oversampling < 1 or oversampling > channels:
            raise wrong_value(
                "oversampling", f"from 1 to the number of channels, {channels}", float(oversampling)
            )
        most = channels / oversampling
        hop = _whole(most) or math.floor(most)
        offset = Fraction(0)
        if align_to is not None:
            # The grid's own spacing, so that a raster rounded to a float still tiles the band.
            steps = (align_to - center_frequency) / (sample_rate / channels)
            offset = Fraction(0) if _whole(steps) is not None else steps - math.floor(steps)
        return cls(
            sample_rate,
            channels,
            hop,
            center_frequency=center_frequency,
            offset=offset,
            real=real,
        )

    @property
    def exact_sample_rate(self):
        """`sample_rate` as the Fraction it was given as."""
        return self._exact[0]

    @property
    def exact_center_frequency(self):
        """`center_frequency` as the Fraction it was given as."""
        return self._exact[1]

    @property
    def exact_offset(self):
        """`offset` as the Fraction it was given as."""
        return self._exact[2]

    @property
    def spacing(self):
        return float(self.exact_sample_rate / self.channels)

    @property
    def channel_rate(self):
        return float(self.exact_sample_rate / self.hop)

    @property
    def oversampling(self):
        return self.channels / self.hop

    @property
    def output_channels(self):
        return len(self.dft_index) if self.real else self.channels

    @property
    def dft_index(self):
        if self.real:
            # (k + offset) mod M must lie in 0..M/2; with whole = floor(offset) these are
            # consecutive k, listed from the lowest frequency up.
            whole, part = self._offset_parts
            first = 0 if part >= 0 else 1
            last = math.floor(Fraction(self.channels, 2) - part)
            index = (np.arange(first, last + 1) - whole) % self.channels
        else:
            index = np.arange(self.channels)
        index.flags.writeable = False
        return index

    @property
    def normalised_frequencies(self):
        """Centre of each output channel, cycles per sample from the recording's centre."""
        steps = self._steps
        values = steps / self.channels
        values.flags.writeable = False
        return values

    @property
    def frequencies(self):
        values = self.center_frequency + self._steps * self.spacing
        values.flags.writeable = False
        return values

    @property
    def _offset_parts(self):
        whole = math.floor(self.exact_offset)
        return whole, self.exact_offset - whole

    @property
    def _steps(self):
        """Centres in channel spacings, wrapped into [-M/2, M/2), or 0..M/2 for a real plan."""
        whole, part = self._offset_parts
        steps = (self.dft_index + whole) % self.channels
        if not self.real:
            steps = np.where(
                steps >= math.ceil(Fraction(self.channels, 2) - part), steps - self.channels, steps
            )
        return steps + float(part)

    @checked(frequency=Frequency())
    def index_of(self, frequency):
        """The output channel whose centre is nearest to an absolute frequency.

        Parameters
        ----------
        frequency : number or text
            Absolute frequency in hertz, inside the band of the plan (half a spacing beyond the
            outermost centres counts as inside; the band of a complex plan wraps around).

        Returns
        -------
        int
            Index into `frequencies`, and the index that a bank's `select` takes. A frequency on
            the border of two channels belongs to the upper one.

        Raises
        ------
        TypeError, ValueError
            Not a finite number, or outside the band (the message gives the band).

        Examples
        --------
        >>> from chanbank import ChannelPlan
        >>> plan = ChannelPlan(96e3, 8, 6, center_frequency=1e6)
        >>> plan.index_of(1_012_500), plan.index_of(990_000)
        (1, 7)
        """
        distance = frequency - self.exact_center_frequency
        half = self.exact_sample_rate / 2
        low = Fraction(0) if self.real else -half
        if not low <= distance <= half:
            raise wrong_value(
                "frequency",
                f"within the recorded band, {float(low + self.exact_center_frequency):.12g} to "
                f"{float(half + self.exact_center_frequency):.12g} Hz"
                + (" (center_frequency of the plan is 0)" if not self.center_frequency else ""),
                float(frequency),
            )
        spacing = self.exact_sample_rate / self.channels
        step = math.floor(distance / spacing - self.exact_offset + Fraction(1, 2))
        if not self.real:
            return step % self.channels
        index = self.dft_index
        position = int((step - int(index[0])) % self.channels)
        if position >= len(index):
            # Within half a spacing of an edge whose nearest centre lies outside 0..sample_rate/2.
            position = 0 if distance < half / 2 else len(index) - 1
        return position


def _no_fit(sample_rate, spacing, ratio):
    below, above = math.floor(ratio), math.floor(ratio) + 1
    offers = []
    for channels in (below, above):
        if channels < 1:
            continue
        rate = channels * spacing
        exact = rate / sample_rate
        short = exact.limit_denominator(10**6)
        resample = f"{short.numerator}/{short.denominator}"
        about = "" if short == exact else f", to within {abs(float(short / exact - 1)):.1e}"
        offers.append(f"{_decimal(rate)} Hz ({channels} channels: resample by {resample}{about})")
    return (
        f"spacing must divide sample_rate; got {_decimal(sample_rate)} / {_decimal(spacing)} "
        f"= {float(ratio):.9g} channels. The nearest sample rates that fit: " + " or ".join(offers)
    )
