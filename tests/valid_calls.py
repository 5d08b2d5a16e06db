"""One valid call of every public callable that takes parameters, for the sweep of bad values."""

import inspect

import numpy as np

import chanbank


def subjects():
    """(name, function) of every public function, constructor and method."""
    for name in chanbank.__all__:
        thing = getattr(chanbank, name)
        if inspect.isclass(thing):
            if issubclass(thing, BaseException):
                continue
            if inspect.isfunction(thing.__init__):
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
}
