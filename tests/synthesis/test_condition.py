"""The reconstruction condition against direct sums and against the banks themselves."""

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank
from chanbank.synthesis.condition import (
    error_spectrum,
    noise_gain,
    pair_delay_of,
    residual,
    transfer,
    white_error,
)


def pair(channels, taps, span, delay, seed=0):
    """A pair that misses the condition by a good deal, of any lengths."""
    random = np.random.default_rng(seed)
    h = Prototype(random.standard_normal(taps) / taps, channels)
    g = Prototype(random.standard_normal(span) / channels, channels, pair_delay=delay)
    return h, g


@pytest.mark.parametrize(
    "channels, hop, taps, span, delay",
    [(8, 6, 19, 30, 20), (7, 5, 14, 3, 4), (5, 3, 11, 21, 0), (4, 4, 4, 4, 3), (6, 4, 12, 18, 29)],
)
def test_residual_is_the_double_sum(channels, hop, taps, span, delay):
    h, g = pair(channels, taps, span, delay)
    left = residual(ChannelPlan(1.0, channels, hop), h, g)
    assert left.values.shape == (hop, len(left.shifts))
    for tau in range(hop):
        for r in range(-25, 26):
            want = -1.0 * (r == 0)
            for j in range(span):
                s, i = tau + j * hop, delay + r * channels - tau - j * hop
                if s < span and 0 <= i < taps:
                    want += channels * g.taps[s] * h.taps[i]
            at = np.flatnonzero(left.shifts == r)
            got = left.values[tau, at[0]] if len(at) else 0.0
            # Sums of a few terms of order 1.
            assert abs(got - want) < 1e-13


@pytest.mark.parametrize("offset", [0.0, 0.5, 0.3])
def test_white_error_and_tone_error_as_the_banks_show_them(offset):
    plan = ChannelPlan(1.0, 12, 9, offset=offset)
    h, g = pair(12, 30, 40, 34)
    random = np.random.default_rng(1)
    x = random.standard_normal(60000) + 1j * random.standard_normal(60000)
    analysis = AnalysisBank(plan, h, dtype="complex128")
    synthesis = SynthesisBank(plan, g, dtype="complex128")

    def error(x):
        return (synthesis(analysis(x), length=len(x)) - x)[200:-200]

    measured = np.sqrt(np.mean(abs(error(x)) ** 2) / np.mean(abs(x) ** 2))
    # 60000 samples of noise: the power ratio is known to about 1 %.
    assert measured == pytest.approx(white_error(plan, h, g), rel=0.015)

    frequency = 3.37
    tone = np.exp(2j * np.pi * frequency * np.arange(3600 + 400) / 12)
    left = residual(plan, h, g)
    seen = np.sqrt(np.mean(abs(error(tone)) ** 2))
    assert seen == pytest.approx(error_spectrum(left, [frequency - offset])[0], rel=1e-9)


def test_transfers_are_the_lines_a_tone_leaves_behind():
    plan = ChannelPlan(1.0, 10, 8)
    h, g = pair(10, 25, 33, 28, seed=2)
    left = residual(plan, h, g)
    size = 10 * 8 * 10
    frequency = 3.3  # a whole number of cycles in `size` samples
    tone = np.exp(2j * np.pi * frequency * np.arange(size + 400) / 10)
    out = SynthesisBank(plan, g, dtype="complex128")(
        AnalysisBank(plan, h, dtype="complex128")(tone), length=len(tone)
    )[200 : 200 + size]
    lines = np.fft.fft(out) / size
    for order in range(8):
        cycles = (frequency + order * 10 / 8) / 10
        start = np.exp(-2j * np.pi * 200 * cycles)
        got = lines[round(cycles * size) % size] * start
        want = transfer(left, [frequency], order)[0]
        assert abs(got - want) < 1e-12
    total = sum(abs(transfer(left, [frequency], n)[0] - (n == 0)) ** 2 for n in range(8))
    assert np.sqrt(total) == pytest.approx(error_spectrum(left, [frequency])[0], rel=1e-12)


def test_noise_gain_is_what_channel_noise_becomes():
    # Boelcskei, Hlawatsch and Feichtinger 1998: output variance v (M/D) sum g^2; a tight bank
    # with the same analysis norm would have v / (M norm(h)^2 / D).
    plan = ChannelPlan(1.0, 12, 8)
    h, g = pair(12, 30, 40, 34)
    random = np.random.default_rng(3)
    noise = random.standard_normal((4000, 12)) + 1j * random.standard_normal((4000, 12))
    out = SynthesisBank(plan, g, dtype="complex128")(noise)[100:-100]
    measured = np.mean(abs(out) ** 2) / np.mean(abs(noise) ** 2)
    assert measured == pytest.approx(12 / 8 * (g.taps**2).sum(), rel=0.02)
    tight = 1 / (12 / 8 * (h.taps**2).sum())
    assert noise_gain(plan, h, g) == pytest.approx(np.sqrt(measured / tight), rel=0.01)


def test_pair_delay_is_found_or_asked_for():
    h, g = Prototype(np.ones(8), 4), Prototype(np.ones(9), 4)
    assert pair_delay_of(h, Prototype(np.ones(8), 4)) == 7
    assert pair_delay_of(h, g, 5) == 5
    with pytest.raises(ValueError, match="pair_delay must be given"):
        pair_delay_of(h, g)
    with pytest.raises(ValueError, match=r"synthesis.channels"):
        residual(ChannelPlan(1.0, 4, 2), h, Prototype(np.ones(8), 8))
