"""The analysis bank against SciPy's decimating filter on the mixed signal."""

import copy
import math
import pickle
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from oracles import down_converters, random_signal

from chanbank import AnalysisBank, ChannelPlan, Prototype, boxcar_prototype

# Error over sum(abs(h)) * max(abs(x)): some ten roundings of the fold, the DFT and the mixer.
BOUND = {"complex64": 5e-7, "complex128": 5e-15}

GEOMETRIES = [
    # channels, hop, prototype length, samples
    (1, 1, 1, 9),
    (1, 1, 7, 20),
    (2, 1, 5, 30),
    (2, 2, 4, 31),
    (3, 1, 10, 40),
    (3, 2, 3, 41),
    (3, 3, 8, 1),
    (4, 1, 16, 50),
    (4, 2, 13, 7),
    (4, 3, 32, 100),
    (4, 4, 1, 33),
    (5, 1, 23, 60),
    (5, 3, 25, 61),
    (5, 5, 26, 62),
    (6, 1, 30, 64),
    (6, 4, 29, 65),
    (6, 5, 36, 66),
    (7, 2, 50, 100),
    (7, 6, 49, 3),
    (7, 7, 48, 200),
    (8, 1, 64, 120),
    (8, 3, 65, 121),
    (8, 4, 63, 122),
    (8, 5, 8, 123),
    (8, 6, 100, 250),
    (8, 8, 96, 251),
    (9, 6, 40, 130),
    (9, 9, 81, 131),
    (10, 4, 77, 132),
    (11, 8, 99, 300),
    (12, 8, 97, 301),
    (12, 9, 144, 302),
    (12, 12, 12, 11),
    (13, 1, 50, 90),
    (13, 12, 130, 303),
    (15, 10, 150, 304),
    (16, 1, 64, 70),
    (16, 8, 128, 400),
    (16, 11, 127, 401),
    (16, 12, 256, 402),
    (16, 16, 129, 403),
    (17, 5, 170, 404),
    (20, 15, 200, 405),
    (24, 16, 190, 406),
    (25, 15, 251, 407),
    (27, 18, 270, 408),
    (30, 20, 360, 409),
    (31, 30, 310, 410),
    (32, 24, 256, 500),
    (32, 32, 512, 501),
    (35, 21, 300, 502),
    (36, 27, 400, 503),
    (48, 32, 481, 504),
    (49, 42, 490, 505),
    (60, 45, 600, 700),
    (64, 1, 130, 140),
    (64, 48, 768, 900),
    (64, 63, 640, 901),
    (96, 64, 960, 902),
    (97, 96, 970, 903),
    (100, 75, 1200, 904),
    (127, 64, 1000, 905),
    (128, 96, 1537, 906),
    (192, 128, 2304, 907),
    (257, 200, 2000, 2600),
    (288, 192, 100, 910),
]
OFFSETS = (0, 0.5, math.pi / 7)


def relative_error(got, wanted, taps, samples):
    scale = np.abs(taps).sum() * np.abs(samples).max(initial=0.0)
    return np.abs(got - wanted).max(initial=0.0) / (scale or 1.0)


def some_columns(plan, rng):
    count = plan.output_channels
    return sorted({0, count - 1, count // 2, *rng.integers(0, count, 4).tolist()})


@pytest.mark.parametrize("dtype", ["complex64", "complex128"])
@pytest.mark.parametrize("geometry", GEOMETRIES, ids=lambda g: "-".join(map(str, g)))
def test_equals_scipy_down_converters(geometry, dtype):
    channels, hop, length, count = geometry
    rng = np.random.default_rng(geometry)
    taps = rng.standard_normal(length)
    for offset in OFFSETS:
        for real in (False, True):
            plan = ChannelPlan(1.0, channels, hop, offset=offset, real=real)
            samples = random_signal(rng, count, plan, dtype)
            columns = some_columns(plan, rng)
            for phase in ("absolute", "frame"):
                bank = AnalysisBank(plan, Prototype(taps, channels), dtype=dtype, phase=phase)
                got = bank(samples)
                wanted = down_converters(samples, plan, taps, phase=phase, columns=columns)
                assert got.dtype == dtype
                assert got.shape == (-(-(count + length - 1) // hop), plan.output_channels)
                assert relative_error(got[:, columns], wanted, taps, samples) < BOUND[dtype]


@pytest.mark.parametrize("dtype", ["complex64", "complex128"])
@pytest.mark.parametrize("first", [1, 17, 10**12 + 7, -5])
def test_a_late_start_is_as_exact_as_sample_zero(first, dtype):
    rng = np.random.default_rng(5)
    for channels, hop, length in ((12, 8, 50), (7, 7, 33), (16, 11, 64)):
        taps = rng.standard_normal(length)
        for offset in (*OFFSETS, -2.75):
            for phase in ("absolute", "frame"):
                plan = ChannelPlan(1.0, channels, hop, offset=offset)
                samples = random_signal(rng, 200, plan, dtype)
                bank = AnalysisBank(plan, Prototype(taps, channels), dtype=dtype, phase=phase)
                bank.reset(first)
                got = np.concatenate([bank.push(samples), bank.finish()])
                wanted = down_converters(samples, plan, taps, phase=phase, first_sample=first)
                assert got.shape == wanted.shape
                assert relative_error(got, wanted, taps, samples) < BOUND[dtype]


@settings(max_examples=60, deadline=None)
@given(
    seed=st.integers(0, 2**32 - 1),
    channels=st.integers(1, 40),
    dtype=st.sampled_from(["complex64", "complex128", "int8", "uint8", "int16"]),
    real=st.booleans(),
    workers=st.integers(1, 3),
    layout=st.sampled_from(["frames", "channels"]),
    offset=st.sampled_from([0, 0.5, 0.3]),
)
def test_any_split_gives_the_same_bits(seed, channels, dtype, real, workers, layout, offset):
    rng = np.random.default_rng(seed)
    hop = int(rng.integers(1, channels + 1))
    length = int(rng.integers(1, 6 * channels))
    plan = ChannelPlan(1.0, channels, hop, offset=offset, real=real)
    work = dtype if dtype.startswith("complex") else "complex64"
    count = int(rng.integers(0, 40 * channels))
    if dtype == work:
        samples = random_signal(rng, count, plan, dtype)
        per = 1
    else:
        per = 1 if real else 2
        info = np.iinfo(dtype)
        samples = rng.integers(info.min, info.max + 1, count * per).astype(dtype)
    taps = Prototype(rng.standard_normal(length), channels)
    whole = AnalysisBank(plan, taps, dtype=work)(samples)
    bank = AnalysisBank(plan, taps, dtype=work, workers=workers, layout=layout)
    cuts = np.sort(rng.integers(0, count + 1, int(rng.integers(0, 12))))
    pieces = [bank.push(piece) for piece in np.split(samples, cuts * per)] + [bank.finish()]
    axis = 0 if layout == "frames" else 1
    joined = np.concatenate(pieces, axis=axis)
    assert np.array_equal(joined if layout == "frames" else joined.T, whole)
    one_call = bank(samples)
    assert np.array_equal(one_call if layout == "frames" else one_call.T, whole)


def test_long_signals_over_many_blocks_and_workers_give_the_same_bits():
    rng = np.random.default_rng(11)
    for channels, hop in ((16, 12), (1024, 768), (96, 96)):
        plan = ChannelPlan(1.0, channels, hop)
        prototype = Prototype(rng.standard_normal(8 * channels), channels)
        samples = random_signal(rng, 300_000, plan, "complex64")
        whole = AnalysisBank(plan, prototype)(samples)
        for workers in (2, 3):
            bank = AnalysisBank(plan, prototype, workers=workers)
            pieces = [bank.push(piece) for piece in np.split(samples, [1, 70_001, 140_000])]
            assert np.array_equal(np.concatenate([*pieces, bank.finish()]), whole)


def test_pushes_hold_nothing_back_and_counts_are_announced():
    plan = ChannelPlan(1.0, 8, 5)
    bank = AnalysisBank(plan, boxcar_prototype(8))
    total = frames = 0
    for size in (0, 1, 1, 4, 5, 13, 0, 2):
        announced = bank.frame_count(size)
        got = len(bank.push(np.ones(size, "float32")))
        total, frames = total + size, frames + got
        assert got == announced
        assert frames == -(-total // 5)
        assert (bank.next_sample, bank.next_frame) == (total, frames)


def test_skip_is_zeros():
    rng = np.random.default_rng(3)
    plan = ChannelPlan(1.0, 6, 4, offset=0.2)
    prototype = Prototype(rng.standard_normal(31), 6)
    samples = random_signal(rng, 90, plan, "complex128")
    for gap in (0, 1, 17, 200_000):
        bank = AnalysisBank(plan, prototype, dtype="complex128")
        got = [bank.push(samples[:40]), bank.skip(gap), bank.push(samples[40:]), bank.finish()]
        filled = np.concatenate([samples[:40], np.zeros(gap), samples[40:]])
        assert np.array_equal(
            np.concatenate(got), AnalysisBank(plan, prototype, dtype="complex128")(filled)
        )


def test_skip_before_the_first_samples_allows_any_antennas():
    plan = ChannelPlan(1.0, 4, 2)
    bank = AnalysisBank(plan, boxcar_prototype(4))
    bank.skip(3)
    assert bank.push(np.ones((2, 5), "float32")).shape == (2, 2, 4)


@pytest.mark.parametrize("layout", ["frames", "channels"])
def test_antennas_are_independent_and_keep_their_axes(layout):
    rng = np.random.default_rng(4)
    plan = ChannelPlan(1.0, 12, 8)
    prototype = Prototype(rng.standard_normal(60), 12)
    samples = random_signal(rng, (2, 3, 500), plan, "complex64")
    together = AnalysisBank(plan, prototype, layout=layout)
    got = np.concatenate(
        [together.push(samples[..., :77]), together.push(samples[..., 77:]), together.finish()],
        axis=-2 if layout == "frames" else -1,
    )
    for i in range(2):
        for j in range(3):
            alone = AnalysisBank(plan, prototype, layout=layout)(samples[i, j])
            assert np.array_equal(got[i, j], alone)
    assert np.array_equal(AnalysisBank(plan, prototype, layout=layout)(samples), got)


def test_a_subset_of_channels_in_any_order():
    rng = np.random.default_rng(6)
    for real in (False, True):
        for offset in (0, 0.5):
            plan = ChannelPlan(1.0, 16, 12, real=real, offset=offset)
            prototype = Prototype(rng.standard_normal(64), 16)
            samples = random_signal(rng, 300, plan, "complex64")
            every = AnalysisBank(plan, prototype)(samples)
            some = AnalysisBank(plan, prototype, select=[5, 0, 7])
            assert np.array_equal(some(samples), every[:, [5, 0, 7]])
            assert np.array_equal(some.frequencies, plan.frequencies[[5, 0, 7]])


@pytest.mark.parametrize("dtype", ["int8", "uint8", "int16"])
def test_integer_samples_are_scaled_to_full_scale_one(dtype):
    rng = np.random.default_rng(7)
    info = np.iinfo(dtype)
    zero = 128 if dtype == "uint8" else 0
    full = 32768 if dtype == "int16" else 128
    raw = rng.integers(info.min, info.max + 1, 800).astype(dtype)
    floats = (raw.astype("float64") - zero) / full
    prototype = Prototype(rng.standard_normal(50), 8)
    complex_plan, real_plan = ChannelPlan(1.0, 8, 6), ChannelPlan(1.0, 8, 6, real=True)
    pairs = (floats[0::2] + 1j * floats[1::2]).astype("complex64")
    # Integers of 16 bits and powers of two are exact in single precision: the same bits.
    assert np.array_equal(
        AnalysisBank(complex_plan, prototype)(raw), AnalysisBank(complex_plan, prototype)(pairs)
    )
    assert np.array_equal(
        AnalysisBank(real_plan, prototype)(raw),
        AnalysisBank(real_plan, prototype)(floats.astype("float32")),
    )
    louder = AnalysisBank(complex_plan, prototype, full_scale=full / 4)(raw)
    assert np.array_equal(louder, 4 * AnalysisBank(complex_plan, prototype)(pairs))


def test_real_tones_leave_with_half_their_amplitude():
    plan = ChannelPlan(1.0, 16, 4, real=True)
    bank = AnalysisBank(plan, boxcar_prototype(16), dtype="complex128")
    t = np.arange(400)
    for channel, level in ((0, 1.0), (3, 0.5), (8, 1.0)):
        frames = bank(np.cos(2 * np.pi * channel / 16 * t))
        assert abs(frames[50, channel]) == pytest.approx(level, abs=1e-13)
    assert plan.output_channels == frames.shape[1] == 9


def test_widening_and_refusing_precision():
    plan, prototype = ChannelPlan(1.0, 4, 2), boxcar_prototype(4)
    single = AnalysisBank(plan, prototype)
    double = AnalysisBank(plan, prototype, dtype="complex128")
    x = np.arange(20.0)
    assert single(x.astype("float32")).dtype == np.complex64
    assert double(x.astype("float32")).dtype == np.complex128
    assert double(x.astype("complex64")).dtype == np.complex128
    assert np.array_equal(single(x.astype("float16")), single(x.astype("float32")))
    assert np.array_equal(single(x.astype(">f4")), single(x.astype("<f4")))
    with pytest.raises(TypeError, match="complex128"):
        single(x)
    with pytest.raises(TypeError, match="complex128"):
        single(x + 0j)


def test_out_is_filled_and_checked():
    plan = ChannelPlan(1.0, 4, 3)
    bank = AnalysisBank(plan, boxcar_prototype(4))
    x = np.ones(10, "float32")
    out = np.empty((bank.frame_count(10), 4), "complex64")
    assert bank.push(x, out=out) is out
    whole = np.empty((5, 4), "complex64")
    assert bank(x, out=whole) is whole
    count = bank.frame_count(10)
    before = pickle.dumps(bank)
    bad = [
        (np.empty((count + 1, 4), "complex64"), ValueError, "shape"),
        (np.empty((count, 4), "complex128"), ValueError, "complex64"),
        (np.empty((4, count), "complex64").T, ValueError, "contiguous"),
        ([[0]], TypeError, "out"),
    ]
    frozen = np.empty((count, 4), "complex64")
    frozen.flags.writeable = False
    bad.append((frozen, ValueError, "read-only"))
    for wrong, error, word in bad:
        with pytest.raises(error, match=word):
            bank.push(x, out=wrong)
    assert pickle.dumps(bank) == before


def test_refusals_leave_the_stream_as_it_was():
    rng = np.random.default_rng(8)
    plan = ChannelPlan(1.0, 6, 4)
    prototype = Prototype(rng.standard_normal(20), 6)
    bank = AnalysisBank(plan, prototype)
    first = bank.push(np.ones((2, 9), "complex64"))
    for wrong, error in (
        (np.ones(9, "complex64"), ValueError),
        (np.ones((3, 9), "complex64"), ValueError),
        (np.ones((2, 9)), TypeError),
        (np.ones((2, 9), "int16"), ValueError),
        (np.ones((2, 9), "int32"), TypeError),
        (np.ones((2, 9), bool), TypeError),
        (np.float32(1), ValueError),
        ("samples", TypeError),
        (None, TypeError),
    ):
        with pytest.raises(error, match="samples"):
            bank.push(wrong)
    rest = [bank.push(np.ones((2, 7), "complex64")), bank.finish()]
    whole = AnalysisBank(plan, prototype)(np.ones((2, 16), "complex64"))
    assert np.array_equal(np.concatenate([first, *rest], axis=1), whole)
    for call in (
        lambda: bank.push(np.ones((2, 1), "complex64")),
        bank.finish,
        lambda: bank.skip(1),
    ):
        with pytest.raises(RuntimeError, match="reset"):
            call()
    bank.reset()
    assert bank.push(np.ones(4, "complex64")).shape == (1, 6)


def test_real_plans_refuse_complex_samples():
    bank = AnalysisBank(ChannelPlan(1.0, 4, 2, real=True), boxcar_prototype(4))
    with pytest.raises(TypeError, match="real"):
        bank(np.ones(4, "complex64"))


def test_plan_and_prototype_must_belong_together():
    with pytest.raises(ValueError, match=r"8.*4"):
        AnalysisBank(ChannelPlan(1.0, 8, 4), boxcar_prototype(4))


def test_inputs_are_not_modified_and_may_be_read_only_or_strided():
    rng = np.random.default_rng(9)
    plan = ChannelPlan(1.0, 6, 4, offset=0.3)
    bank = AnalysisBank(plan, boxcar_prototype(6))
    wide = random_signal(rng, 200, plan, "complex64")
    strided = wide[::2]
    kept = wide.copy()
    strided.flags.writeable = False
    assert np.array_equal(bank(strided), bank(strided.copy()))
    assert np.array_equal(wide, kept)


def test_results_are_fresh():
    bank = AnalysisBank(ChannelPlan(1.0, 6, 4), boxcar_prototype(6))
    first = bank.push(np.ones(30, "complex64"))
    kept = first.copy()
    bank.push(np.full(300, 7, "complex64"))
    assert np.array_equal(first, kept)


def test_pickles_and_copies_continue_the_stream():
    rng = np.random.default_rng(10)
    plan = ChannelPlan(48e3, 6, 4, offset="1/3")
    bank = AnalysisBank(
        plan, Prototype(rng.standard_normal(40), 6), phase="frame", layout="channels"
    )
    samples = random_signal(rng, 100, plan, "complex64")
    bank.push(samples[:33])
    twins = [pickle.loads(pickle.dumps(bank)), copy.deepcopy(bank)]
    wanted = [bank.push(samples[33:]), bank.finish()]
    for twin in twins:
        assert twin.plan == plan
        assert twin.plan.exact_offset == plan.exact_offset
        for got, want in zip([twin.push(samples[33:]), twin.finish()], wanted, strict=True):
            assert np.array_equal(got, want)


def test_one_call_leaves_a_stream_alone():
    rng = np.random.default_rng(12)
    plan = ChannelPlan(1.0, 6, 4)
    prototype = Prototype(rng.standard_normal(40), 6)
    samples = random_signal(rng, 100, plan, "complex64")
    bank = AnalysisBank(plan, prototype)
    first = bank.push(samples[:50])
    whole = bank(samples)
    rest = [bank.push(samples[50:]), bank.finish()]
    assert np.array_equal(np.concatenate([first, *rest]), whole)


def test_samples_that_are_not_finite_touch_only_their_own_frames():
    plan = ChannelPlan(1.0, 8, 4)
    prototype = Prototype(np.ones(24) / 24, 8)
    samples = np.ones(200, "complex64")
    clean = AnalysisBank(plan, prototype)(samples)
    samples[100] = np.nan
    got = AnalysisBank(plan, prototype)(samples)
    touched = [n for n in range(len(got)) if 0 <= 4 * n - 100 < 24]
    assert np.isnan(got[touched]).all()
    untouched = np.setdiff1d(np.arange(len(got)), touched)
    assert np.array_equal(got[untouched], clean[untouched])


def test_frame_times_are_correctly_rounded():
    plan = ChannelPlan("25000000/3", 8, 5)
    bank = AnalysisBank(plan, Prototype(np.ones(12), 8))
    for first in (0, 3, 10**12, -4):
        times = bank.frame_times(first, 4)
        for n, time in enumerate(times):
            exact = (Fraction((first + n) * 5) - Fraction(11, 2)) / Fraction(25000000, 3)
            assert time == float(exact)
    assert bank.frame_times(0, 0).shape == (0,)


def test_the_time_axis_puts_a_symmetric_pulse_where_it_is():
    plan = ChannelPlan(1000.0, 8, 1)
    bank = AnalysisBank(plan, Prototype(np.hanning(33), 8), dtype="complex128")
    samples = np.zeros(300)
    samples[120] = 1
    peak = int(np.argmax(np.abs(bank(samples)[:, 0])))
    assert bank.frame_times(peak, 1)[0] == 0.120


def test_repr_names_the_engine_and_every_choice():
    bank = AnalysisBank(ChannelPlan(8.0, 4, 2), boxcar_prototype(4), select=[1, 2], workers=2)
    for word in (
        "hop=2",
        "boxcar",
        "complex64",
        "absolute",
        "workers=2",
        "2 channels",
        bank.engine,
    ):
        assert word in repr(bank)


@pytest.mark.parametrize(
    "name", ["dtype", "phase", "layout", "workers", "select", "plan", "prototype", "engine"]
)
def test_choices_are_read_only(name):
    bank = AnalysisBank(ChannelPlan(8.0, 4, 2), boxcar_prototype(4))
    with pytest.raises(AttributeError):
        setattr(bank, name, 3)
