"""A recording through analysis and synthesis and back, streamed; and what that changed."""

import math
import os

import numpy as np

from chanbank.analysis.bank import AnalysisBank
from chanbank.recordings import SigMFWriter

__all__ = ["difference", "write_rebuilt"]

_BLOCK = 1 << 18


def write_rebuilt(recording, analysis, back, path, overwrite):
    """The recording through both banks, segment by segment, aligned with the original."""
    kind = ("c" if recording.complex else "r") + ("f64" if back.dtype.itemsize > 8 else "f32")
    with SigMFWriter(
        path,
        kind + "_le",
        sample_rate=recording.sample_rate,
        streams=recording.streams,
        description=f"{os.path.basename(recording.path)}, split and rebuilt",
        overwrite=overwrite,
    ) as writer:
        for part in recording.segments:
            writer.capture(
                start=part.start,
                center_frequency=part.center_frequency,
                datetime=part.datetime,
                global_index=part.global_index,
            )
            position = -back.delay
            for samples in _rebuilt_blocks(recording, part, analysis, back):
                low = max(0, -position)
                writer.write(samples[..., low : max(low, part.length - position)])
                position += samples.shape[-1]


def _rebuilt_blocks(recording, part, analysis, back):
    analysis.reset()
    back.reset()
    for block in recording.blocks(_BLOCK, start=part.start, count=part.length):
        yield back.push(analysis.push(block))
    yield back.push(analysis.finish())
    yield back.finish()


def difference(recording, rebuilt, plan, prototype, delay, muted):
    """Error power over signal power in dB, and what is left in each muted channel.

    With muted channels the error is that of all channels but these and their neighbours;
    `prototype` tells the channels apart. The ends of a segment are left out then: what is cut off
    there clicks in every channel, and a muted one takes its part of the click away.
    """
    measure = AnalysisBank(plan, prototype, dtype="complex128") if muted else None
    energy = np.zeros((3, plan.output_channels if muted else 1))
    for part in recording.segments:
        stretch = {"start": part.start, "count": part.length, "as_float": "double"}
        if muted:
            measure.reset()
            settled = -(-(prototype.length + delay) // plan.hop)
            last = part.length // plan.hop - settled
        for x, z in zip(*(r.blocks(_BLOCK, **stretch) for r in (recording, rebuilt)), strict=True):
            three = np.stack([x, z, z - x])[..., None]
            if muted:
                first = measure.next_frame
                three = measure.push(three[..., 0])
                three = three[..., max(0, settled - first) : max(0, last - first), :]
            energy += np.sum(np.abs(three) ** 2, axis=tuple(range(1, three.ndim - 1)))
    before, after, error = energy
    rest = np.ones(len(before), bool)
    for k in muted:
        near = np.arange(k - 1, k + 2)
        rest[near.clip(0, len(rest) - 1) if plan.real else near % len(rest)] = False
    left = [_decibels(after[k], before[k]) for k in muted]
    return _decibels(error[rest].sum(), before[rest].sum()), left


def _decibels(power, reference):
    """The ratio in dB, or None where there is none or it is exactly zero."""
    return 10 * math.log10(power / reference) if power > 0 and reference > 0 else None
