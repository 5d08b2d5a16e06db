"""Every public parameter has a rule, and every rule refuses what it must, by name."""

import copy
import inspect
import pickle
from fractions import Fraction

import numpy as np
import pytest
from valid_calls import VALID, subjects

import chanbank
from chanbank import _checks


def rules_of(function):
    return getattr(function, "parameter_rules", None)


SUBJECTS = list(subjects())


@pytest.mark.parametrize("name, function", SUBJECTS, ids=[name for name, _ in SUBJECTS])
def test_every_public_parameter_has_a_rule(name, function):
    parameters = [
        parameter.name
        for parameter in inspect.signature(function).parameters.values()
        if parameter.name not in ("self", "cls")
    ]
    if not parameters:
        return
    rules = rules_of(function)
    assert rules is not None, f"{name} declares no rules"
    assert set(rules) == set(parameters)
    for parameter in parameters:
        rule = rules[parameter]
        assert rule.accepted, f"{name}({parameter}) does not say what it accepts"
        unbounded = isinstance(rule, _checks.OwnCheck) or "any object" in rule.accepted
        assert rule.violations() or unbounded, f"{name}({parameter}) refuses nothing"


def violations():
    for name, function in SUBJECTS:
        for parameter, rule in (rules_of(function) or {}).items():
            for index, (value, error) in enumerate(rule.violations()):
                yield pytest.param(name, parameter, value, error, id=f"{name}-{parameter}-{index}")


@pytest.mark.parametrize("name, parameter, value, error", list(violations()))
def test_a_bad_value_is_refused_by_name(name, parameter, value, error, tmp_path):
    call, arguments = VALID[name](tmp_path)
    arguments = {**arguments, parameter: value}
    before = sorted(path.name for path in tmp_path.iterdir())
    with pytest.raises(error) as caught:
        call(**arguments)
    text = str(caught.value)
    assert parameter in text, text
    assert len(text) > len(parameter) + 10
    assert sorted(path.name for path in tmp_path.iterdir()) == before


@pytest.mark.parametrize("name", sorted(VALID))
def test_the_valid_call_is_valid(name, tmp_path):
    call, arguments = VALID[name](tmp_path)
    call(**arguments)


def test_the_sweep_covers_every_subject():
    assert set(VALID) == {name for name, function in SUBJECTS if rules_of(function)}


@pytest.mark.parametrize(
    "rule, good, canonical",
    [
        (_checks.Integer(1, 9), np.int64(3), 3),
        (_checks.Integer(), -(10**20), -(10**20)),
        (_checks.Real(0, 1), np.float32(0.5), 0.5),
        (_checks.Real(above=0), 3, 3.0),
        (_checks.Rational(above=0), "25000/3", Fraction(25000, 3)),
        (_checks.Rational(), 0.1, Fraction(0.1)),
        (_checks.Boolean(), np.True_, True),
        (_checks.Choice("a", "b"), "b", "b"),
        (_checks.Optional(_checks.Integer(0)), None, None),
    ],
)
def test_canonical_values(rule, good, canonical):
    value = rule.check("it", good)
    assert value == canonical
    assert type(value) is type(canonical)


def test_arrays_are_copied_and_frozen():
    source = np.arange(3)
    kept = _checks.Array(1).check("taps", source)
    source[0] = 9
    assert kept.tolist() == [0.0, 1.0, 2.0]
    assert not kept.flags.writeable
    with pytest.raises(ValueError, match=r"taps .* element 1 is nan"):
        _checks.Array(1).check("taps", [0.0, np.nan])


def test_messages_say_parameter_rule_and_value():
    with pytest.raises(ValueError, match=r"^hop must be an integer from 1 to 1048576; got 0$"):
        chanbank.ChannelPlan(1.0, 8, 0)
    with pytest.raises(TypeError, match=r"^hop must be an integer .* got 1.5 \(float\)$"):
        chanbank.ChannelPlan(1.0, 8, 1.5)


def test_prototype_round_trips(tmp_path):
    prototype = chanbank.Prototype(
        [0.25, 0.5, 0.25], 2, label="hat", design={"method": "hand"}, pair_delay=3
    )
    path = prototype.save(tmp_path / "hat")
    assert path.endswith("hat.npz")
    for twin in (
        chanbank.Prototype.load(path),
        pickle.loads(pickle.dumps(prototype)),
        copy.deepcopy(prototype),
    ):
        assert twin == prototype
        assert twin.pair_delay == 3
        assert twin.design == {"method": "hand"}
        assert not twin.taps.flags.writeable
    with pytest.raises(FileExistsError, match="overwrite"):
        prototype.save(path)
    prototype.save(path, overwrite=True)
    (tmp_path / "junk.npz").write_bytes(b"PK\x03\x04 not a zip")
    np.savez(tmp_path / "other.npz", x=1)
    for name, word in (("junk.npz", "not a prototype file"), ("other.npz", "expected format")):
        with pytest.raises(ValueError, match=word):
            chanbank.Prototype.load(tmp_path / name)
    with pytest.raises(FileNotFoundError):
        chanbank.Prototype.load(tmp_path / "none.npz")


@pytest.mark.parametrize(
    "taps, delay",
    [
        ([1.0], 0.0),
        ([1.0, 1.0], 0.5),
        ([0.0, 1.0, 2.0, 1.0], 2.0),  # symmetric about a tap, its first tap zero
        ([1.0, 0.5, 0.25], 1 / 1.75),
        ([1.0, -1.0], 0.5),  # no gain at zero frequency: the centre of energy
    ],
)
def test_prototype_delay(taps, delay):
    assert chanbank.Prototype(taps, 2).delay == pytest.approx(delay, abs=1e-15)


def test_prototype_response_is_the_direct_sum():
    rng = np.random.default_rng(1)
    taps = rng.standard_normal(1001)
    frequencies = rng.uniform(-20, 20, (3, 7))
    wanted = np.sum(
        taps * np.exp(-2j * np.pi * frequencies[..., None] * np.arange(1001) / 16), axis=-1
    )
    got = chanbank.Prototype(taps, 16).response(frequencies)
    # Phases of up to 1250 turns carry 1250 eps each in the direct sum.
    assert np.abs(got - wanted).max() < 1250 * 2 * np.pi * 2.3e-16 * np.abs(taps).sum()
    assert chanbank.Prototype(taps, 16).branches().shape == (16, 63)


def test_long_prototypes_keep_their_nulls():
    # Phases of whole spacings are reduced in integers: a quarter of a million equal taps cancel to
    # the rounding of their sum, which block-wise products carry as sqrt(512) eps / 2 or so.
    response = chanbank.boxcar_prototype(1 << 18).response([1, 1000, -77_777, 1 << 17])
    assert np.abs(response).max() < 3e-15
