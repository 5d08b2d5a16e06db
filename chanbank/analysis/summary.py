"""What a split wrote, channel by channel."""

import math
from dataclasses import dataclass, fields

from chanbank.analysis.activity import Activity

__all__ = ["ChannelRecording", "SplitResult", "json_number"]


def json_number(value):
    """The value, or None for a float that JSON has no number for (-inf dB of exact silence)."""
    return None if isinstance(value, float) and not math.isfinite(value) else value


@dataclass(frozen=True)
class ChannelRecording:
    """One channel as `split_recording` wrote it.

    Attributes
    ----------
    index : int
        Channel index, as ``plan.frequencies`` counts.
    frequency : float
        Centre in hertz, in the first segment.
    path : str
        The recording's metadata file; `open_recording` takes it.
    samples : int
        Samples (frames of the bank) in each stream.
    scale : float or None
        For "ci16_le": what full scale in the file (2^15) stands for.
    clipped, zeroed : int
        Components clipped, and samples that were not finite and became 0, in a "ci16_le" file.
    mean_power_db, peak_power_db, density_db, nonfinite_frames
        This channel's figures of the `Activity`.
    duty : float
        Share of time above the threshold (`Activity.duty`).

    Examples
    --------
    See `split_recording`.
    """

    index: int
    frequency: float
    path: str
    samples: int
    scale: float | None
    clipped: int
    zeroed: int
    mean_power_db: float
    peak_power_db: float
    density_db: float
    duty: float
    nonfinite_frames: int


@dataclass(frozen=True, eq=False)
class SplitResult:
    """What `split_recording` wrote, and how busy the channels are; prints as a table.

    Attributes
    ----------
    channels : tuple of ChannelRecording
        One for each channel written, in the order asked for.
    activity : Activity
        Of all channels of the bank, written or not: the noise shows in the quiet ones.
    threshold_db : float
        Above the noise: what counts for duty, and for "active".
    prototype : str or None
        File with the prototype, for `Prototype.load`; None where nothing was written.

    Examples
    --------
    See `split_recording`.
    """

    channels: tuple
    activity: Activity
    threshold_db: float
    prototype: str | None

    def __len__(self):
        return len(self.channels)

    def __iter__(self):
        return iter(self.channels)

    def to_dict(self):
        """The summary as plain lists and numbers that JSON can hold; -inf dB becomes None.

        Returns
        -------
        dict

        Examples
        --------
        See `split_recording`.
        """
        return {
            "noise_power_db": json_number(self.activity.noise_power_db),
            "noise_density_db": json_number(self.activity.noise_density_db),
            "threshold_db": self.threshold_db,
            "nonfinite_samples": self.activity.nonfinite_samples,
            "prototype": self.prototype,
            "channels": [
                {field.name: json_number(getattr(channel, field.name)) for field in fields(channel)}
                for channel in self.channels
            ],
        }

    def __str__(self):
        lines = [
            f"{'channel':>7}  {'frequency':>14}  {'mean':>7}  {'peak':>7}  {'density':>8}  "
            f"{'duty':>6}  {'not finite':>10}",
            f"{'':>7}  {'Hz':>14}  {'dBFS':>7}  {'dBFS':>7}  {'dBFS/Hz':>8}  {'%':>6}  "
            f"{'frames':>10}",
        ]
        lines += [
            f"{c.index:7d}  {c.frequency:14.1f}  {c.mean_power_db:7.1f}  {c.peak_power_db:7.1f}  "
            f"{c.density_db:8.1f}  {100 * c.duty:6.1f}  {c.nonfinite_frames:10d}"
            for c in self.channels
        ]
        lines.append(
            f"noise {self.activity.noise_power_db:.1f} dBFS in a channel; duty counts blocks with "
            f"a burst {self.threshold_db:g} dB above it"
        )
        if self.activity.nonfinite_samples:
            lines.append(f"{self.activity.nonfinite_samples} samples of the source are not finite")
        return "\n".join(lines)
