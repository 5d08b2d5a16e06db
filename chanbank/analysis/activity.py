"""Which channels are busy, and when: block powers over a robust estimate of the noise."""

from dataclasses import dataclass

import numpy as np
from tqdm import tqdm

from chanbank._checks import Boolean, Choice, Instance, Integer, Optional, Real, checked
from chanbank.analysis.bank import AnalysisBank
from chanbank.analysis.power import BlockPower
from chanbank.analysis.runs import (
    bank_for,
    check_fit,
    frames_of,
    plan_at,
    runs_of,
    settled,
    stretch_of,
)
from chanbank.recordings.recording import Recording

__all__ = ["Activity", "ActivityMeter", "decibels", "measure_activity"]

_KEPT_VALUES = 1 << 21  # block powers kept at most by default: 16 MiB, and as much for the peaks


def decibels(power):
    """10 log10, with exact zeros as -inf and no warning."""
    with np.errstate(divide="ignore"):
        return 10 * np.log10(power)


@dataclass(frozen=True, eq=False)
class Activity:
    """Power of every channel, block by block; made by `measure_activity`.

    With y the frames of a channel (full scale 1.0), block b has the power

        P[b, k] = mean over the block's frames and streams of abs(y[n, k])^2

    and a peak, the largest such mean over a burst of `burst_frames` frames within it. The noise
    is estimated as the lower quartile over channels of the median over blocks of P, blocks of
    exactly zero power left out: up to three quarters of the channels may be busy all the time.
    Frames whose prototype reaches beyond the samples of a segment count in no power, for the
    edge spreads over all channels (they are taken where there are no others).

    Attributes
    ----------
    channels : numpy.ndarray
        Channel indices, as ``plan.frequencies`` counts, shape (channels,).
    frequencies : numpy.ndarray
        Their centres in hertz, in the first segment measured.
    times : numpy.ndarray
        Of each block, in seconds: the time that its first frame describes, counted in samples
        of the file from the first one on. Shape (blocks,).
    frames : numpy.ndarray
        Of each block, its number of frames. Shape (blocks,).
    power, peak : numpy.ndarray
        float64, shape (blocks, channels), full scale 1.0.
    burst_frames, block_frames : int
        Frames in a burst and in a block (the last block of a segment may be shorter).
    channel_rate : float
        Frames per second.
    mean_power_db, peak_power_db : numpy.ndarray
        Per channel, dB re full scale, that is re abs(y) = 1: over all frames, and of the
        strongest burst. A real tone of full scale leaves its channel at -6.02 dB.
    density_db : numpy.ndarray
        Two-sided power density at the bank's input, dB re full scale per hertz: the mean power
        over channel gain and equivalent noise bandwidth, mean / (sample_rate * sum(h^2)).
    noise_power_db, noise_density_db : float
        The noise estimate, as power and as density; -inf where there is none.
    nonfinite_frames : numpy.ndarray
        Per channel, frames that are not finite; they count in no power.
    nonfinite_samples : int
        Samples of the recording that are not finite.

    References
    ----------
    F. J. Harris, Proc. IEEE 66(1), 1978, for the equivalent noise bandwidth. The quartile as a
    noise estimate is common practice in spectrum monitoring, no source.

    Examples
    --------
    See `measure_activity`.
    """

    channels: np.ndarray
    frequencies: np.ndarray
    times: np.ndarray
    frames: np.ndarray
    power: np.ndarray
    peak: np.ndarray
    burst_frames: int
    block_frames: int
    channel_rate: float
    mean_power_db: np.ndarray
    peak_power_db: np.ndarray
    density_db: np.ndarray
    noise_power_db: float
    noise_density_db: float
    nonfinite_frames: np.ndarray
    nonfinite_samples: int

    @checked(threshold_db=Real(unit="decibels"))
    def duty(self, threshold_db=10.0):
        """Share of time, 0 to 1, in blocks with a burst above the noise by `threshold_db`.

        Parameters
        ----------
        threshold_db : float, default 10.0
            Above the noise estimate, in dB.

        Returns
        -------
        numpy.ndarray
            Per channel, shape (channels,).

        Raises
        ------
        TypeError, ValueError
            If the threshold is not a finite number.

        Examples
        --------
        See `measure_activity`.
        """
        return self.frames @ self._above(threshold_db) / self.frames.sum()

    @checked(threshold_db=Real(unit="decibels"))
    def active(self, threshold_db=10.0):
        """Indices of the channels with a burst above the noise by `threshold_db` at any time.

        Parameters
        ----------
        threshold_db : float, default 10.0
            Above the noise estimate, in dB.

        Returns
        -------
        numpy.ndarray
            Channel indices, as ``plan.frequencies`` counts; may be empty.

        Raises
        ------
        TypeError, ValueError
            If the threshold is not a finite number.

        Examples
        --------
        See `measure_activity`.
        """
        return self.channels[self._above(threshold_db).any(axis=0)]

    def _above(self, threshold_db):
        return decibels(self.peak) > self.noise_power_db + threshold_db

    def __repr__(self):
        return (
            f"<Activity of {len(self.channels)} channels in {len(self.times)} blocks of "
            f"{self.block_frames / self.channel_rate:.4g} s, noise {self.noise_power_db:.1f} dB>"
        )


class ActivityMeter:
    """Gather an `Activity` while the frames of a recording go by, run after run."""

    def __init__(self, recording, bank, channels, runs, burst_frames, block_frames):
        self._plan, self._taps = bank.plan, bank.prototype.taps
        self._delay, self._channels = bank.delay, np.asarray(channels)
        self._settled = [settled(run, bank) for run in runs]
        if not any(stop > first for first, stop in self._settled):
            self._settled = [(run.first_frame, run.first_frame + run.frame_count) for run in runs]
        self._runs, self._at = runs, 0
        counts = [max(0, stop - first) for first, stop in self._settled]
        burst = min(burst_frames, max(counts))
        if block_frames is None:
            blocks = max(8, _KEPT_VALUES // len(channels) - len(runs))
            per_block = -(-sum(counts) // (burst * blocks))
        else:
            per_block = -(-block_frames // burst)
        self.burst_frames, self.block_frames = burst, burst * per_block
        self._power = BlockPower(len(channels), counts, burst, per_block)
        self._samples = 0

    def add(self, first_frame, frames):
        """Take frames of shape (streams, channels, frames), the next of the present run."""
        first, stop = self._settled[self._at]
        low = min(max(first - first_frame, 0), frames.shape[-1])
        high = max(min(stop - first_frame, frames.shape[-1]), low)
        self._power.add(frames[..., low:high])
        for part in (frames[..., :low], frames[..., high:]):
            self._power.count_nonfinite(part)

    def end_run(self):
        """Go on to the next run."""
        self._power.end_run()
        self._at += 1

    def see_samples(self, block, count):
        """Count the samples that are not finite."""
        if block.dtype.kind in "fc" and not np.isfinite(block.sum()):
            self._samples += int(np.count_nonzero(~np.isfinite(block)))

    def activity(self):
        held, plan = self._power, self._plan
        starts = []
        for run, (first, stop) in zip(self._runs, self._settled, strict=True):
            firsts = np.arange(first, stop, self.block_frames)
            starts.append(firsts * plan.hop - run.origin - self._delay + run.start)
        times = np.concatenate(starts) / plan.sample_rate
        mean = held.total / np.maximum(held.counted, 1)
        noise = _noise(held.power)
        per_hertz = plan.sample_rate * float(np.sum(self._taps**2))
        frequencies = plan_at(plan, self._runs[0].segment.center_frequency).frequencies
        arrays = {
            "channels": self._channels,
            "frequencies": frequencies[self._channels],
            "times": times,
            "frames": held.frames,
            "power": held.power,
            "peak": held.peak,
            "mean_power_db": decibels(mean),
            "peak_power_db": decibels(held.peak.max(axis=0)),
            "density_db": decibels(mean / per_hertz),
            "nonfinite_frames": held.nonfinite,
        }
        for array in arrays.values():
            array.flags.writeable = False
        return Activity(
            **arrays,
            burst_frames=self.burst_frames,
            block_frames=self.block_frames,
            channel_rate=plan.channel_rate,
            noise_power_db=float(decibels(noise)),
            noise_density_db=float(decibels(noise / per_hertz)),
            nonfinite_samples=self._samples,
        )


def _noise(power):
    """Lower quartile over channels of the median over blocks, zeros left out; 0 without any."""
    medians = []
    for first in range(0, power.shape[1], 64):  # a few channels at a time: medians copy
        part = power[:, first : first + 64]
        part = np.where(part > 0, part, np.nan)
        part = part[:, np.isfinite(part).any(axis=0)]
        medians.append(np.nanmedian(part, axis=0) if part.size else np.zeros(0))
    medians = np.concatenate(medians)
    return float(np.quantile(medians, 0.25, method="lower")) if len(medians) else 0.0


@checked(
    recording=Instance(Recording),
    bank=Instance(AnalysisBank),
    start=Real(0),
    length=Optional(Real(above=0)),
    unit=Choice("samples", "seconds"),
    burst_frames=Integer(1, 1 << 40),
    block_frames=Optional(Integer(1, 1 << 40)),
    progress=Boolean(),
)
def measure_activity(
    recording,
    bank,
    *,
    start=0,
    length=None,
    unit="samples",
    burst_frames=64,
    block_frames=None,
    progress=False,
):
    """Measure the power of every channel of a recording, block by block.

        P[b, k] = mean over the frames n of block b, and all streams, of abs(y[n, k])^2

    Parameters
    ----------
    recording : Recording
        Open, with the plan's sample rate, complex or real as the plan is.
    bank : AnalysisBank
        The bank to use, for the channels it selects; its own stream is not touched.
    start, length : number, optional
        The stretch to measure, by default all.
    unit : {"samples", "seconds"}, default "samples"
        Of `start` and `length`; seconds are counted in samples of the file.
    burst_frames : int, default 64
        Frames over which the peak power is averaged: a shorter burst is diluted. 64 independent
        frames of noise vary by 0.5 dB rms.
    block_frames : int, optional
        Frames in a block, rounded up to whole bursts. By default one burst, or as many as keep
        the arrays below 2^21 values each, however long the recording.
    progress : bool, default False
        Show a progress bar.

    Returns
    -------
    Activity

    Raises
    ------
    TypeError, ValueError
        If an argument is not what is accepted, the recording does not fit the bank's plan, or
        the stretch is empty or reaches beyond the recording.

    Notes
    -----
    Samples are read block by block; memory does not grow with the recording.

    References
    ----------
    See `Activity`.

    Examples
    --------
    >>> import os, tempfile
    >>> import numpy as np
    >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
    >>> from chanbank.recordings import open_recording, write_sigmf
    >>> rng = np.random.default_rng(1)
    >>> samples = 1e-3 * (rng.standard_normal(64000) + 1j * rng.standard_normal(64000))
    >>> samples[20000:21000] += 0.01 * np.exp(2j * np.pi * 3 / 16 * np.arange(1000))
    >>> bank = AnalysisBank(ChannelPlan(64e3, 16, 16), boxcar_prototype(16))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "quay")
    ...     write_sigmf(path, samples.astype("complex64"), sample_rate=64e3)
    ...     with open_recording(path) as recording:
    ...         activity = measure_activity(recording, bank, burst_frames=32)
    >>> activity.active(10).tolist()
    [3]
    >>> float(activity.peak_power_db[3].round(1)), float(activity.duty(10)[3].round(3))
    (-40.0, 0.016)
    """
    check_fit(recording, bank)
    start, length = stretch_of(recording, start, length, unit)
    channels = range(bank.plan.output_channels) if bank.select is None else bank.select
    runs = runs_of(recording, bank, start, length, True)
    own = bank_for(bank, channels)
    meter = ActivityMeter(recording, bank, channels, runs, burst_frames, block_frames)
    total = sum(run.length for run in runs)
    with tqdm(total=total, unit="sample", unit_scale=True, disable=not progress) as bar:

        def on_samples(block, count):
            meter.see_samples(block, count)
            bar.update(count)

        for run in runs:
            for first, frames in frames_of(recording, own, run, on_samples):
                meter.add(first, frames)
            meter.end_run()
    return meter.activity()
