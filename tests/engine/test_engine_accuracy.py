"""Both engines against SciPy's filter, against each other, and exact phases against integers."""

from fractions import Fraction

import numpy as np
import pytest
import scipy.signal

from chanbank._engine import AnalysisSpec, SynthesisSpec
from chanbank._engine.buffers import turn_words
from chanbank._engine.numba_engine import NumbaAnalysisEngine
from chanbank._engine.numba_synthesis import NumbaSynthesisEngine
from chanbank._engine.numpy_engine import NumpyAnalysisEngine
from chanbank._engine.numpy_synthesis import NumpySynthesisEngine
from chanbank._engine.phase import exact_phase

# Largest error over sum(abs(h)) * max(abs(x)): the bounds that the library holds.
BOUND = {"complex64": 5e-7, "complex128": 5e-15}

# Every kind of gcd, odd, prime and tiny sizes, short and long taps, more taps than vector chunks.
GEOMETRIES = [
    (64, 64, 512),
    (64, 48, 512),
    (64, 40, 333),
    (96, 72, 96 * 17),
    (101, 33, 808),
    (8, 5, 8),
    (7, 7, 5),
    (1, 1, 9),
    (2, 1, 401),
    (300, 299, 900),
    (256, 192, 2048),
]


def unit(step, indices):
    return np.exp(-2j * np.pi * np.array([float((step * int(t)) % 1) for t in indices]))


def direct(spec, samples, start, columns):
    """upfirdn of the mixed signal for some columns, frames n with nD >= start."""
    hop, pad = spec.hop, start % spec.hop
    wide = np.concatenate([np.zeros(pad), samples.astype(np.complex128)])
    result = []
    for column in columns:
        step = Fraction(int(column), spec.channels) + spec.turn
        mixed = wide * unit(step, range(start - pad, start + len(samples)))
        frames = scipy.signal.upfirdn(spec.taps, mixed, 1, hop)[1 if pad else 0 :]
        first = -(-start // hop)
        count = -(-(start + len(samples)) // hop) - first
        frames = frames[:count]
        if not spec.rotate:
            frames = frames * np.conj(unit(step * hop, range(first, first + count)))
        result.append(frames)
    return np.array(result).T


@pytest.mark.parametrize("make", [NumbaAnalysisEngine, NumpyAnalysisEngine])
@pytest.mark.parametrize("dtype", BOUND)
@pytest.mark.parametrize("real", [False, True])
@pytest.mark.parametrize("geometry", GEOMETRIES)
def test_against_upfirdn(make, dtype, real, geometry):
    channels, hop, length = geometry
    generator = np.random.default_rng(length)
    taps = generator.standard_normal(length)
    count = max(20 * hop, length) + 3
    samples = generator.standard_normal(count)
    if not real:
        samples = samples + 1j * generator.standard_normal(count)
    lane = np.empty(0, dtype).real.dtype
    samples = samples.astype(lane if real else dtype)
    for start, rotate, turn in (
        (0, True, Fraction(0)),
        (10**12 + 1, True, Fraction(0.7182818284) / channels),
        (5, False, Fraction(0)),
        (10**12, False, Fraction(1, 2 * channels)),
    ):
        spec = AnalysisSpec(
            taps, channels, hop, np.dtype(dtype), real, rotate, turn, None, False, 1
        )
        engine = make(spec)
        engine.reset(start, 1)
        frames = -(-(start + count) // hop) - -(-start // hop)
        out = np.full((1, frames, spec.column_count), np.nan, dtype)
        engine.push(samples[None], out)
        columns = np.unique(generator.integers(0, spec.column_count, 3))
        exact = direct(spec, samples, start, columns)
        error = np.abs(out[0][:, columns] - exact).max()
        assert error < BOUND[dtype] * np.sum(np.abs(taps)) * np.abs(samples).max()


@pytest.mark.parametrize("dtype", BOUND)
@pytest.mark.parametrize("geometry", GEOMETRIES)
def test_synthesis_engines_agree(dtype, geometry):
    channels, hop, length = geometry
    generator = np.random.default_rng(length)
    taps = generator.standard_normal(length)
    columns = np.arange(0, channels, 2)
    for real, rotate, turn, chosen in (
        (False, True, Fraction(0), None),
        (True, True, Fraction(0), None),
        (False, False, Fraction(0.3) / channels, None),
        (False, True, Fraction(1, 2 * channels), columns),
    ):
        spec = SynthesisSpec(
            taps,
            channels,
            hop,
            np.dtype(dtype),
            real,
            rotate,
            turn,
            length - 1,
            chosen,
            None,
            False,
            1,
        )
        shape = (1, 20, spec.column_count)
        frames = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
        gains = generator.standard_normal(spec.column_count)
        results = []
        for make in (NumbaSynthesisEngine, NumpySynthesisEngine):
            engine = make(spec)
            engine.reset(10**9, 1)
            lane = np.empty(0, dtype).real.dtype
            out = np.full((1, 20 * hop), np.nan, lane if real else dtype)
            engine.push(frames.astype(dtype), gains, out)
            results.append(out)
        # One hop adds at most all taps times M frames' columns, each of a few units.
        scale = np.sum(np.abs(taps)) * np.abs(frames * gains).sum(axis=2).max()
        error = np.abs(results[0] - results[1]).max()
        assert error < BOUND[dtype] * scale


@pytest.mark.parametrize(
    "turn", [Fraction(1, 3), Fraction(0.1), Fraction(2, 7), Fraction(1, 2**60)]
)
@pytest.mark.parametrize("time", [0, 1, 7, 10**12, 2**62, -1, -(10**12), -(2**61)])
def test_phases_are_reduced_in_integers(turn, time):
    high, low = turn_words(turn)
    angle = exact_phase(np.uint64(high), np.uint64(low), time)
    exact = (turn * time) % 1
    wrapped = exact - 1 if exact > Fraction(1, 2) else exact
    # The turn's own rounding, 2**-129, times at most 2**62, is far below a double's digits.
    assert abs(angle - 2 * np.pi * float(wrapped)) < 4 * np.finfo(float).eps * np.pi
