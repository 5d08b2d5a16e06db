"""The bit-true bank: exact where it must be, noisy as published where it rounds."""

import numpy as np
import pytest

from chanbank.analysis.bank import AnalysisBank
from chanbank.fixedpoint.arithmetic import Word, dft, shifted, twiddles
from chanbank.fixedpoint.bank import FixedPointBank
from chanbank.fixedpoint.noise import dft_rounding_db
from chanbank.fixedpoint.quantise import quantised
from chanbank.plan import ChannelPlan
from chanbank.prototype.kaiser import kaiser_prototype
from chanbank.prototype.window import window_prototype


def noise(count, seed=0, scale=1.0):
    rng = np.random.default_rng(seed)
    return scale * (rng.uniform(-1, 1, count) + 1j * rng.uniform(-1, 1, count))


def direct(plan, taps, x, phase):
    """y[n, k] by the defining sum."""
    count = -(-(len(x) + len(taps) - 1) // plan.hop)
    n, i = np.arange(count)[:, None] * plan.hop, np.arange(len(taps))
    inside = (n - i >= 0) & (n - i < len(x))
    windows = np.where(inside, x[np.clip(n - i, 0, len(x) - 1)], 0) * taps
    f = np.asarray(plan.dft_index) / plan.channels
    y = windows @ np.exp(2j * np.pi * np.outer(i, f))
    return y * np.exp(-2j * np.pi * n * f) if phase == "absolute" else y


def test_frames_are_those_of_the_analysis_bank():
    plan = ChannelPlan(8.0, 8, 6)
    q = quantised(window_prototype(8, 4, "hann"), 16)
    x = noise(100, scale=0.5)
    result = FixedPointBank(plan, q, data_bits=30, twiddle_bits=30, sample_bits=24)(x)
    expected = AnalysisBank(plan, q.prototype, dtype="complex128")(x)
    # Samples of 24 bits: 32 taps of at most 1/8 share their half steps.
    assert np.abs(result.frames - expected).max() < 2.0**-22


@pytest.mark.parametrize("channels,hop", [(1, 1), (2, 1), (8, 8), (8, 5), (32, 24)])
@pytest.mark.parametrize("phase", ["absolute", "frame"])
@pytest.mark.parametrize("real", [False, True])
def test_equals_the_bank_where_words_are_long(channels, hop, phase, real):
    """With long words nothing but the samples' and taps' own rounding remains."""
    plan = ChannelPlan(1.0 * channels, channels, hop, real=real)
    q = quantised(window_prototype(channels, 3, ("kaiser", 5.0)), 20)
    bank = FixedPointBank(
        plan, q, sample_bits=12, accumulator_bits=50, data_bits=32, twiddle_bits=30, phase=phase
    )
    x = noise(7 * channels + 3)
    x = x.real if real else x
    x = np.rint(x * 2047) / 2048
    result = bank(x)
    expected = direct(plan, q.prototype.taps, x, phase)
    assert result.frames.shape == expected.shape
    assert result.clean
    # One rounding of a 32 bit word per stage and a 30 bit factor; values stay below 1.
    assert np.abs(result.frames - expected).max() < 2.0**-24


def test_bits_are_those_of_plain_integers():
    """A second, slow coding of the same arithmetic in Python integers, bit for bit."""
    plan = ChannelPlan(4.0, 4, 3)
    q = quantised(window_prototype(4, 3, "hann"), 7)
    bank = FixedPointBank(plan, q, sample_bits=6, data_bits=9, twiddle_bits=8, accumulator_bits=20)
    x = noise(25, seed=1, scale=0.9)
    result = bank(x)
    words = [(round(float(v.real) * 32), round(float(v.imag) * 32)) for v in x]

    def rounding(value, places):
        return (value + (1 << places >> 1)) >> places

    def butterfly(a, b):
        pairs = list(zip(a, b, strict=True))
        return [rounding(x + y, 1) for x, y in pairs], [rounding(x - y, 1) for x, y in pairs]

    for n in range(len(result.integers)):
        v = [[0, 0] for _ in range(4)]
        for i, tap in enumerate(q.integers.tolist()):
            if 0 <= n * 3 - i < len(x):
                word = words[n * 3 - i]
                v[(i - n * 3) % 4][0] += tap * word[0]
                v[(i - n * 3) % 4][1] += tap * word[1]
        v = [[rounding(part, bank.fold_shift) for part in pair] for pair in v]
        # Two stages: (0, 2), (1, 3), then the pairs; the factors are 1, and 1 and j.
        even, odd = butterfly(v[0], v[2]), butterfly(v[1], v[3])
        turned = [-odd[1][1], odd[1][0]]
        first, second = butterfly(even[0], odd[0]), butterfly(even[1], turned)
        out = [first[0], second[0], first[1], second[1]]
        assert result.integers[n].tolist() == out


def dft_noise(points, bits, scaling, rounding="nearest"):
    """Noise over signal of the DFT alone, white input, parts uniform, variance 1/3 together."""
    rng = np.random.default_rng(points)
    unit = 2.0 ** -(bits - 1)
    many = max(4, 20000 // points)
    x = [rng.uniform(-1, 1, (many, points)) / np.sqrt(2) for _ in range(2)]
    stages = points.bit_length() - 1
    shifts = (1,) * stages if scaling == "stages" else (0,) * stages
    before = 1.0 if scaling == "stages" else 1.0 / points
    words = [np.rint(part * before / unit).astype(np.int64) for part in x]
    given = (
        (words[0] + 1j * words[1]) * unit if scaling == "stages" else (x[0] + 1j * x[1]) * before
    )
    a, b, lost = dft(*words, twiddles(points, 26), 26, shifts, Word(bits, "saturate"), rounding)
    assert not any(lost)
    exact = np.fft.ifft(given, axis=1) * points * 0.5 ** sum(shifts)
    error = (a + 1j * b) * unit - exact
    return np.mean(np.abs(error) ** 2) / np.mean(np.abs(exact) ** 2)


@pytest.mark.parametrize("points", [16, 64, 256, 1024, 4096])
def test_dft_noise_with_scaling_at_each_stage(points):
    """Oppenheim and Weinstein, Proc. IEEE 60(8), 1972 (from memory): 4 N 2^(-2 b), b = bits - 1.

    Simulated independently with two roundings per output: 4.2 to 5.0 in place of 4. Here factors
    1 and j do not round, and a butterfly's sum and difference share one rounded product.
    """
    bits = 16
    ratio = dft_noise(points, bits, "stages") / 10 ** (dft_rounding_db(points, bits) / 10)
    assert 0.3 < ratio < 1.4


@pytest.mark.parametrize("points", [16, 64, 256])
def test_dft_noise_with_scaling_of_the_input(points):
    """Same source: N^2 2^(-2 b) when only the input is scaled; 0.64 to 0.68 simulated."""
    bits = 20
    found = dft_noise(points, bits, "input")
    published = 10 ** (dft_rounding_db(points, bits, scaling="input") / 10)
    assert 0.4 < found / published < 1.2


def test_half_a_bit_or_a_whole_one_per_doubling():
    """Same source, and P. D. Welch, IEEE Trans. AU-17(2), 1969: half a bit per stage."""
    half = dft_noise(4096, 18, "stages") / dft_noise(256, 18, "stages")
    whole = dft_noise(1024, 24, "input") / dft_noise(64, 24, "input")
    # 16 times the points: 4 stages of 3 and of 6 dB.
    assert 10 * np.log10(half) == pytest.approx(12.04, abs=1.0)
    assert 10 * np.log10(whole) == pytest.approx(24.08, abs=1.5)


def test_truncation_is_worse_than_rounding():
    nearest, even = (dft_noise(256, 14, "stages", rule) for rule in ("nearest", "even"))
    assert dft_noise(256, 14, "stages", "truncate") > 1.3 * nearest
    assert even < 1.5 * nearest


def test_shifts_round_as_named():
    values = np.array([-6, -5, -3, -2, -1, 0, 1, 2, 3, 5, 6])
    for places in (1, 2):
        exact = values / 2**places
        assert shifted(values, places, "nearest").tolist() == np.floor(exact + 0.5).tolist()
        assert shifted(values, places, "even").tolist() == np.rint(exact).tolist()
        assert shifted(values, places, "truncate").tolist() == np.floor(exact).tolist()


def test_registers_saturate_or_wrap_and_count():
    values = np.array([-9, -8, 0, 7, 8, 25])
    held, lost = Word(4, "saturate").store(values)
    assert held.tolist() == [-8, -8, 0, 7, 7, 7] and lost == 3
    held, lost = Word(4, "wrap").store(values)
    assert held.tolist() == [7, -8, 0, 7, -8, -7] and lost == 3


def test_overflow_is_found_where_it_happens():
    plan = ChannelPlan(16.0, 16, 16)
    q = quantised(kaiser_prototype(16, stopband_db=50, passband=0.4, stopband=1.0), 14)
    tone = 0.99 * np.exp(2j * np.pi * 5 / 16 * np.arange(800))
    safe = FixedPointBank(plan, q)
    assert safe(tone).clean
    loud = FixedPointBank(plan, q, scaling="none")(tone)
    stages = [loud.overflows[f"stage {s}"] for s in (1, 2, 3, 4)]
    assert stages[-1] > 0 and not loud.clean
    assert loud.overflows["samples"] == loud.overflows["fold"] == 0
    small = FixedPointBank(plan, q, accumulator_bits=26)(tone)
    assert small.overflows["accumulator"] > 0
    clipped = safe(2 * tone)
    assert clipped.overflows["samples"] > 0
    tight = FixedPointBank(plan, q, fold_shift=0)(tone)
    assert tight.overflows["fold"] > 0


def test_default_fold_shift_cannot_overflow():
    """The worst samples there are: full scale with the signs of a branch's taps."""
    plan = ChannelPlan(8.0, 8, 8)
    q = quantised(window_prototype(8, 5, ("kaiser", 4.0)), 12)
    bank = FixedPointBank(plan, q, data_bits=14)
    signs = np.where(q.integers[::-1] >= 0, 1.0, -1.0)
    x = np.tile(np.concatenate([signs, -signs]), 3) * (1 + 1j)
    result = bank(x)
    assert result.overflows["fold"] == 0
    assert FixedPointBank(plan, q, data_bits=14, fold_shift=bank.fold_shift - 2)(x).overflows[
        "fold"
    ]


def test_noise_report_separates_its_sources():
    plan = ChannelPlan(64.0, 64, 48)
    h = kaiser_prototype(64, stopband_db=90, passband=0.4, stopband=1.0)
    x = noise(20000, seed=3, scale=0.5)
    report = FixedPointBank(plan, quantised(h, 10), sample_bits=16, data_bits=26).noise(x)
    # Ten-bit taps dominate: their error energy over the taps' own is the ratio for white input.
    q = quantised(h, 10)
    expected = ((q.prototype.taps - h.taps) ** 2).sum() / (h.taps**2).sum()
    assert report.coefficients_db == pytest.approx(10 * np.log10(expected), abs=0.2)
    assert report.total_db == pytest.approx(report.coefficients_db, abs=0.2)
    assert report.samples_db == pytest.approx(report.published["samples"], abs=0.3)
    coarse = FixedPointBank(plan, quantised(h, 18), sample_bits=16, data_bits=12).noise(x)
    assert coarse.arithmetic_db > coarse.coefficients_db + 10
    assert coarse.total_db == pytest.approx(coarse.arithmetic_db, abs=0.5)
    # Rounding into the data word before the DFT comes on top of the published DFT noise.
    assert -6 < coarse.arithmetic_db - coarse.published["dft"] < 4
    two_more = FixedPointBank(plan, quantised(h, 18), sample_bits=16, data_bits=14).noise(x)
    assert coarse.arithmetic_db - two_more.arithmetic_db == pytest.approx(12.04, abs=0.7)
    assert "no overflow" in str(report) and report.to_dict()["total_db"] == report.total_db


def test_silence_and_empty_signals():
    plan = ChannelPlan(8.0, 8, 4)
    bank = FixedPointBank(plan, quantised(window_prototype(8, 2, "hann"), 8))
    assert bank(np.zeros(0)).integers.shape == (0, 8, 2)
    assert not bank(np.zeros(20)).integers.any()
    bank.noise(np.zeros(20))


def test_integer_samples_are_words():
    plan = ChannelPlan(8.0, 8, 8, real=True)
    bank = FixedPointBank(plan, quantised(window_prototype(8, 2, "hann"), 8), sample_bits=8)
    words = np.arange(-50, 50)
    assert np.array_equal(bank(words).integers, bank(words / 128).integers)
    assert bank(words).integers.shape[1] == 5


@pytest.mark.parametrize(
    "plan,kwargs,error,words",
    [
        (ChannelPlan(12.0, 12, 6), {}, ValueError, "power of two"),
        (ChannelPlan(8.0, 8, 6, offset=0.5), {}, ValueError, "offset must be 0"),
        (ChannelPlan(16.0, 16, 6), {}, ValueError, "same number of channels"),
        (ChannelPlan(8.0, 8, 6), dict(data_bits=3), ValueError, "data_bits"),
        (ChannelPlan(8.0, 8, 6), dict(sample_bits=25), ValueError, "sample_bits"),
        (ChannelPlan(8.0, 8, 6), dict(scaling="some"), ValueError, "scaling must be"),
        (ChannelPlan(8.0, 8, 6), dict(scaling=(1, 1)), ValueError, "3 stages"),
        (ChannelPlan(8.0, 8, 6), dict(scaling=1), TypeError, "scaling must be"),
        (ChannelPlan(8.0, 8, 6), dict(rounding="up"), ValueError, "rounding must be"),
        (ChannelPlan(8.0, 8, 6), dict(overflow=None), TypeError, "overflow must be"),
        (ChannelPlan(8.0, 8, 6), dict(accumulator_bits=63), ValueError, "accumulator_bits"),
    ],
)
def test_bad_banks_are_refused(plan, kwargs, error, words):
    channels = 12 if plan.channels == 12 else 8
    q = quantised(window_prototype(channels, 2, "hann"), 8)
    with pytest.raises(error, match=words):
        FixedPointBank(plan, q, **kwargs)


@pytest.mark.parametrize(
    "samples,error",
    [("abc", TypeError), (np.zeros((2, 2)), ValueError), (np.array([np.nan]), ValueError)],
)
def test_bad_samples_are_refused(samples, error):
    q = quantised(window_prototype(8, 2, "hann"), 8)
    with pytest.raises(error, match="samples must be"):
        FixedPointBank(ChannelPlan(8.0, 8, 8), q)(samples)
    with pytest.raises(TypeError, match="samples must be"):
        FixedPointBank(ChannelPlan(8.0, 8, 8, real=True), q)(np.zeros(4, complex))
