"""The channel plan: rasters, frequencies, indices, refusals."""

import dataclasses
import math
import pickle
from fractions import Fraction

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from chanbank import ChannelPlan


@pytest.mark.parametrize("channels", [1, 2, 3, 7, 8, 96, 97, 192, 288, 4096, 1 << 20])
def test_frequencies_are_in_fftfreq_order(channels):
    plan = ChannelPlan(channels * 1000.0, channels, 1, center_frequency=5e6)
    wanted = 5e6 + np.fft.fftfreq(channels) * channels * 1000.0
    # One rounding of the product in fftfreq against none here.
    assert np.allclose(plan.frequencies, wanted, rtol=4e-16, atol=0)
    assert plan.spacing == 1000.0


@given(
    channels=st.integers(1, 60),
    offset=st.one_of(st.floats(-100, 100), st.sampled_from([0.5, -0.5, 3, 1.25, -7.75])),
)
def test_centres_are_wrapped_into_half_open_band(channels, offset):
    plan = ChannelPlan(1.0, channels, 1, offset=offset)
    exact = [(Fraction(k) + Fraction(offset)) / channels % 1 for k in range(channels)]
    exact = [value - 1 if value >= Fraction(1, 2) else value for value in exact]
    # Two roundings of numbers up to M/2 spacings, in units of the band.
    assert np.allclose(plan.normalised_frequencies, [float(v) for v in exact], rtol=0, atol=3e-16)


@given(channels=st.integers(1, 60), offset=st.floats(-100, 100))
def test_real_plans_hold_the_centres_from_zero_to_half_the_rate(channels, offset):
    plan = ChannelPlan(1.0, channels, 1, offset=offset, real=True)
    exact = {k: (Fraction(k) + Fraction(offset)) / channels % 1 for k in range(channels)}
    wanted = sorted((k for k in exact if exact[k] <= Fraction(1, 2)), key=lambda k: exact[k])
    assert plan.dft_index.tolist() == wanted
    assert plan.output_channels == len(wanted)
    assert np.allclose(
        plan.normalised_frequencies, [float(exact[k]) for k in wanted], rtol=0, atol=3e-16
    )


def test_real_even_plan_is_rfftfreq():
    plan = ChannelPlan(8.0, 8, 4, real=True)
    assert np.array_equal(plan.frequencies, np.fft.rfftfreq(8) * 8.0)


@given(channels=st.integers(1, 50), offset=st.floats(-5, 5), real=st.booleans())
def test_index_of_inverts_frequencies(channels, offset, real):
    plan = ChannelPlan(
        channels * 25e3, channels, 1, center_frequency=156e6, offset=offset, real=real
    )
    for index, frequency in enumerate(plan.frequencies.tolist()):
        half = channels * 12.5e3
        low = 156e6 if real else 156e6 - half
        inside = min(max(frequency, low), 156e6 + half)
        assert plan.index_of(inside) == index
        for nudge in (-12e3, 12e3):
            near = inside + nudge
            if low <= near <= 156e6 + half and not real:
                assert plan.index_of(near) == index


def test_index_of_maritime_channels():
    # ITU Radio Regulations, Appendix 18: channel 16 = 156.800 MHz, 70 = 156.525 MHz.
    plan = ChannelPlan.from_spacing(
        4.8e6, 25e3, oversampling="4/3", center_frequency=158e6, align_to=156.8e6
    )
    assert (plan.channels, plan.hop, plan.offset) == (192, 144, 0)
    for frequency in (156.8e6, 156.525e6, 161.0e6 - 1e6):
        assert plan.frequencies[plan.index_of(frequency)] == pytest.approx(frequency, abs=1e-6)


def test_index_of_refuses_what_is_outside_the_band():
    plan = ChannelPlan(96e3, 8, 6, center_frequency=1e6)
    with pytest.raises(ValueError, match=r"952000 to 1048000 Hz"):
        plan.index_of(1.1e6)
    with pytest.raises(ValueError, match="frequency"):
        ChannelPlan(96e3, 8, 6, real=True).index_of(-1)


@pytest.mark.parametrize(
    "rate, spacing, oversampling, channels, hop",
    [
        (2.4e6, "25000/3", 1.5, 288, 192),
        (2.4e6, 25000 / 3, 1.5, 288, 192),
        (Fraction(2400000), Fraction(25000, 3), 1.5, 288, 192),
        (110e3, 1e3, 1.1, 110, 100),
        (4096.0, 1.0, 4 / 3, 4096, 3072),
        (100.0, 1.0, 1, 100, 100),
        (100.0, 1.0, 3, 100, 33),
        (7.0, 7.0, 1, 1, 1),
    ],
)
def test_from_spacing_finds_the_smallest_plan(rate, spacing, oversampling, channels, hop):
    plan = ChannelPlan.from_spacing(rate, spacing, oversampling=oversampling)
    assert (plan.channels, plan.hop) == (channels, hop)
    assert plan.channels / plan.hop >= Fraction(oversampling) - Fraction(1, 10**9)


def test_a_raster_that_does_not_fit_names_rates_and_ratios():
    with pytest.raises(ValueError) as caught:
        ChannelPlan.from_spacing(2.048e6, 25e3, oversampling=2)
    text = str(caught.value)
    for word in ("81.92", "2025000", "2050000", "2025/2048", "1025/1024"):
        assert word in text
    assert Fraction(2048000) * Fraction(1025, 1024) == 2050000
    with pytest.raises(ValueError, match=r"1 channels: resample by 5/2"):
        ChannelPlan.from_spacing(10e3, 25e3, oversampling=1)


def test_alignment_to_any_frequency_of_the_raster():
    plan = ChannelPlan.from_spacing(
        100e3, 10e3, oversampling=2, center_frequency=1_003_000, align_to=1_500_000
    )
    assert plan.exact_offset == Fraction(7, 10)
    steps = (plan.frequencies - 1_500_000) / 10e3
    assert np.allclose(steps, np.round(steps), rtol=0, atol=1e-9)
    aligned = ChannelPlan.from_spacing(2.4e6, 25000 / 3, oversampling=1.5, align_to=25000 / 3 * 5)
    assert aligned.offset == 0


def test_exact_numbers_are_kept():
    plan = ChannelPlan("25000/3", 3, 2, offset="1/3", center_frequency="1/7")
    assert plan.exact_sample_rate == Fraction(25000, 3)
    assert plan.exact_offset == Fraction(1, 3)
    assert plan.exact_center_frequency == Fraction(1, 7)
    assert plan.sample_rate == 25000 / 3
    again = pickle.loads(pickle.dumps(plan))
    assert again == plan
    assert again.exact_offset == Fraction(1, 3)


def test_plans_are_frozen_hashable_and_replaceable():
    plan = ChannelPlan(8.0, 8, 4)
    with pytest.raises(dataclasses.FrozenInstanceError):
        plan.hop = 2
    assert dataclasses.replace(plan, hop=2) == ChannelPlan(8.0, 8, 2)
    assert len({plan, ChannelPlan(8, 8, 4)}) == 1
    with pytest.raises(ValueError, match="read-only"):
        plan.frequencies[0] = 1


def test_hop_beyond_channels_prints_the_inequality():
    with pytest.raises(ValueError, match=r"hop 9 > channels 8"):
        ChannelPlan(8.0, 8, 9)


@pytest.mark.parametrize("oversampling", [0.5, 9, math.nextafter(1, 0)])
def test_oversampling_out_of_range(oversampling):
    with pytest.raises(ValueError, match="oversampling"):
        ChannelPlan.from_spacing(8.0, 1.0, oversampling=oversampling)
