"""What the shell's options stand for, and the commands propose, split and report.

A command takes the options and returns (text, data for JSON, whether all limits are met).
"""

import os
import sys

from chanbank._files import refuse_existing, whole_file
from chanbank.analysis.bank import AnalysisBank
from chanbank.metrics.formula import bank_report
from chanbank.metrics.limits import Limits
from chanbank.metrics.measured import measured_report
from chanbank.metrics.present import engineering
from chanbank.metrics.verify import ReportDisagreement
from chanbank.plan import ChannelPlan
from chanbank.plots.activity import plot_activity
from chanbank.plots.sheet import summary_sheet
from chanbank.plots.tradeoff import plot_tradeoff
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.equiripple import equiripple_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.recordings import open_recording
from chanbank.search.find import find_designs
from chanbank.search.specification import Specification
from chanbank.splitting import split_recording
from chanbank.synthesis.bank import SynthesisBank
from chanbank.synthesis.pair import prototype_pair

__all__ = [
    "given_bank",
    "given_pair",
    "given_plan",
    "given_recording",
    "keeping_apart",
    "megahertz",
    "plan_data",
    "plan_text",
    "propose",
    "report",
    "split",
]

_RIPPLE_DB = 0.1  # over the occupied band, of the prototypes that are designed here


def megahertz(hertz):
    """A place in the band, for people."""
    return f"{hertz / 1e6:.9g} MHz"


def given_recording(options):
    """The recording that the command names."""
    return open_recording(
        options.file,
        datatype=options.datatype,
        sample_rate=options.sample_rate,
        center_frequency=options.center_frequency,
        streams=options.streams,
        header_bytes=options.header_bytes,
        allow_truncated=options.allow_truncated,
    )


def given_plan(options, recording=None):
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


def plan_text(plan):
    """A plan in one line."""
    return (
        f"{plan.output_channels} channels, hop {plan.hop} (oversampling {plan.oversampling:.4g}), "
        f"each at {engineering(plan.channel_rate, 'S/s')}"
    )


def plan_data(plan):
    """A plan for JSON."""
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
    return keeping_apart(options, plan, options.rejection)


def keeping_apart(options, plan, rejection):
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


def given_bank(options, plan, prototype):
    """The analysis bank."""
    return AnalysisBank(plan, prototype, dtype=options.dtype)


def _progress(options):
    return not (options.quiet or options.json) and sys.stderr.isatty()


def propose(options):
    """The designs that meet a specification, and why nothing cheaper does."""
    _refuse_picture(options)
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
    if options.picture is not None:
        _draw(plot_tradeoff(found), options)
        lines.append(f"trade-off in {options.picture}")
    return "\n".join(lines), data, found.feasible


def _refuse_picture(options):
    """Refuse a place for a picture before any work."""
    if options.picture is not None:
        if not options.picture.lower().endswith((".pdf", ".png")):
            raise ValueError(f"picture must end in .pdf or .png; got {options.picture!r}")
        refuse_existing(options.picture, options.overwrite)


def _draw(ax, options):
    kind = options.picture[-3:].lower()
    with whole_file(options.picture, overwrite=options.overwrite) as file:
        ax.figure.savefig(file, format=kind)


def split(options):
    """One recording for each channel."""
    _refuse_picture(options)
    with given_recording(options) as recording:
        plan = given_plan(options, recording)
        result = split_recording(
            recording,
            given_bank(options, plan, _prototype(options, plan)),
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
    if options.picture is not None:
        _draw(plot_activity(result.activity, threshold_db=options.threshold_db), options)
    data = {"destination": options.destination, "plan": plan_data(plan), **result.to_dict()}
    if len(result):
        text = f"{result}\n{len(result)} channel recordings in {options.destination}"
    else:
        text = f"no channel rises {options.threshold_db:g} dB above the noise: nothing written"
    return text, data, len(result) > 0


def report(options):
    """Every figure of a bank, and the limits it must meet."""
    plan = given_plan(options)
    prototype, synthesis = given_pair(options, plan)
    occupied = _occupied(options, plan)
    found = bank_report(
        plan, prototype, synthesis, occupied_bandwidth=occupied, dtype=options.dtype
    )
    lines, data, met = [], {}, True
    if options.measured:
        back = None if synthesis is None else SynthesisBank(plan, synthesis, dtype=options.dtype)
        measured = measured_report(
            given_bank(options, plan, prototype), back, occupied_bandwidth=occupied
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
    if options.sheet is not None:
        summary_sheet(found, options.sheet, overwrite=options.overwrite)
        lines.append(f"summary sheet in {options.sheet}")
    if options.save is not None:
        lines.append(f"prototype in {prototype.save(options.save, overwrite=options.overwrite)}")
    return "\n".join(lines), data, met


def given_pair(options, plan):
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
