"""One valid call of every public callable that takes parameters, for the sweep of bad values."""

import functools
import inspect

import numpy as np

import chanbank

# Objects that the library makes and hands out; a user never constructs one.
RESULTS = {
    "Activity",
    "Annotation",
    "BankReport",
    "ChannelRecording",
    "Design",
    "DesignSearch",
    "FixedPointFrames",
    "FrameBounds",
    "LimitCheck",
    "NoiseReport",
    "QuantisedPrototype",
    "Recording",
    "ReportComparison",
    "Segment",
    "SplitResult",
}


def subjects():
    """(name, function) of every public function, constructor and method."""
    for name in chanbank.__all__:
        thing = getattr(chanbank, name)
        if inspect.isclass(thing):
            if issubclass(thing, BaseException):
                continue
            if name not in RESULTS and inspect.isfunction(thing.__init__):
                yield name, thing.__init__
            for key, member in sorted(vars(thing).items()):
                if key.startswith("_") and key != "__call__":
                    continue
                if isinstance(member, (classmethod, staticmethod)):
                    yield f"{name}.{key}", member.__func__
                elif inspect.isfunction(member):
                    yield f"{name}.{key}", member
        elif callable(thing):
            yield name, thing


def plan():
    return chanbank.ChannelPlan(8.0, 8, 4)


def bank(tmp_path=None):
    return chanbank.AnalysisBank(plan(), chanbank.boxcar_prototype(8))


def back():
    return chanbank.SynthesisBank(plan(), chanbank.Prototype(np.ones(8), 8), pair_delay=7)


def saved(tmp_path):
    return chanbank.boxcar_prototype(8).save(tmp_path / "saved.npz")


def recorded(tmp_path):
    """A short SigMF recording of noise, opened."""
    rng = np.random.default_rng(1)
    noise = (rng.standard_normal(400) + 1j * rng.standard_normal(400)).astype("complex64")
    path = tmp_path / "quay"
    chanbank.write_sigmf(path, noise, sample_rate=8.0)
    return chanbank.open_recording(path)


def activity(tmp_path):
    return chanbank.measure_activity(recorded(tmp_path), bank())


def writer(tmp_path):
    made = chanbank.SigMFWriter(tmp_path / "new", "cf32_le", sample_rate=8.0)
    made.write(X)
    return made


def npy_writer(tmp_path):
    return chanbank.NpyWriter(tmp_path / "new.npy", "complex64")


def raw_file(tmp_path):
    path = tmp_path / "raw.bin"
    X.tofile(path)
    return path


def report():
    return chanbank.bank_report(plan(), chanbank.window_prototype(8, 4, "hann"))


def fold_limits(**limits):
    """`Limits` takes names of figures; the sweep hands it one parameter called `limits`."""
    return chanbank.Limits(**{"latency_seconds": 1e6, **limits})


@functools.cache
def pair():
    return chanbank.prototype_pair(plan(), 3)


def combiner():
    return chanbank.ChannelCombiner(plan(), pair()[1], 2, 3)


def specification():
    return chanbank.Specification(200e3, 25e3, occupied_bandwidth=16e3, neighbour_rejection=40)


@functools.cache
def search():
    return chanbank.find_designs(specification(), progress=False)


def design():
    return search().designs[0]


def paired_report():
    return chanbank.bank_report(plan(), *pair())


def coefficients():
    return chanbank.quantised(chanbank.window_prototype(8, 4, "hann"), 12)


def fixed_bank():
    return chanbank.FixedPointBank(plan(), coefficients())


X = np.ones(12, "complex64")
Y = np.ones((3, 8), "complex64")

VALID = {
    "ChannelPlan": lambda _: (
        chanbank.ChannelPlan,
        {"sample_rate": 8.0, "channels": 8, "hop": 4},
    ),
    "ChannelPlan.from_spacing": lambda _: (
        chanbank.ChannelPlan.from_spacing,
        {"sample_rate": 8.0, "spacing": 1.0, "oversampling": 2},
    ),
    "ChannelPlan.index_of": lambda _: (plan().index_of, {"frequency": 1.0}),
    "Prototype": lambda _: (chanbank.Prototype, {"taps": [1.0, 2.0], "channels": 2}),
    "Prototype.response": lambda _: (
        chanbank.boxcar_prototype(4).response,
        {"frequencies": [0.0, 1.0]},
    ),
    "Prototype.save": lambda tmp: (chanbank.boxcar_prototype(4).save, {"path": tmp / "h.npz"}),
    "Prototype.load": lambda tmp: (chanbank.Prototype.load, {"path": saved(tmp)}),
    "boxcar_prototype": lambda _: (chanbank.boxcar_prototype, {"channels": 4}),
    "AnalysisBank": lambda _: (
        chanbank.AnalysisBank,
        {"plan": plan(), "prototype": chanbank.boxcar_prototype(8)},
    ),
    "AnalysisBank.__call__": lambda _: (bank(), {"samples": X}),
    "AnalysisBank.push": lambda _: (bank().push, {"samples": X}),
    "AnalysisBank.finish": lambda _: (bank().finish, {"out": None}),
    "AnalysisBank.skip": lambda _: (bank().skip, {"count": 3}),
    "AnalysisBank.reset": lambda _: (bank().reset, {"first_sample": 3}),
    "AnalysisBank.frame_count": lambda _: (bank().frame_count, {"samples": 3}),
    "AnalysisBank.frame_times": lambda _: (bank().frame_times, {"first": 0, "count": 3}),
    "SynthesisBank": lambda _: (
        chanbank.SynthesisBank,
        {"plan": plan(), "prototype": chanbank.Prototype(np.ones(8), 8), "pair_delay": 7},
    ),
    "SynthesisBank.__call__": lambda _: (back(), {"frames": Y}),
    "SynthesisBank.push": lambda _: (back().push, {"frames": Y}),
    "SynthesisBank.finish": lambda _: (back().finish, {"out": None}),
    "SynthesisBank.reset": lambda _: (back().reset, {"first_frame": 3}),
    "Activity.active": lambda tmp: (activity(tmp).active, {"threshold_db": 10.0}),
    "Activity.duty": lambda tmp: (activity(tmp).duty, {"threshold_db": 10.0}),
    "NpyWriter": lambda tmp: (
        chanbank.NpyWriter,
        {"path": tmp / "new.npy", "dtype": "complex64"},
    ),
    "NpyWriter.write": lambda tmp: (npy_writer(tmp).write, {"samples": X}),
    "Recording.blocks": lambda tmp: (recorded(tmp).blocks, {"size": 10}),
    "Recording.read": lambda tmp: (recorded(tmp).read, {"start": 1, "count": 10}),
    "SigMFWriter": lambda tmp: (
        chanbank.SigMFWriter,
        {"path": tmp / "new", "datatype": "cf32_le", "sample_rate": 8.0},
    ),
    "SigMFWriter.adopt": lambda tmp: (
        chanbank.SigMFWriter(tmp / "new", "cf32_le", sample_rate=8.0).adopt,
        {"path": raw_file(tmp)},
    ),
    "SigMFWriter.annotate": lambda tmp: (writer(tmp).annotate, {"start": 0, "length": 3}),
    "SigMFWriter.capture": lambda tmp: (writer(tmp).capture, {"center_frequency": 1e6}),
    "SigMFWriter.write": lambda tmp: (writer(tmp).write, {"samples": X}),
    "bank_report": lambda _: (
        chanbank.bank_report,
        {"plan": plan(), "prototype": chanbank.boxcar_prototype(8)},
    ),
    "compare_reports": lambda _: (chanbank.compare_reports, {"reports": [report(), report()]}),
    "dual_prototype": lambda _: (
        chanbank.dual_prototype,
        {"plan": plan(), "prototype": chanbank.window_prototype(8, 4, "hann")},
    ),
    "energy_prototype": lambda _: (
        chanbank.energy_prototype,
        {"channels": 8, "taps_per_branch": 4, "stopband": 1.0},
    ),
    "equiripple_prototype": lambda _: (
        chanbank.equiripple_prototype,
        {"channels": 8, "taps_per_branch": 4, "passband": 0.3, "stopband": 1.0},
    ),
    "frame_bounds": lambda _: (
        chanbank.frame_bounds,
        {"plan": plan(), "prototype": chanbank.boxcar_prototype(8)},
    ),
    "kaiser_prototype": lambda _: (
        chanbank.kaiser_prototype,
        {"channels": 8, "stopband_db": 40, "passband": 0.3, "stopband": 1.0},
    ),
    "length_estimates": lambda _: (
        chanbank.length_estimates,
        {"channels": 8, "passband": 0.3, "stopband": 1.0, "passband_db": 0.1, "stopband_db": 40},
    ),
    "measure_activity": lambda tmp: (
        chanbank.measure_activity,
        {"recording": recorded(tmp), "bank": bank()},
    ),
    "measured_report": lambda _: (chanbank.measured_report, {"analysis": bank()}),
    "nyquist_prototype": lambda _: (
        chanbank.nyquist_prototype,
        {"channels": 8, "taps_per_branch": 4},
    ),
    "open_recording": lambda tmp: (
        chanbank.open_recording,
        {"path": raw_file(tmp), "datatype": "cf32_le"},
    ),
    "prototype_pair": lambda _: (
        chanbank.prototype_pair,
        {"plan": plan(), "taps_per_branch": 3},
    ),
    "split_recording": lambda tmp: (
        chanbank.split_recording,
        {
            "recording": recorded(tmp),
            "bank": bank(),
            "destination": tmp / "channels",
            "progress": False,
        },
    ),
    "tight_prototype": lambda _: (
        chanbank.tight_prototype,
        {"plan": plan(), "taps_per_branch": 4},
    ),
    "window_prototype": lambda _: (
        chanbank.window_prototype,
        {"channels": 8, "taps_per_branch": 4, "window": "hann"},
    ),
    "write_sigmf": lambda tmp: (
        chanbank.write_sigmf,
        {"path": tmp / "new", "samples": X, "sample_rate": 8.0},
    ),
    "BankReport.from_dict": lambda _: (
        chanbank.BankReport.from_dict,
        {"held": report().to_dict()},
    ),
    "BankReport.table": lambda _: (report().table, {"absent": True}),
    "BankReport.verify": lambda _: (report().verify, {"other": report()}),
    "BlockInverse": lambda _: (
        chanbank.BlockInverse,
        {
            "plan": chanbank.ChannelPlan(8.0, 8, 8),
            "prototype": chanbank.window_prototype(8, 4, "hann"),
            "frames": 12,
        },
    ),
    "BlockInverse.__call__": lambda _: (
        chanbank.BlockInverse(
            chanbank.ChannelPlan(8.0, 8, 8), chanbank.window_prototype(8, 4, "hann"), 12
        ),
        {"frames": np.ones((12, 8), "complex64")},
    ),
    "BlockInverse.within": lambda _: (
        chanbank.BlockInverse(
            chanbank.ChannelPlan(8.0, 8, 8), chanbank.window_prototype(8, 4, "hann"), 12
        ).within,
        {"level_db": -40.0},
    ),
    "ChannelCombiner": lambda _: (
        chanbank.ChannelCombiner,
        {"plan": plan(), "prototype": pair()[1], "first": 2, "count": 3},
    ),
    "ChannelCombiner.__call__": lambda _: (combiner(), {"frames": Y}),
    "ChannelCombiner.push": lambda _: (combiner().push, {"frames": Y}),
    "combine_channels": lambda _: (
        chanbank.combine_channels,
        {"frames": Y, "plan": plan(), "prototype": pair()[1], "first": 2, "count": 3},
    ),
    "noise_gain": lambda _: (
        chanbank.noise_gain,
        {"plan": plan(), "analysis": pair()[0], "synthesis": pair()[1]},
    ),
    "white_error": lambda _: (
        chanbank.white_error,
        {"plan": plan(), "analysis": pair()[0], "synthesis": pair()[1]},
    ),
    "Limits": lambda _: (fold_limits, {}),
    "Limits.check": lambda _: (chanbank.Limits(latency_seconds=9).check, {"report": report()}),
    "FixedPointBank": lambda _: (
        chanbank.FixedPointBank,
        {"plan": plan(), "coefficients": coefficients()},
    ),
    "FixedPointBank.__call__": lambda _: (fixed_bank(), {"samples": 0.1 * X}),
    "FixedPointBank.noise": lambda _: (fixed_bank().noise, {"samples": 0.1 * X}),
    "FixedPointBank.quantise": lambda _: (fixed_bank().quantise, {"samples": 0.1 * X}),
    "QuantisedPrototype.compare": lambda _: (coefficients().compare, {"plan": plan()}),
    "QuantisedPrototype.reports": lambda _: (coefficients().reports, {"plan": plan()}),
    "Specification": lambda _: (
        chanbank.Specification,
        {"sample_rate": 200e3, "spacing": 25e3},
    ),
    "dft_rounding_db": lambda _: (chanbank.dft_rounding_db, {"points": 8, "bits": 16}),
    "export_coefficients": lambda tmp: (
        chanbank.export_coefficients,
        {"coefficients": coefficients(), "path": tmp / "taps.csv"},
    ),
    "find_designs": lambda _: (
        chanbank.find_designs,
        {"specification": specification(), "progress": False},
    ),
    "quantised": lambda _: (
        chanbank.quantised,
        {"prototype": chanbank.window_prototype(8, 4, "hann"), "bits": 12},
    ),
    "rounding_floor_db": lambda _: (
        chanbank.rounding_floor_db,
        {"prototype": chanbank.window_prototype(8, 4, "hann"), "bits": 12},
    ),
    "word_length": lambda _: (
        chanbank.word_length,
        {"prototype": chanbank.window_prototype(8, 4, "hann"), "stopband": 1.5, "stopband_db": 40},
    ),
    "Design.measured": lambda _: (design().measured, {"seed": 1}),
    "Specification.bandwidth": lambda _: (specification().bandwidth, {"plan": plan()}),
    "Specification.plans": lambda _: (specification().plans, {"channels": 8}),
    "plot_activity": lambda tmp: (chanbank.plot_activity, {"activity": activity(tmp)}),
    "plot_channels": lambda _: (
        chanbank.plot_channels,
        {"plan": plan(), "prototype": chanbank.boxcar_prototype(8)},
    ),
    "plot_distortion": lambda _: (chanbank.plot_distortion, {"report": paired_report()}),
    "plot_error": lambda _: (chanbank.plot_error, {"report": paired_report()}),
    "plot_leakage": lambda _: (chanbank.plot_leakage, {"report": report()}),
    "plot_prototype": lambda _: (
        chanbank.plot_prototype,
        {"prototype": chanbank.boxcar_prototype(8)},
    ),
    "plot_tradeoff": lambda _: (chanbank.plot_tradeoff, {"search": search()}),
    "summary_sheet": lambda tmp: (
        chanbank.summary_sheet,
        {"report": report(), "path": tmp / "sheet.png"},
    ),
}
