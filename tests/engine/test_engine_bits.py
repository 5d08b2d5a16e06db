"""The same bits however a stream is cut, whoever computes it and however it is laid out."""

import itertools
import math
from fractions import Fraction

import hypothesis.strategies as st
import numpy as np
import pytest
from hypothesis import given, settings

from chanbank._engine import AnalysisSpec, SynthesisSpec, numba_engine, numba_synthesis
from chanbank._engine.numba_engine import NumbaAnalysisEngine
from chanbank._engine.numba_synthesis import NumbaSynthesisEngine
from chanbank._engine.numpy_engine import NumpyAnalysisEngine

DTYPES = ("complex64", "complex128")
FORMATS = ("float", "narrow", "int8", "uint8", "int16")


def analysis_spec(channels, hop, length, dtype="complex64", **options):
    given_options = {
        "real": False,
        "rotate": True,
        "turn": Fraction(0),
        "columns": None,
        "channel_major": False,
        "workers": 1,
    } | options
    taps = np.random.default_rng(length).standard_normal(length)
    return AnalysisSpec(taps, channels, hop, np.dtype(dtype), **given_options)


def samples_of(spec, kind, count, antennas=1, seed=0):
    """Samples (antennas, n) of one format; integers interleaved where the bank is complex."""
    generator = np.random.default_rng(seed)
    if kind in ("int8", "uint8", "int16"):
        limits = np.iinfo(kind)
        numbers = count * (1 if spec.real else 2)
        return generator.integers(limits.min, limits.max, (antennas, numbers), kind, True)
    dtype = "complex64" if kind == "narrow" else spec.dtype
    lane = np.empty(0, dtype).real.dtype
    values = generator.standard_normal((antennas, count))
    if spec.real:
        return values.astype(lane)
    return (values + 1j * generator.standard_normal((antennas, count))).astype(dtype)


def frame_count(position, samples, hop):
    return -(-(position + samples) // hop) - -(-position // hop)


def result_for(spec, position, samples, antennas=1):
    frames, columns = frame_count(position, samples, spec.hop), spec.column_count
    shape = (columns, frames) if spec.channel_major else (frames, columns)
    return np.full((antennas, *shape), np.nan, spec.dtype)


def push(engine, samples, out):
    integer = samples.dtype.kind in "iu"
    engine.push(samples, out, *((float(3), 0.37) if integer else ()))


def split_run(engine, spec, samples, cuts, start=0):
    """All frames of a signal pushed in pieces, frame-major."""
    per_sample = 2 if samples.dtype.kind in "iu" and not spec.real else 1
    engine.reset(start, len(samples))
    parts, position = [], start
    edges = [0, *cuts, samples.shape[1] // per_sample]
    for low, high in itertools.pairwise(edges):
        out = result_for(spec, position, high - low, len(samples))
        push(engine, np.ascontiguousarray(samples[:, low * per_sample : high * per_sample]), out)
        parts.append(out.transpose(0, 2, 1) if spec.channel_major else out)
        position += high - low
    return np.concatenate(parts, axis=1)


def same_bits(left, right):
    assert left.shape == right.shape and left.dtype == right.dtype
    return np.ascontiguousarray(left).tobytes() == np.ascontiguousarray(right).tobytes()


@st.composite
def geometries(draw):
    channels = draw(st.integers(1, 40))
    hop = draw(st.integers(1, channels))
    length = draw(st.integers(1, 6 * channels))
    turn = draw(st.sampled_from([Fraction(0), Fraction(1, 2 * channels), Fraction(0.1234567891)]))
    return channels, hop, length, turn


@pytest.mark.parametrize("make", [NumbaAnalysisEngine, NumpyAnalysisEngine])
@pytest.mark.parametrize("dtype", DTYPES)
@settings(max_examples=25, deadline=None, derandomize=True)
@given(
    geometry=geometries(),
    real=st.booleans(),
    rotate=st.booleans(),
    kind=st.sampled_from(FORMATS),
    start=st.sampled_from([0, -5, 17, 10**12 + 1]),
    data=st.data(),
)
def test_any_split_gives_the_same_bits(make, dtype, geometry, real, rotate, kind, start, data):
    channels, hop, length, turn = geometry
    spec = analysis_spec(channels, hop, length, dtype, real=real, rotate=rotate, turn=turn)
    count = 9 * channels + 3
    samples = samples_of(spec, kind, count)
    engine = make(spec)
    whole = split_run(engine, spec, samples, [], start)
    assert np.isfinite(whole).all()
    cuts = sorted(data.draw(st.lists(st.integers(0, count), max_size=6)))
    assert same_bits(split_run(engine, spec, samples, cuts, start), whole)


@pytest.mark.parametrize("channels, hop", [(64, 64), (64, 48), (64, 32), (256, 192), (96, 95)])
def test_a_long_push_gives_the_bits_of_single_frames(channels, hop):
    # Several blocks, of many groups of frames and several tiles; the ring goes round many times.
    spec = analysis_spec(channels, hop, 5 * channels - 3)
    samples = samples_of(spec, "float", 500 * hop)
    whole = split_run(NumbaAnalysisEngine(spec), spec, samples, [], 10**12 + 5)
    cuts = list(range(hop, 500 * hop, hop))
    assert same_bits(split_run(NumbaAnalysisEngine(spec), spec, samples, cuts, 10**12 + 5), whole)


@pytest.mark.parametrize("channels, hop", [(64, 64), (256, 192), (256, 128), (96, 95)])
def test_a_long_synthesis_gives_the_bits_of_single_frames(channels, hop):
    case = (channels, hop, 5 * channels - 3, Fraction(0), "complex64", False, True, False)
    spec, frames = _synthesis_case(*case)
    frames = np.concatenate([frames] * 5, axis=1)
    whole = _synthesise(NumbaSynthesisEngine(spec), spec, frames, [])
    cuts = list(range(1, frames.shape[1]))
    assert same_bits(_synthesise(NumbaSynthesisEngine(spec), spec, frames, cuts), whole)


@pytest.mark.parametrize("hop", [64, 48, 32, 21])
@pytest.mark.parametrize("antennas", [1, 2, 3])
def test_workers_give_the_same_bits(monkeypatch, hop, antennas):
    # A worker per few samples, so that short signals are dealt out; a window that reaches back
    # before the push and one that does not.
    monkeypatch.setattr(numba_engine, "WORKER_SAMPLES", 300)
    for length in (64, 500):
        for turn in (Fraction(0), Fraction(0.01)):
            spec = analysis_spec(64, hop, length, turn=turn)
            samples = samples_of(spec, "float", 4000, antennas)
            alone = split_run(NumbaAnalysisEngine(spec), spec, samples, [700, 1900])
            for workers in (2, 3):
                many = analysis_spec(64, hop, length, turn=turn, workers=workers)
                engine = NumbaAnalysisEngine(many)
                assert same_bits(split_run(engine, many, samples, [700, 1900]), alone)
                assert engine.get_state()[1].tobytes() == _state_after(spec, samples)


def _state_after(spec, samples):
    engine = NumbaAnalysisEngine(spec)
    split_run(engine, spec, samples, [])
    return engine.get_state()[1].tobytes()


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("real", [False, True])
@pytest.mark.parametrize("channels", [7, 16, 40])
def test_layouts_subsets_and_stores_give_the_same_bits(monkeypatch, dtype, real, channels):
    spec = analysis_spec(channels, channels - 1, 3 * channels, dtype, real=real)
    samples = samples_of(spec, "float", 50 * channels)
    plain = split_run(NumbaAnalysisEngine(spec), spec, samples, [])
    chosen = np.array([channels // 2, 0, 1])
    for options in (
        {"channel_major": True},
        {"columns": chosen},
        {"columns": chosen, "channel_major": True},
    ):
        other = analysis_spec(channels, channels - 1, 3 * channels, dtype, real=real, **options)
        wanted = plain[..., chosen] if "columns" in options else plain
        for past in (1 << 25, 0):  # ordinary stores, and stores past the caches
            monkeypatch.setattr(numba_engine, "STREAM_BYTES", past)
            assert same_bits(split_run(NumbaAnalysisEngine(other), other, samples, [99]), wanted)
    monkeypatch.setattr(numba_engine, "STREAM_BYTES", 0)
    assert same_bits(split_run(NumbaAnalysisEngine(spec), spec, samples, []), plain)


@pytest.mark.parametrize("dtype", DTYPES)
@pytest.mark.parametrize("shift", [1, 2, 3])
def test_results_at_any_alignment(monkeypatch, dtype, shift):
    spec = analysis_spec(24, 12, 96, dtype)
    samples = samples_of(spec, "float", 1200)
    wanted = split_run(NumbaAnalysisEngine(spec), spec, samples, [])
    monkeypatch.setattr(numba_engine, "STREAM_BYTES", 0)
    room = np.zeros(wanted.size + 8, spec.dtype)
    for places in (room[shift : shift + wanted.size], _unaligned(wanted)):
        out = places.reshape(wanted.shape)
        push(NumbaAnalysisEngine(spec), samples, out)
        assert same_bits(out, wanted)
    assert not room[:shift].any() and not room[shift + wanted.size :].any()


def _unaligned(like):
    room = np.zeros(like.nbytes + 1, np.uint8)[1:]
    return room.view(like.dtype)


@pytest.mark.parametrize("kind", FORMATS)
@pytest.mark.parametrize("real", [False, True])
def test_formats_may_change_between_pushes(kind, real):
    spec = analysis_spec(16, 12, 70, "complex128", real=real)
    samples = samples_of(spec, kind, 500)
    wide = samples.astype(np.float64) if kind != "float" and samples.dtype.kind != "c" else samples
    if samples.dtype.kind in "iu":
        wide = (samples.astype(np.float64) - 3.0) * 0.37
        if not real:
            wide = wide.view(np.complex128)
    cut, per_sample = 211, wide.shape[1]
    numbers = samples.shape[1] // per_sample
    engine = NumbaAnalysisEngine(spec)
    wanted = split_run(
        engine, spec, wide.astype(samples.dtype if kind == "narrow" else wide.dtype), []
    )
    engine.reset(0, 1)
    first = result_for(spec, 0, cut)
    push(engine, samples[:, : cut * numbers], first)
    second = result_for(spec, cut, per_sample - cut)
    push(engine, wide[:, cut:], second)
    assert same_bits(np.concatenate([first, second], axis=1), wanted)


@pytest.mark.parametrize("hop", [16, 12, 5])
def test_state_moves_between_engines(hop):
    # The state is the samples that later frames need, so either engine can carry on a stream.
    spec = analysis_spec(16, hop, 90, "complex128", turn=Fraction(0.003))
    samples = samples_of(spec, "float", 700)
    for maker, taker in (
        (NumbaAnalysisEngine, NumbaAnalysisEngine),
        (NumbaAnalysisEngine, NumpyAnalysisEngine),
        (NumpyAnalysisEngine, NumbaAnalysisEngine),
    ):
        whole = split_run(maker(spec), spec, samples, [])
        engine, other = maker(spec), taker(spec)
        engine.reset(0, 1)
        push(engine, samples[:, :333], result_for(spec, 0, 333))
        other.set_state(engine.get_state())
        out = result_for(spec, 333, 367)
        push(other, samples[:, 333:], out)
        # Double precision, sums of some hundred terms of order one.
        assert np.allclose(out, whole[:, -out.shape[1] :], rtol=0, atol=1e-11)


@pytest.mark.parametrize("hop", [16, 7])
def test_zeros_are_samples(hop):
    spec = analysis_spec(16, hop, 50)
    samples = samples_of(spec, "float", 300)
    padded = np.concatenate([samples, np.zeros((1, 200), np.complex64), samples], axis=1)
    wanted = split_run(NumbaAnalysisEngine(spec), spec, padded, [])
    engine = NumbaAnalysisEngine(spec)
    parts = []
    for piece in (samples, 200, samples):
        count = piece if isinstance(piece, int) else piece.shape[1]
        out = result_for(spec, engine.position, count)
        if isinstance(piece, int):
            engine.push_zeros(count, out)
        else:
            push(engine, piece, out)
        parts.append(out)
    assert np.array_equal(np.concatenate(parts, axis=1), wanted)
    far = result_for(spec, engine.position, 10**6)
    engine.push_zeros(10**6, far)
    assert engine.position == 10**6 + 800 and not far[:, -10:].any()


def test_not_a_number_stays_in_the_frames_it_touches():
    spec = analysis_spec(24, 18, 100)
    samples = samples_of(spec, "float", 2000)
    clean = split_run(NumbaAnalysisEngine(spec), spec, samples, [])
    where = 777
    samples[0, where] = np.nan
    spoilt = split_run(NumbaAnalysisEngine(spec), spec, samples, [])
    frames = np.arange(clean.shape[1]) * 18
    touched = (frames >= where) & (frames - where < 5 * 24)  # the window of whole rows
    assert np.isnan(spoilt[0, touched & (frames - where < 100)]).all()
    assert same_bits(spoilt[:, ~touched], clean[:, ~touched])


@pytest.mark.parametrize("dtype", DTYPES)
@settings(max_examples=20, deadline=None, derandomize=True)
@given(
    geometry=geometries(),
    real=st.booleans(),
    rotate=st.booleans(),
    channel_major=st.booleans(),
    cuts=st.lists(st.integers(0, 60), max_size=4),
)
def test_synthesis_in_any_pieces(dtype, geometry, real, rotate, channel_major, cuts):
    channels, hop, length, turn = geometry
    spec, frames = _synthesis_case(channels, hop, length, turn, dtype, real, rotate, False)
    whole = _synthesise(NumbaSynthesisEngine(spec), spec, frames, [])
    assert np.isfinite(whole).all()
    major = SynthesisSpec(**(vars(spec) | {"channel_major": channel_major}))
    assert same_bits(_synthesise(NumbaSynthesisEngine(major), major, frames, sorted(cuts)), whole)


def _synthesis_case(channels, hop, length, turn, dtype, real, rotate, channel_major, workers=1):
    taps = np.random.default_rng(length).standard_normal(length)
    spec = SynthesisSpec(
        taps=taps,
        channels=channels,
        hop=hop,
        dtype=np.dtype(dtype),
        real=real,
        rotate=rotate,
        turn=turn,
        delay=length - 1,
        columns=None,
        column_weights=None,
        channel_major=channel_major,
        workers=workers,
    )
    generator = np.random.default_rng(7)
    shape = (2, 60, spec.column_count)
    frames = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
    return spec, frames.astype(dtype)


def _synthesise(engine, spec, frames, cuts):
    engine.reset(0, len(frames))
    lane = np.empty(0, spec.dtype).real.dtype
    parts = []
    for low, high in zip([0, *cuts], [*cuts, frames.shape[1]], strict=True):
        piece = frames[:, low:high]
        if spec.channel_major:
            piece = piece.transpose(0, 2, 1)
        out = np.full(
            (len(frames), (high - low) * spec.hop), np.nan, lane if spec.real else spec.dtype
        )
        engine.push(np.ascontiguousarray(piece), None, out)
        parts.append(out)
    return np.concatenate(parts, axis=1)


@pytest.mark.parametrize("hop", [64, 48, 21])
def test_synthesis_workers_and_stores(monkeypatch, hop):
    monkeypatch.setattr(numba_synthesis, "WORKER_SAMPLES", 200)
    for rotate, turn in ((True, Fraction(0)), (False, Fraction(0.01))):
        case = (64, hop, 300, turn, "complex64", False, rotate, False)
        spec, frames = _synthesis_case(*case)
        alone = _synthesise(NumbaSynthesisEngine(spec), spec, frames, [25])
        for workers in (2, 3):
            many, _ = _synthesis_case(*case, workers=workers)
            engine = NumbaSynthesisEngine(many)
            assert same_bits(_synthesise(engine, many, frames, [25]), alone)
        monkeypatch.setattr(numba_synthesis, "STREAM_BYTES", 0)
        assert same_bits(_synthesise(NumbaSynthesisEngine(spec), spec, frames, []), alone)


@pytest.mark.parametrize("channels", [8, 64, 96, 101, 1024])
def test_a_plan_gives_every_row_the_same_bits(channels):
    # What the split rests on: whichever slot of the batch a frame falls into.
    spec = analysis_spec(channels, channels, channels)
    engine = NumbaAnalysisEngine(spec)
    row = samples_of(spec, "float", channels)
    repeats = 2 * engine.layout.slot + 1
    engine.reset(1, 1)  # windows then hold one whole row each
    samples = np.concatenate([row] * (repeats + 1), axis=1)
    frames = result_for(spec, 1, samples.shape[1])
    push(engine, samples, frames)
    full = frames[0, math.ceil(len(spec.taps) / channels) :]
    assert len(full) > engine.layout.slot
    assert all(same_bits(frame, full[0]) for frame in full)
