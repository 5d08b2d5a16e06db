"""What a report holds: the definition of every figure, and one figure's values."""

from dataclasses import dataclass, field

import numpy as np

__all__ = ["DEFINITIONS", "NULL_DB", "RISE", "Definition", "Figure"]

# A minimum of a response is one where the power rises again by more than rounding: 0.02 dB.
RISE = 1.005

# A transfer with a dip deeper than this has a null, and no group delay there.
NULL_DB = 60.0


@dataclass(frozen=True)
class Definition:
    """One line of a report.

    Attributes
    ----------
    name : str
        Under which a report holds it.
    title : str
        For tables and pictures.
    unit : str
        "dB", "spacings", "samples", "s", "bytes", "per sample" or "" (a plain ratio).
    better : str
        "lower", "higher" or "" (neither).
    scope : str
        "channel" (one value a channel), "bank" (one value) or "cost" (one value, counted).
    text : str
        The definition.
    """

    name: str
    title: str
    unit: str
    better: str
    scope: str
    text: str


def _sides(name, title, unit, better, text):
    return [
        Definition(name + "_lower", title + ", lower", unit, better, "channel", text + " below"),
        Definition(name + "_upper", title + ", upper", unit, better, "channel", text + " above"),
        Definition(name, title, unit, better, "channel", text + " away, the worse of both sides"),
    ]


_RATIO = (
    "power of a flat signal of the occupied bandwidth in the wanted channel over its power in this "
    "output when it sits "
)
_TONE = "largest abs(H)^2 over the occupied band of the channel {} over abs(H(0))^2,"

_ALL = [
    Definition(
        "passband_ripple", "passband ripple", "dB", "lower", "channel",
        "largest less smallest abs(H)^2 over the occupied band",
    ),
    Definition(
        "scalloping_loss", "scalloping loss", "dB", "lower", "channel",
        "abs(H(0))^2 over abs(H)^2 half a spacing off the centre",
    ),
    Definition(
        "enbw", "equivalent noise bandwidth", "spacings", "", "channel",
        "M sum(h^2) / sum(h)^2",
    ),
    Definition(
        "bandwidth_3db", "-3 dB bandwidth", "spacings", "", "channel",
        "full width where abs(H)^2 first falls to half of abs(H(0))^2",
    ),
    Definition(
        "bandwidth_6db", "-6 dB bandwidth", "spacings", "", "channel",
        "full width where abs(H) first falls to half of abs(H(0))",
    ),
    Definition(
        "highest_sidelobe", "highest sidelobe", "dB", "lower", "channel",
        "largest abs(H)^2 beyond the first minimum (0.02 dB deep or more) outside the -6 dB point, "
        "over abs(H(0))^2",
    ),
    Definition(
        "stopband_level", "stopband level", "dB", "lower", "channel",
        "largest abs(H)^2 beyond the stated stopband edge, over abs(H(0))^2",
    ),
    Definition(
        "delay_spread", "passband delay spread", "samples", "lower", "channel",
        "largest less smallest group delay of H over the occupied band",
    ),
    *_sides(
        "adjacent_leakage_ratio", "adjacent leakage ratio", "dB", "higher",
        _RATIO + "one channel",
    ),
    *_sides(
        "alternate_leakage_ratio", "alternate leakage ratio", "dB", "higher",
        _RATIO + "two channels",
    ),
    *_sides("adjacent_tone", "worst tone, adjacent", "dB", "lower", _TONE.format("one")),
    *_sides("alternate_tone", "worst tone, alternate", "dB", "lower", _TONE.format("two")),
    Definition(
        "total_leakage", "total leakage", "dB", "lower", "channel",
        "power from all other channels, occupied alike, over the wanted channel's own",
    ),
    Definition(
        "alias_worst", "alias, worst", "dB", "lower", "channel",
        "largest over the occupied band of sum over r != 0 of abs(H(phi + r/D))^2 over "
        "abs(H(phi))^2",
    ),
    Definition(
        "alias_mean", "alias, mean", "dB", "lower", "channel",
        "mean over the occupied band of sum over r != 0 of abs(H(phi + r/D))^2 over the mean of "
        "abs(H(phi))^2",
    ),
    Definition(
        "image_rejection", "image rejection", "dB", "higher", "channel",
        "real input: power of the occupied band over that of its own mirror image",
    ),
    Definition(
        "distortion_ripple", "distortion, amplitude ripple", "dB", "lower", "bank",
        "largest less smallest abs(T_0)^2 over frequency",
    ),
    Definition(
        "distortion_delay_spread", "distortion, delay spread", "samples", "lower", "bank",
        "largest less smallest group delay of T_0 over frequency",
    ),
    Definition(
        "alias_transfer_peak", "alias transfer, largest", "dB", "lower", "bank",
        "largest abs(T_l)^2 over frequency and over l != 0",
    ),
    Definition(
        "alias_transfer_sum", "alias transfers, sum", "dB", "lower", "bank",
        "largest over frequency of the sum over l != 0 of abs(T_l)^2",
    ),
    Definition(
        "reconstruction_error", "reconstruction error", "dB", "lower", "bank",
        "error power over signal power for white input",
    ),
    Definition(
        "reconstruction_error_peak", "reconstruction error, worst tone", "dB", "lower", "bank",
        "largest error power over signal power for a tone, over frequency",
    ),
    Definition(
        "impulse_spread", "spread of the impulse responses", "dB", "lower", "bank",
        "mean squared distance of the D impulse responses from their mean, over its energy",
    ),
    Definition(
        "synthesis_stopband", "synthesis stopband level", "dB", "lower", "bank",
        "largest abs(G)^2 beyond the stated stopband edge, over abs(G(0))^2",
    ),
    Definition(
        "noise_gain", "noise gain", "dB", "lower", "bank",
        "20 log10(M/D norm(g) norm(h)): noise added to the channels, against a tight pair",
    ),
    Definition(
        "frame_lower", "frame bound A", "", "", "bank",
        "least energy of all frames over energy of the signal",
    ),
    Definition(
        "frame_upper", "frame bound B", "", "", "bank",
        "greatest energy of all frames over energy of the signal",
    ),
    Definition("frame_ratio", "frame bounds B/A", "", "lower", "bank", "B over A; 1 is tight"),
    Definition(
        "multiplications", "real multiplications", "per sample", "lower", "cost",
        "of the bank (both banks with a synthesis prototype), per input sample",
    ),
    Definition(
        "additions", "real additions", "per sample", "lower", "cost",
        "of the bank (both banks with a synthesis prototype), per input sample",
    ),
    Definition(
        "converter_multiplications", "multiplications, M converters", "per sample", "", "cost",
        "of one down-converter per channel with the same prototype, per input sample",
    ),
    Definition(
        "converter_additions", "additions, M converters", "per sample", "", "cost",
        "of one down-converter per channel with the same prototype, per input sample",
    ),
    Definition(
        "latency", "latency", "samples", "lower", "cost",
        "group delay of the prototype, or the pair's delay with a synthesis prototype",
    ),
    Definition(
        "latency_seconds", "latency", "s", "lower", "cost", "latency over the sample rate"
    ),
    Definition(
        "state", "state", "bytes", "lower", "cost",
        "history of L - 1 samples and the taps, likewise for the synthesis bank",
    ),
]  # fmt: skip

DEFINITIONS = {definition.name: definition for definition in _ALL}


@dataclass(frozen=True)
class Figure:
    """The values of one definition.

    Attributes
    ----------
    definition : Definition
        What it is.
    values : numpy.ndarray
        float64, read-only, shape (channels,) for a figure of the channels, () for one of the bank;
        NaN where absent, an infinity where a power is exactly zero.
    reasons : dict
        Why values are absent: channel position (or None, for all of them) to text.
    uncertainty : float or None
        For a measured figure, its standard uncertainty in its own unit.
    """

    definition: Definition
    values: np.ndarray
    reasons: dict = field(default_factory=dict)
    uncertainty: float | None = None

    def __post_init__(self):
        values = np.array(self.values, np.float64)
        values.flags.writeable = False
        object.__setattr__(self, "values", values)

    @property
    def absent(self):
        """True for each value that has no meaning."""
        return np.isnan(self.values)

    @property
    def present(self):
        """Whether any value is there."""
        return not self.absent.all()

    @property
    def public(self):
        """The value as a float (None when absent), or the values as a masked array."""
        if self.values.ndim:
            return np.ma.masked_invalid(self.values) if self.absent.any() else self.values
        return None if self.absent else float(self.values)

    def reason(self, position=None):
        """Why the value at this position is absent; None when it is there."""
        if position is not None and self.values.ndim and not self.absent[position]:
            return None
        if position is None and self.present:
            return None
        return self.reasons.get(position, self.reasons.get(None))

    def _ranked(self, worst):
        values = np.atleast_1d(self.values)
        if not self.present:
            return None, None
        highest = (self.definition.better == "lower") == worst
        at = int(np.nanargmax(values) if highest else np.nanargmin(values))
        return float(values[at]), at

    @property
    def worst(self):
        """The worst value of all channels (the largest, where neither side is better), or None."""
        return self._ranked(True)[0]

    @property
    def worst_position(self):
        """Position of the worst value, or None."""
        return self._ranked(True)[1]

    @property
    def best(self):
        """The best value of all channels, or None."""
        return self._ranked(False)[0]
