"""The jobs behind the shell's commands: options in, (text, data for JSON, all limits met) out."""

import contextlib
import math
import os
import sys
import tempfile

import numpy as np

from chanbank._rebuild import difference, write_rebuilt
from chanbank.analysis.bank import AnalysisBank
from chanbank.metrics.formula import bank_report
from chanbank.metrics.limits import Limits
from chanbank.metrics.measured import measured_report
from chanbank.metrics.present import engineering
from chanbank.metrics.verify import ReportDisagreement
from chanbank.plan import ChannelPlan
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.equiripple import equiripple_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.recordings import open_recording
from chanbank.search.find import find_designs
from chanbank.search.specification import Specification
from chanbank.splitting import split_recording
from chanbank.synthesis.bank import SynthesisBank
from chanbank.synthesis.pair import prototype_pair

__all__ = ["describe", "propose", "rebuild", "report", "split"]

# Levels are measured in this many pieces, spread evenly over a recording.
_PIECES, _PIECE = 16, 1 << 18

_RIPPLE_DB = 0.1  # over the occupied band, of the prototypes that are designed here
_MEASURING_DB = 120.0  # between what was muted, often strong, and what was not
_DEFAULT_PAIR = (8, 8)  # taps per branch of analysis and synthesis


def describe(options):
    """What a recording holds, and whether a raster fits it."""
    with _open(options) as recording:
        plan = None if options.spacing is None else _plan(options, recording)
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
            "plan": None if plan is None else _plan_data(plan),
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
            yield f"  band {_place(low)} to {_place(center + rate / 2)}; centre {_place(center)}"
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
        where = "" if place is None else f"; centre {_place(place)}"
        yield f"  segment {number}: {part['length']:,} samples from {part['start']:,}{where}"
    for note in data["annotations"]:
        label = note["label"] or "(no label)"
        yield f"  annotation {label}: {note['length']:,} samples from {note['start']:,}"
    if plan is not None:
        yield f"  raster of {engineering(plan.spacing, 'Hz')}: {_plan_text(plan)}"


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


def _place(hertz):
    return f"{hertz / 1e6:.9g} MHz"


def _open(options):
    return open_recording(
        options.file,
        datatype=options.datatype,
        sample_rate=options.sample_rate,
        center_frequency=options.center_frequency,
        streams=options.streams,
        header_bytes=options.header_bytes,
        allow_truncated=options.allow_truncated,
    )


def _plan(options, recording=None):
    """The channel plan that the raster options ask for, on a recording's rate or a given one."""
    rate, center, real = options.sample_rate, options.center_frequency, False
    if recording is not None:
        rate, center = recording.sample_rate, recording.center_frequency
        real = not recording.complex
        if rate is None:
            raise ValueError(f"sample_rate must be given, since {options.file} does not say it")
    else:
        real = options.real
    for name, value in (("sample_rate", rate), ("spacing", options.spacing)):
        if value is None:
            raise ValueError(f"{name} must be given, in hertz")
    plan = ChannelPlan.from_spacing(
        rate,
        options.spacing,
        oversampling=options.oversampling,
        center_frequency=center or 0,
        align_to=options.align_to,
        real=real,
    )
    if options.hop is None:
        return plan
    return ChannelPlan(
        rate,
        plan.channels,
        options.hop,
        center_frequency=center or 0,
        offset=plan.exact_offset,
        real=real,
    )


def _plan_text(plan):
    return (
        f"{plan.output_channels} channels, hop {plan.hop} (oversampling {plan.oversampling:.4g}), "
        f"each at {engineering(plan.channel_rate, 'S/s')}"
    )


def _plan_data(plan):
    return {
        "sample_rate_hz": plan.sample_rate,
        "channels": plan.channels,
        "hop": plan.hop,
        "offset": plan.offset,
        "real": plan.real,
        "spacing_hz": plan.spacing,
        "channel_rate_hz": plan.channel_rate,
        "oversampling": plan.oversampling,
        "center_frequency_hz": plan.center_frequency,
    }


def _occupied(options, plan):
    """Occupied bandwidth in hertz: the report's own default is 0.8 of the spacing."""
    if options.occupied_bandwidth is None:
        return 0.8 * plan.spacing
    return float(options.occupied_bandwidth)


def _prototype(options, plan):
    """The analysis prototype: from a file, the bare DFT, or a minimax design for the raster."""
    if options.prototype is not None:
        return Prototype.load(options.prototype)
    if options.bare:
        return boxcar_prototype(plan.channels)
    return _keeping_apart(options, plan, options.rejection)


def _keeping_apart(options, plan, rejection):
    """A minimax prototype that keeps the occupied bands of neighbours apart."""
    half = _occupied(options, plan) / plan.spacing / 2
    if not half < 0.5:
        raise ValueError(
            "occupied_bandwidth must be below the channel spacing, so that neighbours can be told "
            f"apart; got {2 * half * plan.spacing:g} Hz on a raster of {plan.spacing:g} Hz"
        )
    # From the edge of the wanted band to where the neighbour's begins. A slope, so that the many
    # aliases of a decimated stopband do not add up.
    return equiripple_prototype(
        plan.channels,
        passband=half,
        stopband=1 - half,
        passband_db=_RIPPLE_DB,
        stopband_db=rejection,
        slope_db=6.0,
    )


def _bank(options, plan, prototype):
    return AnalysisBank(plan, prototype, dtype=options.dtype)


def _progress(options):
    return not (options.quiet or options.json) and sys.stderr.isatty()


def propose(options):
    """The designs that meet a specification, and why nothing cheaper does."""
    for name in ("sample_rate", "spacing"):
        if getattr(options, name) is None:
            raise ValueError(f"{name} must be given, in hertz")
    occupied = options.occupied_bandwidth
    found = find_designs(
        Specification(
            options.sample_rate,
            options.spacing,
            occupied_bandwidth=None if occupied is None else float(occupied),
            neighbour_rejection=options.neighbour_rejection,
            passband_ripple=options.passband_ripple,
            alias_level=options.alias_level,
            total_leakage=options.total_leakage,
            reconstruction_error=options.reconstruction_error,
            latency=options.latency,
            multiplications=options.multiplications,
            memory=options.memory,
            oversampling=options.oversampling,
            center_frequency=options.center_frequency or 0,
            align_to=options.align_to,
            real=options.real,
        ),
        progress=_progress(options),
    )
    lines, data = [found.table()], found.to_dict()
    if options.save is not None and found.feasible:
        best = found.best
        path = best.prototype.save(options.save, overwrite=options.overwrite)
        use = f"--spacing {options.spacing} --hop {best.plan.hop} --prototype {path}"
        if best.synthesis_prototype is not None:
            back = os.path.splitext(path)[0] + "_synthesis.npz"
            best.synthesis_prototype.save(back, overwrite=options.overwrite)
            use += f" --synthesis {back}"
        lines.append(f"The first design is stored; to use it: {use}")
        data["use"] = use
    return "\n".join(lines), data, found.feasible


def split(options):
    """One recording for each channel."""
    with _open(options) as recording:
        plan = _plan(options, recording)
        result = split_recording(
            recording,
            _bank(options, plan, _prototype(options, plan)),
            options.destination,
            select="active" if options.active else options.index,
            frequencies=options.frequency,
            start=options.start,
            length=options.length,
            unit="seconds",
            transients=not options.no_transients,
            datatype=options.output_datatype,
            threshold_db=options.threshold_db,
            progress=_progress(options),
            overwrite=options.overwrite,
        )
    data = {"destination": options.destination, "plan": _plan_data(plan), **result.to_dict()}
    if len(result):
        text = f"{result}\n{len(result)} channel recordings in {options.destination}"
    else:
        text = f"no channel rises {options.threshold_db:g} dB above the noise: nothing written"
    return text, data, len(result) > 0


def report(options):
    """Every figure of a bank, and the limits it must meet."""
    plan = _plan(options)
    prototype, synthesis = _pair(options, plan)
    occupied = _occupied(options, plan)
    found = bank_report(
        plan, prototype, synthesis, occupied_bandwidth=occupied, dtype=options.dtype
    )
    lines, data, met = [], {}, True
    if options.measured:
        back = None if synthesis is None else SynthesisBank(plan, synthesis, dtype=options.dtype)
        measured = measured_report(
            _bank(options, plan, prototype), back, occupied_bandwidth=occupied
        )
        try:
            found.verify(measured)
            lines.append("measured and computed figures agree")
        except ReportDisagreement as error:
            lines.append(f"measured and computed figures disagree: {error}")
            met = False
        data["agreed"] = met
        found = measured
    lines.insert(0, found.table(absent=False))
    data = {"report": found.to_dict(), **data}
    if options.limit:
        check = Limits(**dict(options.limit)).check(found)
        lines.append(str(check))
        data["limits"] = check.to_dict()
        met = met and check.passed
    if options.save is not None:
        lines.append(f"prototype in {prototype.save(options.save, overwrite=options.overwrite)}")
    return "\n".join(lines), data, met


def _pair(options, plan):
    """Analysis prototype, and the synthesis prototype where one is asked for."""
    if options.pair is not None:
        return prototype_pair(plan, *options.pair)
    if options.synthesis is not None:
        if options.prototype is None:
            raise ValueError(
                "prototype must be given along with --synthesis, since the two belong together"
            )
        return _prototype(options, plan), Prototype.load(options.synthesis)
    return _prototype(options, plan), None


def rebuild(options):
    """Take a recording apart, put it back together, and say what is left between the two."""
    with contextlib.ExitStack() as stack:
        recording = stack.enter_context(_open(options))
        plan = _plan(options, recording)
        if options.pair is None and options.synthesis is None:
            options.pair = _DEFAULT_PAIR
        prototype, synthesis = _pair(options, plan)
        muted = sorted({plan.index_of(place) for place in options.mute})
        gains = np.ones(plan.output_channels)
        gains[muted] = 0
        analysis = _bank(options, plan, prototype)
        back = SynthesisBank(plan, synthesis, gains=gains, dtype=options.dtype)
        path = options.output
        if path is None:
            path = os.path.join(stack.enter_context(tempfile.TemporaryDirectory()), "rebuilt")
        write_rebuilt(recording, analysis, back, path, options.overwrite)
        rebuilt = stack.enter_context(open_recording(path))
        sharp = _keeping_apart(options, plan, _MEASURING_DB) if muted else None
        error, left = difference(recording, rebuilt, plan, sharp, back.delay, muted)
    met = error is None or error <= options.error_db
    data = {
        "recording": recording.path,
        "rebuilt": options.output,
        "plan": _plan_data(plan),
        "delay_samples": back.delay,
        "error_db": error,
        "limit_db": options.error_db,
        "passed": met,
        "muted": [
            {"channel": k, "frequency_hz": float(plan.frequencies[k]), "left_db": level}
            for k, level in zip(muted, left, strict=True)
        ],
    }
    lines = [f"{_plan_text(plan)}; both banks delay by {back.delay} samples"]
    for place in data["muted"]:
        level = "nothing" if place["left_db"] is None else f"{place['left_db']:.1f} dB"
        lines.append(f"muted {_place(place['frequency_hz'])}: {level} is left there")
    what = "all but the muted channels and their neighbours" if muted else "the whole recording"
    shown = "exactly 0" if error is None else f"{error:.1f} dB"
    verdict = "pass" if met else "FAIL"
    lines.append(f"{verdict}  error of {what}: {shown}, at most {options.error_db:g} dB")
    return "\n".join(lines), data, met
