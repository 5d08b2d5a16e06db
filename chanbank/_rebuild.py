"""The command rebuild: a recording through both banks and back, and what that changed."""

import contextlib
import math
import os
import tempfile

import numpy as np

from chanbank._shell import (
    given_bank,
    given_pair,
    given_plan,
    given_recording,
    keeping_apart,
    megahertz,
    plan_data,
    plan_text,
)
from chanbank.analysis.bank import AnalysisBank
from chanbank.recordings import SigMFWriter, open_recording
from chanbank.synthesis.bank import SynthesisBank

__all__ = ["rebuild"]

_BLOCK = 1 << 18
_DEFAULT_PAIR = (8, 8)  # taps per branch of analysis and synthesis
_MEASURING_DB = 120.0  # between what was muted, often strong, and what was not


def rebuild(options):
    """Take a recording apart, put it back together, and say what is left between the two."""
    with contextlib.ExitStack() as stack:
        recording = stack.enter_context(given_recording(options))
        plan = given_plan(options, recording)
        if options.pair is None and options.synthesis is None:
            options.pair = _DEFAULT_PAIR
        prototype, synthesis = given_pair(options, plan)
        muted = sorted({plan.index_of(place) for place in options.mute})
        gains = np.ones(plan.output_channels)
        gains[muted] = 0
        analysis = given_bank(options, plan, prototype)
        back = SynthesisBank(plan, synthesis, gains=gains, dtype=options.dtype)
        path = options.output
        if path is None:
            path = os.path.join(stack.enter_context(tempfile.TemporaryDirectory()), "rebuilt")
        _write_rebuilt(recording, analysis, back, path, options.overwrite)
        rebuilt = stack.enter_context(open_recording(path))
        sharp = keeping_apart(options, plan, _MEASURING_DB) if muted else None
        error, left = _difference(recording, rebuilt, plan, sharp, back.delay, muted)
    met = error is None or error <= options.error_db
    data = {
        "recording": recording.path,
        "rebuilt": options.output,
        "plan": plan_data(plan),
        "delay_samples": back.delay,
        "error_db": error,
        "limit_db": options.error_db,
        "passed": met,
        "muted": [
            {"channel": k, "frequency_hz": float(plan.frequencies[k]), "left_db": level}
            for k, level in zip(muted, left, strict=True)
        ],
    }
    lines = [f"{plan_text(plan)}; both banks delay by {back.delay} samples"]
    for place in data["muted"]:
        level = "nothing" if place["left_db"] is None else f"{place['left_db']:.1f} dB"
        lines.append(f"muted {megahertz(place['frequency_hz'])}: {level} is left there")
    what = "all but the muted channels and their neighbours" if muted else "the whole recording"
    shown = "exactly 0" if error is None else f"{error:.1f} dB"
    verdict = "pass" if met else "FAIL"
    lines.append(f"{verdict}  error of {what}: {shown}, at most {options.error_db:g} dB")
    return "\n".join(lines), data, met


def _write_rebuilt(recording, analysis, back, path, overwrite):
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


def _difference(recording, rebuilt, plan, prototype, delay, muted):
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
