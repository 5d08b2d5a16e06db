"""The command describe: what a recording holds."""

import math

import numpy as np

from chanbank._shell import given_plan, given_recording, megahertz, plan_data, plan_text
from chanbank.metrics.present import engineering

__all__ = ["describe"]

# Levels are measured in this many pieces, spread evenly over a recording.
_PIECES, _PIECE = 16, 1 << 18


def describe(options):
    """What a recording holds, and whether a raster fits it."""
    with given_recording(options) as recording:
        plan = None if options.spacing is None else given_plan(options, recording)
        data = {
            "path": recording.path,
            "container": recording.container,
            "datatype": recording.datatype,
            "streams": recording.streams,
            "samples": recording.samples,
            "sample_rate_hz": recording.sample_rate,
            "center_frequency_hz": recording.center_frequency,
            "duration_s": recording.duration,
            "truncated": recording.truncated,
            "levels": _levels(recording),
            "segments": [
                {
                    "start": part.start,
                    "length": part.length,
                    "center_frequency_hz": part.center_frequency,
                    "datetime": part.datetime,
                }
                for part in recording.segments
            ],
            "annotations": [
                {"start": note.start, "length": note.length, "label": note.label}
                for note in recording.annotations
            ],
            "plan": None if plan is None else plan_data(plan),
        }
        return "\n".join(_description(data, recording.complex, plan)), data, True


def _description(data, is_complex, plan):
    streams = f", {data['streams']} streams" if data["streams"] > 1 else ""
    yield f"{data['path']}: {data['container']}, {data['datatype']}{streams}"
    rate, center = data["sample_rate_hz"], data["center_frequency_hz"]
    if rate is None:
        yield f"  {data['samples']:,} samples; the rate is not known (--sample-rate gives it)"
    else:
        duration = engineering(data["duration_s"], "s")
        yield f"  {data['samples']:,} samples at {engineering(rate, 'S/s')}: {duration}"
        if center is not None:
            low = center - rate / 2 if is_complex else center
            high = center + rate / 2
            yield f"  band {megahertz(low)} to {megahertz(high)}; centre {megahertz(center)}"
    levels = data["levels"]
    if levels["measured_samples"]:
        yield (
            f"  level {_dbfs(levels['rms_dbfs'])} rms, {_dbfs(levels['peak_dbfs'])} peak, "
            f"{levels['full_scale_share']:.2g} of the samples at full scale"
            + (f", {levels['not_finite']} not finite" if levels["not_finite"] else "")
            + f" ({levels['measured_samples']:,} samples looked at)"
        )
    for number, part in enumerate(data["segments"] if len(data["segments"]) > 1 else ()):
        place = part["center_frequency_hz"]
        where = "" if place is None else f"; centre {megahertz(place)}"
        yield f"  segment {number}: {part['length']:,} samples from {part['start']:,}{where}"
    for note in data["annotations"]:
        label = note["label"] or "(no label)"
        yield f"  annotation {label}: {note['length']:,} samples from {note['start']:,}"
    if plan is not None:
        yield f"  raster of {engineering(plan.spacing, 'Hz')}: {plan_text(plan)}"


def _levels(recording):
    """Level figures of evenly spread pieces, each stream alike; full scale is 0 dB."""
    step = max(_PIECE, recording.samples // _PIECES)
    full = 1.0
    if recording.datatype[1] in "iu":
        full -= 2.0 ** (1 - int(recording.datatype[2:].split("_")[0]))
    energy = peak = 0.0
    count = at_full = not_finite = 0
    for start in range(0, recording.samples, step):
        piece = recording.read(start, min(_PIECE, recording.samples - start), as_float="double")
        finite = np.isfinite(piece)
        not_finite += int(finite.size - finite.sum())
        piece = np.where(finite, piece, 0)
        part = np.maximum(np.abs(piece.real), np.abs(piece.imag))
        energy += float(np.sum(np.abs(piece) ** 2))
        peak = max(peak, float(part.max(initial=0.0)))
        at_full += int(np.sum(part >= full))
        count += piece.size
    return {
        "measured_samples": count,
        "rms_dbfs": _decibels(energy / count) if count else None,
        "peak_dbfs": _decibels(peak**2) if count else None,
        "full_scale_share": at_full / count if count else None,
        "not_finite": not_finite,
    }


def _decibels(power):
    """In dB, or None for a power that is exactly zero."""
    return 10 * math.log10(power) if power > 0 else None


def _dbfs(level):
    return "exactly 0" if level is None else f"{level:.1f} dBFS"
