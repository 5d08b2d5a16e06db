"""A recording in, channel recordings out: the whole job in one call."""

import errno
import os
import shutil

import numpy as np
from tqdm import tqdm

from chanbank._checks import (
    Boolean,
    Choice,
    Frequency,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    PathLike,
    Real,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank.analysis.activity import ActivityMeter, measure_activity
from chanbank.analysis.bank import AnalysisBank
from chanbank.analysis.channel_metadata import ChannelMetadata
from chanbank.analysis.runs import bank_for, check_fit, frames_of, plan_at, runs_of, stretch_of
from chanbank.analysis.summary import ChannelRecording, SplitResult, json_number
from chanbank.recordings.conversion import copy_scaled, peak_of
from chanbank.recordings.datatype import Datatype
from chanbank.recordings.open import open_recording
from chanbank.recordings.pieces import PieceFiles
from chanbank.recordings.recording import Recording
from chanbank.recordings.sigmf_writer import SigMFWriter
from chanbank.recordings.staging import Staging

__all__ = ["split_recording"]

_PROTOTYPE = "prototype.npz"
_SELECT = "None, 'active' or a sequence of distinct channel indices"
_FREQUENCIES = "None or a sequence of frequencies in hertz"


@checked(
    recording=Instance(Recording),
    bank=Instance(AnalysisBank),
    destination=PathLike(),
    select=OwnCheck(
        _SELECT,
        (3, TypeError),
        ("busy", ValueError),
        ([], ValueError),
        ([0, 0], ValueError),
        ([-1], ValueError),
        ([1 << 30], ValueError),
        ([0.5], TypeError),
    ),
    frequencies=OwnCheck(_FREQUENCIES, (3, TypeError), ([], ValueError), (["a"], ValueError)),
    start=Real(0),
    length=Optional(Real(above=0)),
    unit=Choice("samples", "seconds"),
    transients=Boolean(),
    datatype=Choice("cf32_le", "ci16_le"),
    scale=Optional(Real(above=0)),
    threshold_db=Real(unit="decibels"),
    burst_frames=Integer(1, 1 << 40),
    block_frames=Optional(Integer(1, 1 << 40)),
    checksum=Boolean(),
    progress=Boolean(),
    overwrite=Boolean(),
)
def split_recording(
    recording,
    bank,
    destination,
    *,
    select=None,
    frequencies=None,
    start=0,
    length=None,
    unit="samples",
    transients=True,
    datatype="cf32_le",
    scale=None,
    threshold_db=10.0,
    burst_frames=64,
    block_frames=None,
    checksum=True,
    progress=True,
    overwrite=False,
):
    """Write one SigMF recording for each channel of a wideband recording.

    Sample n - n0 of channel k's recording is the bank's frame n with absolute phase,

        y[n, k] = sum_i h[i] x[nD - i] exp(-2j pi f_k (nD - i)),

    n0 being the first frame of its capture segment (``core:global_index``). It is taken at
    sample_rate / D, its centre frequency is the channel's, and its start time is the instant
    that frame n0 describes, (n0 D - delay) / sample_rate after sample 0. The samples of a retune
    or a gap are never filtered together: each segment of the recording becomes a capture segment
    of every channel.

    Parameters
    ----------
    recording : Recording
        Open, with the plan's sample rate, complex or real as the plan is. Where it states a
        centre frequency, the plan states the same or 0.
    bank : AnalysisBank
        The bank to use (absolute phase), for the channels it selects; its own stream is not
        touched.
    destination : str or os.PathLike
        Folder for the recordings, made if missing. They are called
        ``channel_<index>_<frequency>Hz``; ``prototype.npz`` holds the bank's taps.
    select : "active" or sequence of int, optional
        Channel indices, as ``plan.frequencies`` counts; or those with a burst above the noise by
        `threshold_db` at any time. By default all that the bank selects.
    frequencies : sequence of float, optional
        Instead of `select`: absolute frequencies in hertz; the channel nearest to each is taken.
    start, length : number, optional
        The stretch to split, by default all.
    unit : {"samples", "seconds"}, default "samples"
        Of `start` and `length`; seconds are counted in samples of the file.
    transients : bool, default True
        Whether to keep the frames whose prototype reaches beyond the samples of a segment.
    datatype : {"cf32_le", "ci16_le"}, default "cf32_le"
        Of the channel recordings. "ci16_le" needs half the space: full scale stands for `scale`.
    scale : float, optional
        For "ci16_le", full scale of the file in units of the bank's output: the sample is
        ``scale`` times what `open_recording` reads as float. By default each channel's own
        largest component; recorded as ``chanbank:scale``.
    threshold_db : float, default 10.0
        Above the noise estimate in dB: what is active, and what counts as duty.
    burst_frames, block_frames : int, optional
        As in `measure_activity`.
    checksum : bool, default True
        Whether to state the SHA-512 of each channel's samples.
    progress : bool, default True
        Show progress bars.
    overwrite : bool, default False
        Whether recordings of the same names in the destination may be replaced.

    Returns
    -------
    SplitResult
        What was written, with each channel's activity.

    Raises
    ------
    TypeError, ValueError
        If an argument is not what is accepted, recording and bank do not fit, the stretch is
        empty or reaches beyond the recording, or a channel does not exist.
    FileExistsError
        If a channel recording of that name is in the destination and `overwrite` is False.
    OSError
        If the destination cannot be written or its disk is (or would become) full.
    RecordingError
        If the recording ends early.

    Notes
    -----
    Memory does not grow with the recording: frames are appended to one file for each channel,
    none of them held open, in a folder ``.unfinished`` inside the destination. The recordings
    appear when all are complete; an error removes the folder, and what a crash leaves is cleared
    when the same call is repeated.

    Samples that are not finite pass through to the frames they touch, and are counted.
    Annotations go to the channels whose spacing-wide band they touch, or to all where they name
    no band. What made a channel stands in its global metadata:

    ==============================  ======================================================
    ``chanbank:channel, channels``  its index, and M
    ``chanbank:hop, offset``        D, and the offset in channels, exact ("1/3")
    ``chanbank:spacing, enbw``      channel spacing and equivalent noise bandwidth, in Hz
    ``chanbank:delay``              group delay in samples of the source
    ``chanbank:prototype``          file, length, label, design, SHA-256 of the float64 taps
    ``chanbank:source``             name, datatype, rate and stretch of the recording
    ``chanbank:activity``           this channel's summary
    ``chanbank:scale``              for "ci16_le": what full scale stands for
    ==============================  ======================================================

    References
    ----------
    SigMF specification 1.2.6. R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal
    Processing, 1983, ch. 7.

    Examples
    --------
    >>> import os, tempfile
    >>> import numpy as np
    >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
    >>> from chanbank.recordings import open_recording, write_sigmf
    >>> tone = 0.25 * np.exp(2j * np.pi * 3 / 16 * np.arange(64000)).astype("complex64")
    >>> bank = AnalysisBank(ChannelPlan(64e3, 16, 16), boxcar_prototype(16))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "quay")
    ...     write_sigmf(path, tone, sample_rate=64e3, center_frequency=1e6)
    ...     with open_recording(path) as recording:
    ...         result = split_recording(
    ...             recording, bank, os.path.join(folder, "channels"), progress=False,
    ...             select=[2, 3], transients=False,
    ...         )
    ...     with open_recording(result.channels[1].path) as channel:
    ...         print(channel.sample_rate, channel.center_frequency, abs(channel.read(0, 1)))
    4000.0 1012000.0 [0.25]
    >>> round(result.to_dict()["channels"][1]["mean_power_db"], 2)
    -12.04
    """
    check_fit(recording, bank)
    start, length = stretch_of(recording, start, length, unit)
    runs = runs_of(recording, bank, start, length, transients)
    plan = _plan_here(bank.plan, runs[0].segment)
    if scale is not None and datatype != "ci16_le":
        raise ValueError(f"scale is for datatype 'ci16_le'; got scale={scale} with {datatype!r}")
    channels = _chosen(select, frequencies, bank, plan)
    Staging(destination, [_PROTOTYPE], overwrite)  # refuses a destination before any work

    examined = list(range(plan.output_channels)) if bank.select is None else list(bank.select)
    activity = meter = None
    if channels is None:
        activity = measure_activity(
            recording,
            bank,
            start=start,
            length=length,
            burst_frames=burst_frames,
            block_frames=block_frames,
            progress=progress,
        )
        examined = channels = activity.active(threshold_db).tolist()
        if not channels:
            return SplitResult((), activity, threshold_db, None)
    else:
        # All channels are metered, for the noise is not to be seen in a few busy ones.
        meter = ActivityMeter(recording, bank, examined, runs, burst_frames, block_frames)

    names = _names(channels, plan)
    files = [f"{name}.sigmf-{end}" for name in names for end in ("data", "meta")]
    staging = Staging(destination, [_PROTOTYPE, *files], overwrite)
    _check_space(destination, runs, len(channels) * recording.streams)
    metadata = ChannelMetadata(
        recording, bank, runs, transients=transients, prototype_file=_PROTOTYPE
    )
    with staging:
        pieces = PieceFiles(staging.folder, Datatype.parse("cf32_le"), recording.streams)
        rows = [examined.index(channel) for channel in channels]
        peaks = _analyse(recording, bank_for(bank, examined), runs, rows, pieces, meter, progress)
        activity = activity or meter.activity()
        figures = _figures(activity, channels, threshold_db)
        if datatype == "cf32_le":
            scales = [None] * len(channels)
        elif scale is None:
            # The largest component becomes 32767, and silence stays silence.
            scales = [float(peak) * 32768 / 32767 or 1.0 for peak in peaks]
        else:
            scales = [scale] * len(channels)
        written = []
        for position in tqdm(range(len(channels)), unit="file", disable=not progress):
            channel, name, summary = channels[position], names[position], figures[position]
            with SigMFWriter(
                os.path.join(staging.folder, name),
                datatype,
                sample_rate=plan.channel_rate,
                streams=recording.streams,
                description=f"Channel {channel} of {os.path.basename(recording.path)}",
                recorder="chanbank",
                extensions=metadata.extensions,
                fields=_fields(metadata, channel, summary, threshold_db, scales[position]),
                checksum=checksum,
            ) as writer:
                zeroed = _fill(writer, pieces.path(position), scales[position], metadata, channel)
            written.append(
                ChannelRecording(
                    index=channel,
                    frequency=metadata.frequency(channel),
                    path=os.path.join(staging.destination, f"{name}.sigmf-meta"),
                    samples=writer.samples,
                    scale=scales[position],
                    clipped=writer.clipped,
                    zeroed=zeroed,
                    **summary,
                )
            )
        bank.prototype.save(os.path.join(staging.folder, _PROTOTYPE))
        staging.publish()
    prototype = os.path.join(staging.destination, _PROTOTYPE)
    return SplitResult(tuple(written), activity, threshold_db, prototype)


def _plan_here(plan, segment):
    """The plan at the recording's own centre frequency."""
    center = segment.center_frequency
    if center is not None and plan.center_frequency not in (0.0, center):
        raise ValueError(
            f"recording and bank must have one centre frequency; got {center:.12g} Hz and a plan "
            f"at {plan.center_frequency:.12g} Hz (0 takes the recording's)"
        )
    return plan_at(plan, center)


def _chosen(select, frequencies, bank, plan):
    """Channel indices, or None for the active ones."""
    available = range(plan.output_channels) if bank.select is None else bank.select
    if frequencies is not None:
        if select is not None:
            raise ValueError(f"frequencies and select exclude each other; got select={select!r}")
        select = _by_frequency(frequencies, plan)
    if select is None:
        return list(available)
    if isinstance(select, str):
        if select != "active":
            raise wrong_value("select", _SELECT, select)
        return None
    if not hasattr(select, "__iter__"):
        raise wrong_type("select", _SELECT, select)
    rule = Integer(0, plan.output_channels - 1)
    chosen = [rule.check("each index in select", index) for index in select]
    if not chosen or len(set(chosen)) != len(chosen):
        raise wrong_value("select", _SELECT, select)
    missing = sorted(set(chosen) - set(available))
    if missing:
        raise ValueError(f"select must be among the bank's own channels; got {missing} besides")
    return chosen


def _by_frequency(frequencies, plan):
    if isinstance(frequencies, str) or not hasattr(frequencies, "__iter__"):
        raise wrong_type("frequencies", _FREQUENCIES, frequencies)
    rule = Frequency()
    wanted = [rule.check("each of frequencies", frequency) for frequency in frequencies]
    indices = [plan.index_of(frequency) for frequency in wanted]
    if not indices or len(set(indices)) != len(indices):
        raise wrong_value("frequencies", f"{_FREQUENCIES}, one for each channel", frequencies)
    return indices


def _names(channels, plan):
    digits = len(str(plan.output_channels - 1))
    frequencies = plan.frequencies
    return [f"channel_{k:0{digits}d}_{round(float(frequencies[k]))}Hz" for k in channels]


def _check_space(destination, runs, rows):
    """Refuse at once where the disk cannot hold the result."""
    needed = 8 * rows * sum(run.frame_count for run in runs)
    folder = os.path.abspath(destination)
    while not os.path.isdir(folder):
        folder = os.path.dirname(folder)
    free = shutil.disk_usage(folder).free
    if needed > free:
        raise OSError(
            errno.ENOSPC,
            f"the channels need {needed} bytes and {free} are free; select fewer of them",
            os.fspath(destination),
        )


def _analyse(recording, bank, runs, rows, pieces, meter, progress):
    """Run the recording through the bank, these rows of it into one raw file each.

    Returns the largest component of each row.
    """
    peaks = np.zeros(len(rows))
    total = sum(run.length for run in runs)
    with tqdm(total=total, unit="sample", unit_scale=True, disable=not progress) as bar:

        def on_samples(block, count):
            if meter is not None:
                meter.see_samples(block, count)
            bar.update(count)

        for run in runs:
            for first, frames in frames_of(recording, bank, run, on_samples):
                if meter is not None:
                    meter.add(first, frames)
                for position, row in enumerate(rows):
                    piece = frames[:, row]
                    peaks[position] = max(peaks[position], peak_of(piece))
                    pieces.append(position, piece)
            if meter is not None:
                meter.end_run()
    return peaks


def _figures(activity, channels, threshold_db):
    """The activity of these channels, one dict of plain numbers for each."""
    columns = {
        "mean_power_db": activity.mean_power_db,
        "peak_power_db": activity.peak_power_db,
        "density_db": activity.density_db,
        "duty": activity.duty(threshold_db),
        "nonfinite_frames": activity.nonfinite_frames,
    }
    rows = {channel: row for row, channel in enumerate(activity.channels.tolist())}
    return [
        {key: values[rows[channel]].item() for key, values in columns.items()}
        for channel in channels
    ]


def _fields(metadata, channel, summary, threshold_db, scale):
    shown = {key: json_number(value) for key, value in summary.items()}
    fields = {
        **metadata.fields(channel),
        "chanbank:activity": {**shown, "threshold_db": threshold_db},
    }
    return fields if scale is None else {**fields, "chanbank:scale": scale}


def _fill(writer, path, scale, metadata, channel):
    """Give the writer its samples, captures and annotations; how many samples became 0."""
    zeroed = 0
    with open_recording(path, datatype="cf32_le", streams=writer.streams) as raw:
        at = 0
        for count, keywords in metadata.captures(channel):
            writer.capture(start=at, **keywords)
            at += count
        if scale is not None:
            zeroed = copy_scaled(raw, writer, scale)
    if scale is None:
        writer.adopt(path)
    else:
        os.remove(path)
    for keywords in metadata.annotations(channel):
        writer.annotate(**keywords)
    return zeroed
