"""The synthesis bank against the direct sum, and its streaming promises."""

import math
import pickle

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from oracles import overlap_add, random_signal

from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank, boxcar_prototype

EPS = {"complex64": 2.0**-23, "complex128": 2.0**-52}


def random_frames(rng, shape, dtype):
    return (rng.standard_normal(shape) + 1j * rng.standard_normal(shape)).astype(dtype)


GEOMETRIES = [
    (1, 1, 1),
    (1, 1, 5),
    (2, 1, 7),
    (3, 2, 3),
    (3, 3, 10),
    (4, 3, 1),
    (5, 4, 23),
    (7, 7, 20),
    (8, 4, 32),
    (8, 6, 31),
    (12, 8, 60),
    (16, 11, 50),
    (17, 16, 5),
    (24, 18, 100),
]


@pytest.mark.parametrize("dtype", ["complex64", "complex128"])
@pytest.mark.parametrize("geometry", GEOMETRIES, ids=lambda g: "-".join(map(str, g)))
def test_equals_the_direct_sum(geometry, dtype):
    channels, hop, length = geometry
    rng = np.random.default_rng(geometry)
    taps = rng.standard_normal(length)
    for offset in (0, 0.5, math.pi / 7, -3):
        for real in (False, True):
            if real and (2 * offset) % 1:
                continue
            for phase in ("absolute", "frame"):
                plan = ChannelPlan(1.0, channels, hop, offset=offset, real=real)
                delay = int(rng.integers(0, 3 * channels + 2))
                gains = rng.standard_normal(plan.output_channels)
                frames = random_frames(rng, (9, plan.output_channels), dtype)
                bank = SynthesisBank(
                    plan,
                    Prototype(taps, channels),
                    pair_delay=delay,
                    dtype=dtype,
                    phase=phase,
                    gains=gains,
                )
                got = bank(frames)
                wanted = overlap_add(frames, plan, taps, delay, phase=phase, gains=gains)
                assert got.dtype == bank.sample_dtype
                assert got.shape == wanted.shape
                # Every output sums at most reach * M products; errors add like a random walk
                # with the DFT's log M, far below 4 eps sqrt(M reach) times the largest frame.
                reach = -(-length // hop)
                scale = np.abs(frames).max() * np.abs(gains).max() * np.abs(taps).max()
                bound = 8 * EPS[dtype] * channels * reach * scale
                assert np.abs(got - wanted).max() < bound


@settings(max_examples=50, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    channels=st.integers(1, 30),
    dtype=st.sampled_from(["complex64", "complex128"]),
    real=st.booleans(),
    workers=st.integers(1, 3),
    layout=st.sampled_from(["frames", "channels"]),
    offset=st.sampled_from([0, 0.5]),
    phase=st.sampled_from(["absolute", "frame"]),
)
def test_any_split_gives_the_same_bits(seed, channels, dtype, real, workers, layout, offset, phase):
    rng = np.random.default_rng(seed)
    hop = int(rng.integers(1, channels + 1))
    plan = ChannelPlan(1.0, channels, hop, real=real, offset=offset)
    prototype = Prototype(rng.standard_normal(int(rng.integers(1, 5 * channels))), channels)
    frames = random_frames(rng, (2, int(rng.integers(0, 60)), plan.output_channels), dtype)
    whole = SynthesisBank(plan, prototype, pair_delay=5, dtype=dtype, phase=phase)(frames)
    bank = SynthesisBank(
        plan, prototype, pair_delay=5, dtype=dtype, workers=workers, layout=layout, phase=phase
    )
    cuts = np.sort(rng.integers(0, frames.shape[1] + 1, int(rng.integers(0, 8))))
    pieces = []
    for part in np.split(frames, cuts, axis=1):
        pieces.append(bank.push(part if layout == "frames" else part.transpose(0, 2, 1)))
        assert pieces[-1].shape == (2, part.shape[1] * hop)
    pieces.append(bank.finish())
    assert np.array_equal(np.concatenate(pieces, axis=1), whole)


@pytest.mark.parametrize("real", [False, True])
@pytest.mark.parametrize("offset", [0, 0.5, 1 / 3])
def test_critical_boxcar_pair_is_the_identity(real, offset):
    if real and (2 * offset) % 1:
        return
    rng = np.random.default_rng(1)
    for channels in (1, 2, 7, 8):
        plan = ChannelPlan(1.0, channels, channels, real=real, offset=offset)
        x = random_signal(rng, 101, plan, "complex128")
        analysis = AnalysisBank(plan, boxcar_prototype(channels), dtype="complex128")
        synthesis = SynthesisBank(
            plan,
            Prototype(np.ones(channels), channels),
            pair_delay=channels - 1,
            dtype="complex128",
        )
        assert np.abs(synthesis(analysis(x), length=101) - x).max() < 1e-14 * channels
        assert synthesis.delay == channels - 1


def test_late_start_keeps_the_phase():
    rng = np.random.default_rng(2)
    plan = ChannelPlan(1.0, 8, 8, offset=0.3)
    first = 10**12
    x = random_signal(rng, 80, plan, "complex128")
    analysis = AnalysisBank(plan, boxcar_prototype(8), dtype="complex128")
    synthesis = SynthesisBank(plan, Prototype(np.ones(8), 8), pair_delay=7, dtype="complex128")
    analysis.reset(first)
    synthesis.reset(analysis.next_frame)
    assert synthesis.next_sample == first
    frames = np.concatenate([analysis.push(x), analysis.finish()])
    z = np.concatenate([synthesis.push(frames), synthesis.finish()])
    assert np.abs(z[7 : 7 + 80] - x).max() < 1e-13


def test_gains_may_change_between_pushes():
    rng = np.random.default_rng(3)
    plan = ChannelPlan(1.0, 6, 3)
    prototype = Prototype(rng.standard_normal(3), 6)  # one hop long: frames do not overlap
    frames = random_frames(rng, (4, 6), "complex128")
    bank = SynthesisBank(plan, prototype, pair_delay=0, dtype="complex128")
    plain = bank(frames)
    pieces = [bank.push(frames[:2])]
    bank.gains = np.full(6, 2j)
    pieces.append(bank.push(frames[2:]))
    bank.gains = None
    got = np.concatenate(pieces)
    assert np.abs(got - np.concatenate([plain[:6], 2j * plain[6:]])).max() < 1e-13
    bank.gains = [0, 1, 0, 0, 0, 0]
    muted = frames * np.array([0, 1, 0, 0, 0, 0])
    assert (
        np.abs(
            bank(frames) - SynthesisBank(plan, prototype, pair_delay=0, dtype="complex128")(muted)
        ).max()
        < 1e-13
    )
    assert not bank.gains.flags.writeable


def test_refusals():
    plan = ChannelPlan(1.0, 6, 3)
    ones = Prototype(np.ones(6), 6)
    with pytest.raises(ValueError, match="pair_delay must be given"):
        SynthesisBank(plan, ones)
    with pytest.raises(ValueError, match="prototype for 4"):
        SynthesisBank(plan, Prototype(np.ones(4), 4), pair_delay=1)
    with pytest.raises(ValueError, match="multiple of 1/2"):
        SynthesisBank(ChannelPlan(1.0, 6, 3, real=True, offset=0.3), ones, pair_delay=1)
    other = Prototype(np.ones(6), 6, design={"hop": 2})
    with pytest.raises(ValueError, match=r"plan of hop 3 .* at hop 2"):
        SynthesisBank(plan, other, pair_delay=1)
    bank = SynthesisBank(plan, ones, pair_delay=5)
    before = pickle.dumps(bank)
    for frames, error, word in (
        (np.ones((2, 5), "complex64"), ValueError, "6 channels"),
        (np.ones(6, "complex64"), ValueError, "6 channels"),
        (np.ones((2, 6), "complex128"), TypeError, "complex128"),
        (np.ones((2, 6), int), TypeError, "frames"),
    ):
        with pytest.raises(error, match=word):
            bank.push(frames)
    with pytest.raises(ValueError, match=r"at most 4, since 2 frames"):
        bank(np.ones((2, 6), "complex64"), length=5)
    for gains, error in (([1.0] * 5, ValueError), ([np.inf] * 6, ValueError), ("x", TypeError)):
        with pytest.raises(error, match="gains"):
            bank.gains = gains
    assert pickle.dumps(bank) == before
    bank.push(np.ones((2, 3, 6), "complex64"))
    with pytest.raises(ValueError, match="leading axes"):
        bank.push(np.ones((3, 6), "complex64"))
    bank.finish()
    with pytest.raises(RuntimeError, match="reset"):
        bank.push(np.ones((2, 3, 6), "complex64"))
    with pytest.raises(RuntimeError, match="reset"):
        bank.finish()


def test_out_and_single_precision():
    plan = ChannelPlan(1.0, 6, 4)
    bank = SynthesisBank(plan, Prototype(np.ones(12), 6), pair_delay=5)
    frames = np.ones((5, 6), "complex64")
    out = np.empty(20, "complex64")
    assert bank.push(frames, out=out) is out
    tail = np.empty(8, "complex64")
    assert bank.finish(out=tail) is tail
    whole = np.empty(28, "complex64")
    assert bank(frames, out=whole) is whole
    assert np.array_equal(np.concatenate([out, tail]), whole)
    with pytest.raises(ValueError, match="out"):
        bank(frames, out=np.empty(27, "complex64"))


def test_pickle_continues_the_stream():
    rng = np.random.default_rng(4)
    plan = ChannelPlan(1.0, 6, 4)
    bank = SynthesisBank(
        plan, Prototype(rng.standard_normal(20), 6), pair_delay=9, gains=np.arange(6)
    )
    frames = random_frames(rng, (9, 6), "complex64")
    bank.push(frames[:4])
    twin = pickle.loads(pickle.dumps(bank))
    for other in (bank, twin):
        other.kept = [other.push(frames[4:]), other.finish()]
    assert all(np.array_equal(a, b) for a, b in zip(bank.kept, twin.kept, strict=True))
    assert "pair_delay=9" in repr(twin)
    assert "6 gains" in repr(twin)
