"""What a receiver asks of its bank."""

import math
import numbers
from fractions import Fraction

from chanbank._checks import (
    Boolean,
    Frequency,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    Rational,
    Real,
    checked,
    exact_number,
    wrong_type,
    wrong_value,
)
from chanbank.metrics.limits import Limits
from chanbank.plan import ChannelPlan

__all__ = ["Specification"]

_SPACING = (
    "a spacing in hertz above 0 (a float, an integer, a Fraction or text such as "
    '"25000/3"), or a pair (lowest, highest) of them'
)

# Ratios M/D worth a try, over the least one that is allowed.
_RATIOS = [Fraction(a, b) for a, b in ((1, 1), (8, 7), (5, 4), (4, 3), (3, 2), (2, 1))]

# Nearer to one, a pair that reconstructs filters poorly at any length worth having.
_PAIR_RATIOS = _RATIOS[3:]

_MOST_COUNTS = 4


class Specification:
    """A receiver's specification: rates, raster, and the limits that a bank must keep.

    Parameters
    ----------
    sample_rate : number or text
        Of the wideband recording, hertz.
    spacing : number, text, or pair
        Channel spacing in hertz. One spacing is a raster: M = sample_rate / spacing must be an
        integer. A pair (lowest, highest) leaves the number of channels to the search.
    occupied_bandwidth : float, optional
        Two-sided, hertz, of the signal in a channel. Default 0.8 of the spacing.
    neighbour_rejection : float, optional
        dB by which a signal one or two channels away must be weaker in this channel's output
        than in its own (adjacent and alternate leakage ratio).
    passband_ripple : float, optional
        dB, over the occupied bandwidth; default 0.5. None sets no limit.
    alias_level : float, optional
        dB, negative: largest sum of aliases over the wanted signal, anywhere in its band.
    total_leakage : float, optional
        dB, negative: power from all other channels, occupied alike, over the wanted one's.
    reconstruction_error : float, optional
        dB, negative: asks for a synthesis bank with at most this error.
    latency : float, optional
        Seconds, of the analysis bank, or of both banks with a reconstruction error.
    multiplications : float, optional
        Real multiplications per input sample.
    memory : float, optional
        Bytes of state.
    oversampling : number, default 1
        Least channel rate in channel spacings, 1 or more.
    center_frequency, align_to : number or text, optional
        As in `ChannelPlan.from_spacing`.
    real : bool, default False
        Real samples.
    limits : Limits, optional
        Limits on further figures of the report.

    Attributes
    ----------
    limits : Limits
        All limits by the names of the report's figures.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type, not finite or out of range; a raster that does not fit the
        sample rate; a figure limited twice; nothing to limit; an occupied bandwidth above the
        spacing.

    Examples
    --------
    >>> from chanbank.search.specification import Specification
    >>> spec = Specification(4.8e6, 25e3, occupied_bandwidth=16e3, neighbour_rejection=70)
    >>> spec
    Specification(4800000 Hz, 25000 Hz, occupied 16000 Hz, adjacent_leakage_ratio=70.0,
                  alternate_leakage_ratio=70.0, passband_ripple=0.5)
    """

    @checked(
        sample_rate=Rational(above=0, unit="hertz"),
        spacing=OwnCheck(_SPACING, (None, TypeError), (0, ValueError), (float("nan"), ValueError)),
        occupied_bandwidth=Optional(Real(above=0, unit="hertz")),
        neighbour_rejection=Optional(Real(above=0, high=200, unit="dB")),
        passband_ripple=Optional(Real(above=0, unit="dB")),
        alias_level=Optional(Real(-200, below=0, unit="dB")),
        total_leakage=Optional(Real(-200, below=0, unit="dB")),
        reconstruction_error=Optional(Real(-300, below=0, unit="dB")),
        latency=Optional(Real(above=0, unit="seconds")),
        multiplications=Optional(Real(above=0)),
        memory=Optional(Real(above=0, unit="bytes")),
        oversampling=Rational(above=0),
        center_frequency=Frequency(),
        align_to=Optional(Frequency()),
        real=Boolean(),
        limits=Optional(Instance(Limits)),
    )
    def __init__(
        self,
        sample_rate,
        spacing,
        *,
        occupied_bandwidth=None,
        neighbour_rejection=None,
        passband_ripple=0.5,
        alias_level=None,
        total_leakage=None,
        reconstruction_error=None,
        latency=None,
        multiplications=None,
        memory=None,
        oversampling=1,
        center_frequency=0.0,
        align_to=None,
        real=False,
        limits=None,
    ):
        low, high = _spacings(spacing)
        if oversampling < 1:
            raise wrong_value("oversampling", "1 or more", float(oversampling))
        self.sample_rate, self.oversampling = sample_rate, oversampling
        self.center_frequency, self.align_to, self.real = center_frequency, align_to, real
        self.spacing = (low, high)
        if occupied_bandwidth is not None and occupied_bandwidth > float(low) * (1 + 1e-12):
            raise ValueError(
                "occupied_bandwidth must satisfy occupied_bandwidth <= spacing; got "
                f"{occupied_bandwidth:g} > {float(low):g}"
            )
        self.occupied_bandwidth = occupied_bandwidth
        given = {
            "adjacent_leakage_ratio": neighbour_rejection,
            "alternate_leakage_ratio": neighbour_rejection,
            "passband_ripple": passband_ripple,
            "alias_worst": alias_level,
            "total_leakage": total_leakage,
            "reconstruction_error": reconstruction_error,
            "latency_seconds": latency,
            "multiplications": multiplications,
            "state": memory,
        }
        bounds = {name: limit for name, limit in given.items() if limit is not None}
        for name, pair in (limits.bounds if limits else {}).items():
            if name in bounds and not (name == "passband_ripple" and passband_ripple == 0.5):
                raise ValueError(
                    f"{name} must be limited once; got {bounds[name]} and {pair} in limits"
                )
            bounds[name] = pair
        self.limits = Limits(**bounds)
        self.pair = any(name in _PAIR_FIGURES for name in bounds)
        self.channel_counts = self._counts()

    def _counts(self):
        low, high = self.spacing
        if low == high:
            return [self._plan(low).channels]
        fewest = math.ceil(self.sample_rate / high)
        most = min(math.floor(self.sample_rate / low), 1 << 20)
        if fewest > most:
            raise ValueError(
                "spacing must leave a whole number of channels; got "
                f"{float(self.sample_rate / high):g} to {float(self.sample_rate / low):g}"
            )
        # The smoothest numbers: they have the cheapest DFTs and the most hops that divide them.
        ranked = sorted(range(fewest, most + 1), key=_roughness)[:_MOST_COUNTS]
        return sorted(ranked)

    def _plan(self, spacing):
        return ChannelPlan.from_spacing(
            self.sample_rate,
            spacing,
            oversampling=1,
            center_frequency=self.center_frequency,
            align_to=self.align_to,
            real=self.real,
        )

    @checked(channels=Integer(1, 1 << 20))
    def plans(self, channels):
        """The plans of this many channels that keep the rates, the slowest channel rate first.

        Parameters
        ----------
        channels : int
            One of ``channel_counts``.

        Returns
        -------
        list of ChannelPlan

        Raises
        ------
        TypeError, ValueError
            Not an integer from 1 to 2**20.

        Examples
        --------
        See `find_designs`.
        """
        base = self._plan(self.sample_rate / channels)
        least = self.oversampling
        hops = set()
        known = _PAIR_RATIOS if self.pair else _RATIOS
        ratios = known if least == 1 else [least, *(r for r in known if r > least), 2 * least]
        for ratio in ratios:
            hop = Fraction(channels) / ratio
            if hop < 1:
                continue
            step = 1 if hop.denominator == 1 else _grain(channels)
            hops.add(max(1, math.floor(hop / step) * step))
        if self.pair:
            hops.discard(channels)
        return [
            ChannelPlan(
                self.sample_rate,
                channels,
                hop,
                center_frequency=self.center_frequency,
                offset=base.exact_offset,
                real=self.real,
            )
            for hop in sorted(hops, reverse=True)
        ]

    @checked(plan=Instance(ChannelPlan))
    def bandwidth(self, plan):
        """The occupied bandwidth on a plan: the one given, or 0.8 of the spacing.

        Parameters
        ----------
        plan : ChannelPlan

        Returns
        -------
        float
            Two-sided, in hertz.

        Raises
        ------
        TypeError
            Not a plan.

        Examples
        --------
        See `find_designs`.
        """
        return 0.8 * plan.spacing if self.occupied_bandwidth is None else self.occupied_bandwidth

    def __repr__(self):
        low, high = (f"{float(edge):.12g}" for edge in self.spacing)
        spacing = low if low == high else f"{low} to {high}"
        occupied = (
            "0.8 of the spacing"
            if self.occupied_bandwidth is None
            else f"{self.occupied_bandwidth:.12g} Hz"
        )
        inner = repr(self.limits)[len("Limits(") : -1]
        rate = f"{float(self.sample_rate):.12g}"
        return f"Specification({rate} Hz, {spacing} Hz, occupied {occupied}, {inner})"


_PAIR_FIGURES = {
    "distortion_ripple",
    "distortion_delay_spread",
    "alias_transfer_peak",
    "alias_transfer_sum",
    "reconstruction_error",
    "reconstruction_error_peak",
    "impulse_spread",
    "synthesis_stopband",
    "noise_gain",
}


def _spacings(spacing):
    pair = spacing if isinstance(spacing, (tuple, list)) else (spacing, spacing)
    if len(pair) != 2:
        raise wrong_value("spacing", _SPACING, spacing)
    numbers_ = []
    for value in pair:
        if isinstance(value, bool) or not isinstance(value, (numbers.Real, str)):
            raise wrong_type("spacing", _SPACING, spacing)
        number = exact_number(value)
        if number is None or number <= 0:
            raise wrong_value("spacing", _SPACING, spacing)
        numbers_.append(number)
    low, high = numbers_
    if low > high:
        raise wrong_value("spacing", "a pair with lowest <= highest", spacing)
    return low, high


def _roughness(count):
    """(largest prime factor, how far from a power of two, count)."""
    rest, largest, factor = count, 1, 2
    while factor * factor <= rest:
        while rest % factor == 0:
            largest, rest = max(largest, factor), rest // factor
        factor += 1
    largest = max(largest, rest)
    return largest, count


def _grain(channels):
    """The largest divisor of M not above M/16: hops that are multiples of it share rotations."""
    return max((d for d in range(1, max(1, channels // 16) + 1) if channels % d == 0), default=1)
