"""A recording through a bank, one uninterrupted run of samples after the other."""

from dataclasses import dataclass, replace
from fractions import Fraction

import numpy as np

from chanbank._checks import wrong_value
from chanbank.analysis.bank import AnalysisBank
from chanbank.plan import ChannelPlan
from chanbank.recordings.segment import Segment

__all__ = [
    "Run",
    "bank_for",
    "check_fit",
    "frames_of",
    "plan_at",
    "runs_of",
    "settled",
    "stretch_of",
]

_BLOCK_BYTES = 16 << 20


@dataclass(frozen=True)
class Run:
    """Samples without a retune or a gap between them, and the frames they give.

    `start` counts as `Recording.read` does, `origin` is the absolute index of the same sample
    (lost samples counted); frame n describes the absolute time n * hop - delay.
    """

    segment: Segment
    start: int
    length: int
    origin: int
    first_frame: int
    frame_count: int


def check_fit(recording, bank):
    """Raise ValueError or TypeError where the recording is not what the bank is made for."""
    plan = bank.plan
    if recording.closed:
        raise ValueError(f"recording {recording.path} is closed; open_recording opens it again")
    if bank.phase != "absolute":
        raise ValueError(
            "bank must have phase='absolute', so that a channel's centre comes out at zero "
            f"frequency; got phase={bank.phase!r}"
        )
    if plan.real == recording.complex:
        kinds = ("complex", "real") if plan.real else ("real", "complex")
        raise ValueError(
            f"recording holds {kinds[0]} samples ({recording.datatype}) and the bank's plan is for "
            f"{kinds[1]} ones; give the plan real={not plan.real}"
        )
    rate = recording.sample_rate
    if rate is None:
        raise ValueError(
            "recording must state its sample rate; pass sample_rate= to open_recording"
        )
    if abs(Fraction(rate) - plan.exact_sample_rate) > plan.exact_sample_rate / 10**9:
        raise ValueError(
            f"recording and bank must have one sample rate; got {rate:.12g} Hz and a plan for "
            f"{plan.sample_rate:.12g} Hz"
        )
    double = recording.read(0, 0).dtype in (np.complex128, np.float64)
    if double and bank.dtype == np.complex64:
        raise ValueError(
            f"recording of {recording.datatype} needs more than single precision; give the bank "
            'dtype="complex128"'
        )


def plan_at(plan, center_frequency):
    """The same plan at the centre frequency of a segment, where that is known."""
    if center_frequency is None:
        return plan
    return ChannelPlan(
        plan.exact_sample_rate,
        plan.channels,
        plan.hop,
        center_frequency=center_frequency,
        offset=plan.exact_offset,
        real=plan.real,
    )


def stretch_of(recording, start, length, unit):
    """First sample and number of samples of a stretch given in samples or seconds."""
    total = recording.samples
    if unit == "seconds":
        rate = Fraction(recording.sample_rate)
        start = round(Fraction(start) * rate)
        length = None if length is None else round(Fraction(length) * rate)
    else:
        for name, value in (("start", start), ("length", length)):
            if value is not None and value != int(value):
                raise wrong_value(name, "a whole number of samples", value)
        start, length = int(start), None if length is None else int(length)
    length = total - start if length is None else length
    if length < 1 or start + length > total:
        raise ValueError(
            "1 <= length and start + length <= samples must hold; got start "
            f"{start}, length {length} and {total} samples"
        )
    return start, length


def runs_of(recording, bank, start, length, transients):
    """The runs of a stretch, those that give no frame left out."""
    hop, taps = bank.plan.hop, bank.prototype.length
    runs = []
    for segment in recording.segments:
        low = max(start, segment.start)
        high = min(start + length, segment.start + segment.length)
        if low >= high:
            continue
        origin = segment.global_index + low - segment.start
        first, stop = -(-origin // hop), -(-(origin + high - low + taps - 1) // hop)
        run = Run(segment, low, high - low, origin, first, stop - first)
        if not transients:
            first, stop = settled(run, bank)
            run = replace(run, first_frame=first, frame_count=stop - first)
        if run.frame_count:
            runs.append(run)
    if not runs:
        raise ValueError(
            f"transients=False leaves no frame: a prototype of {taps} taps fits into no run of "
            f"samples of this stretch ({length} samples)"
        )
    return runs


def settled(run, bank):
    """First and stop frame of those whose prototype lies on samples of the run alone."""
    hop = bank.plan.hop
    first = -(-(run.origin + bank.prototype.length - 1) // hop)
    return first, max(first, -(-(run.origin + run.length) // hop))


def bank_for(bank, channels):
    """A bank of the same design for these channels, frames channel by channel."""
    return AnalysisBank(
        bank.plan,
        bank.prototype,
        dtype=bank.dtype.name,
        select=list(channels),
        layout="channels",
        workers=bank.workers,
        full_scale=bank.full_scale,
    )


def frames_of(recording, bank, run, on_samples=None):
    """Blocks (first frame, frames of shape (streams, channels, frames)) of one run.

    `bank` comes from `bank_for`. Each block is valid until the next one is asked for: they share
    one buffer. `on_samples` is called with each block of samples and their number.
    """
    streams, channels = recording.streams, len(bank.select)
    hop = bank.plan.hop
    frame_bytes = streams * channels * bank.dtype.itemsize
    most = max(1, _BLOCK_BYTES // frame_bytes)
    # Samples count with 16 bytes at most; a block of them need not be larger than its frames.
    size = max(1, min((most - 1) * hop, _BLOCK_BYTES // (16 * streams)))
    buffer = np.empty(streams * channels * most, bank.dtype)
    lead = () if streams == 1 else (streams,)

    def room(count):
        frames = bank.frame_count(count)
        return buffer[: streams * channels * frames].reshape(*lead, channels, frames)

    bank.reset(run.origin)
    stop = run.first_frame + run.frame_count
    for block in recording.blocks(size, start=run.start, count=run.length):
        count = block.shape[-1] // (2 if recording.complex and block.dtype.kind != "c" else 1)
        first = bank.next_frame
        frames = bank.push(block, out=room(count))
        if on_samples is not None:
            on_samples(block, count)
        yield from _inside(first, frames.reshape(streams, channels, -1), run.first_frame, stop)
    left = bank.prototype.length - 1
    while left and bank.next_frame < stop:
        count = min(left, size)
        first = bank.next_frame
        frames = bank.skip(count, out=room(count))
        left -= count
        yield from _inside(first, frames.reshape(streams, channels, -1), run.first_frame, stop)


def _inside(first, frames, start, stop):
    low = max(start - first, 0)
    high = min(stop - first, frames.shape[-1])
    if low < high:
        yield first + low, frames[..., low:high]
