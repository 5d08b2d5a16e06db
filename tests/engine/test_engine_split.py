"""DFTs in two steps: the same frames and samples as in one, and the same bits in any pieces."""

from fractions import Fraction

import numpy as np
import pytest

from chanbank._engine import AnalysisSpec, SynthesisSpec, numba_engine, numba_synthesis
from chanbank._engine.numba_engine import NumbaAnalysisEngine
from chanbank._engine.numba_synthesis import NumbaSynthesisEngine
from chanbank._engine.numpy_engine import NumpyAnalysisEngine
from chanbank._engine.numpy_synthesis import NumpySynthesisEngine
from chanbank._engine.sizes import split_radix

# Largest difference over the sum of magnitudes that each result adds up: the library's bound.
BOUND = {"complex64": 5e-7, "complex128": 5e-15}

RADIX = {"complex64": 16, "complex128": 8}
GEOMETRIES = [(128, 128), (256, 192), (384, 263)]
FRAMES = 50


@pytest.fixture
def splitting(monkeypatch):
    """Small DFTs, split as the long ones are: in 16 pieces in single precision, 8 in double."""

    def radix(channels, row_bytes):
        return RADIX["complex64" if row_bytes == 8 * channels else "complex128"]

    for module in (numba_engine, numba_synthesis):
        monkeypatch.setattr(module, "split_radix", radix)
        monkeypatch.setattr(module, "slot_frames", lambda channels: 1)


def _words(channels, hop, dtype):
    """What both specs share: long taps, absolute phase, an offset of a third of a channel."""
    return {
        "taps": np.random.default_rng(channels).standard_normal(5 * channels - 3),
        "channels": channels,
        "hop": hop,
        "dtype": np.dtype(dtype),
        "real": False,
        "rotate": True,
        "turn": Fraction(1, 3 * channels),
        "columns": None,
        "channel_major": False,
        "workers": 1,
    }


def analysis_spec(channels, hop, dtype, **changes):
    return AnalysisSpec(**{**_words(channels, hop, dtype), **changes})


def synthesis_spec(channels, hop, dtype, **changes):
    words = {"delay": 5 * channels - 4, "column_weights": None}
    return SynthesisSpec(**{**_words(channels, hop, dtype), **words, **changes})


def noise(shape, dtype):
    generator = np.random.default_rng(5)
    return (generator.standard_normal(shape) + 1j * generator.standard_normal(shape)).astype(dtype)


def analyse(engine, samples, cut=0):
    spec = engine.spec
    engine.reset(0, len(samples))
    parts = []
    position = 0
    for piece in (samples[:, :cut], samples[:, cut:]):
        end = position + piece.shape[1]
        frames = -(-end // spec.hop) - -(-position // spec.hop)
        position = end
        out = np.full((len(samples), frames, spec.column_count), np.nan, spec.dtype)
        if spec.channel_major:
            out = np.ascontiguousarray(out.transpose(0, 2, 1))
        engine.push(np.ascontiguousarray(piece), out)
        parts.append(out.transpose(0, 2, 1) if spec.channel_major else out)
    return np.concatenate(parts, axis=1)


def synthesise(engine, frames, gains=None, cut=0):
    spec = engine.spec
    engine.reset(0, len(frames))
    parts = []
    for piece in (frames[:, :cut], frames[:, cut:]):
        out = np.full((len(frames), piece.shape[1] * spec.hop), np.nan, spec.dtype)
        given = piece.transpose(0, 2, 1) if spec.channel_major else piece
        engine.push(np.ascontiguousarray(given), gains, out)
        parts.append(out)
    return np.concatenate(parts, axis=1)


def analysed_alike(spec, samples, dtype):
    """The frames of a split DFT, which must be those of the NumPy engine to rounding."""
    engine = NumbaAnalysisEngine(spec)
    assert engine.layout.radix == RADIX[dtype]
    frames = analyse(engine, samples)
    plain = analyse(NumpyAnalysisEngine(spec), samples)
    scale = np.sum(np.abs(spec.taps)) * np.abs(samples).max()
    assert np.abs(frames - plain).max() <= 2 * BOUND[dtype] * scale
    return frames


@pytest.mark.parametrize("dtype", BOUND)
@pytest.mark.parametrize("geometry", GEOMETRIES)
def test_analysis(splitting, monkeypatch, dtype, geometry):
    spec = analysis_spec(*geometry, dtype)
    samples = noise((1, FRAMES * spec.hop + 7), dtype)
    frames = analysed_alike(spec, samples, dtype)
    chosen = np.array([3, 0, spec.channels - 1, 16, 17])
    for changes in (
        {},
        {"channel_major": True},
        {"columns": chosen},
        {"columns": chosen, "channel_major": True},
        {"workers": 2},
    ):
        monkeypatch.setattr(numba_engine, "WORKER_SAMPLES", 1000)
        other = analysis_spec(*geometry, dtype, **changes)
        for past in (1 << 25, 0):  # ordinary stores, and stores past the caches
            monkeypatch.setattr(numba_engine, "STREAM_BYTES", past)
            again = analyse(NumbaAnalysisEngine(other), samples, cut=1234)
            wanted = frames if other.columns is None else frames[..., chosen]
            assert np.array_equal(again, wanted)


@pytest.mark.parametrize("dtype", BOUND)
@pytest.mark.parametrize("geometry", [(256, 256), (512, 384)])
def test_real_samples(splitting, dtype, geometry):
    spec = analysis_spec(*geometry, dtype, real=True, turn=Fraction(0))
    samples = noise((1, FRAMES * spec.hop + 7), dtype).real.copy()
    frames = analysed_alike(spec, samples, dtype)
    chosen = np.array([3, 0, spec.channels // 2, 8, 9])
    for changes in ({"channel_major": True}, {"columns": chosen}):
        other = analysis_spec(*geometry, dtype, real=True, turn=Fraction(0), **changes)
        again = analyse(NumbaAnalysisEngine(other), samples, cut=1234)
        assert np.array_equal(again, frames if other.columns is None else frames[..., chosen])


@pytest.mark.parametrize("dtype", BOUND)
@pytest.mark.parametrize("geometry", GEOMETRIES)
def test_synthesis(splitting, dtype, geometry):
    spec = synthesis_spec(*geometry, dtype)
    frames = noise((1, FRAMES, spec.channels), dtype)
    gains = noise(spec.channels, np.complex128)
    engine = NumbaSynthesisEngine(spec)
    assert engine.layout.radix == RADIX[dtype]
    wave = synthesise(engine, frames, gains)
    plain = synthesise(NumpySynthesisEngine(spec), frames, gains)
    scale = np.sum(np.abs(spec.taps)) * np.abs(frames * gains).sum(axis=2).max()
    assert np.abs(wave - plain).max() <= 2 * BOUND[dtype] * scale
    for changes in ({}, {"channel_major": True}, {"workers": 2}):
        other = synthesis_spec(*geometry, dtype, **changes)
        again = synthesise(NumbaSynthesisEngine(other), frames, gains, cut=17)
        assert np.array_equal(again, wave)


@pytest.mark.parametrize("channel_major", [False, True])
def test_synthesis_of_some_channels(splitting, channel_major):
    chosen = np.array([3, 0, 127, 8, 9])
    spec = synthesis_spec(128, 96, "complex128", columns=chosen, channel_major=channel_major)
    frames = noise((1, FRAMES, len(chosen)), "complex128")
    wide = np.zeros((1, FRAMES, 128), "complex128")
    wide[..., chosen] = frames
    whole = NumbaSynthesisEngine(synthesis_spec(128, 96, "complex128"))
    assert np.array_equal(synthesise(NumbaSynthesisEngine(spec), frames), synthesise(whole, wide))


def test_frames_in_frame_phase_are_not_split(splitting):
    spec = analysis_spec(128, 96, "complex64", rotate=False)
    assert NumbaAnalysisEngine(spec).layout.radix == 1


@pytest.mark.parametrize("channels", [4096, 8192, 16384, 65536, 16384 + 8, 12345])
def test_what_is_split(channels):
    radix = split_radix(channels, 8 * channels)
    assert radix == {8192: 8, 16384: 8, 65536: 16}.get(channels, 1)
    if radix == 1:
        return
    spec = analysis_spec(channels, channels, "complex64", turn=Fraction(0))
    samples = noise((1, 6 * channels), "complex64")
    frames = analyse(NumbaAnalysisEngine(spec), samples)
    plain = analyse(NumpyAnalysisEngine(spec), samples)
    scale = np.sum(np.abs(spec.taps)) * np.abs(samples).max()
    assert np.abs(frames - plain).max() <= 2 * BOUND["complex64"] * scale
