"""boxcar_prototype with hop 1 is the DFT bin as a filter: closed forms and the sliding DFT."""

import math

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype


def dirichlet(f, channels):
    """abs(sin(pi f) / (M sin(pi f / M))): F. J. Harris, Proc. IEEE 66(1), 1978."""
    return abs(np.sin(np.pi * f) / (channels * np.sin(np.pi * f / channels)))


def steady(bank, tone):
    """The largest and smallest magnitude per channel once the window is full."""
    frames = np.abs(bank.push(tone))[bank.plan.channels :]
    assert np.ptp(frames, axis=0).max() < 1e-13
    return frames[0]


@pytest.mark.parametrize("channels", [8, 16, 64, 1024])
def test_first_sidelobe_measured_and_closed_form(channels):
    prototype = boxcar_prototype(channels)
    found = minimize_scalar(
        lambda f: -abs(prototype.response([f])[0]),
        bounds=(1.2, 1.8),
        method="bounded",
        options={"xatol": 1e-10},
    )
    level = 20 * math.log10(-found.fun)
    # Computed from the closed form, to the digits given: 8: -12.797 at 1.4380 ... many: -13.2615.
    published = {8: -12.797, 16: -13.147, 64: -13.254, 1024: -13.2614}
    assert level == pytest.approx(published[channels], abs=6e-4)
    assert -found.fun == pytest.approx(dirichlet(found.x, channels), abs=1e-14)
    bank = AnalysisBank(ChannelPlan(1.0, channels, 1), prototype, dtype="complex128")
    tone = np.exp(2j * np.pi * (3 + found.x) / channels * np.arange(3 * channels))
    measured = 20 * math.log10(steady(bank, tone)[3])
    assert measured == pytest.approx(level, abs=1e-9)


def test_first_sidelobe_of_many_channels_is_13_26_db():
    # 20 log10 abs(cos s) with tan s = s: the sidelobe of sin(x)/x.
    s = 4.493409457909064
    limit = 20 * math.log10(abs(math.cos(s)))
    assert limit == pytest.approx(-13.26, abs=5e-3)
    f = s / math.pi
    level = 20 * math.log10(abs(boxcar_prototype(1 << 16).response([f])[0]))
    assert level == pytest.approx(limit, abs=1e-6)


@pytest.mark.parametrize("channels", [5, 16, 64])
def test_nulls_at_all_other_centres_and_scalloping(channels):
    bank = AnalysisBank(
        ChannelPlan(1.0, channels, 1), boxcar_prototype(channels), dtype="complex128"
    )
    t = np.arange(3 * channels)
    at_centre = steady(bank, np.exp(2j * np.pi * 2 / channels * t))
    assert at_centre[2] == pytest.approx(1, abs=1e-13)
    assert np.delete(at_centre, 2).max() < 1e-13
    bank.reset()
    between = steady(bank, np.exp(2j * np.pi * 2.5 / channels * t))
    wanted = dirichlet(2.5 - np.arange(channels), channels)
    assert np.abs(between - wanted).max() < 1e-13


def test_scalloping_of_many_channels_is_3_92_db():
    # Harris 1978, Table I: 3.92 dB; the limit is 20 log10(pi / 2).
    bank = AnalysisBank(ChannelPlan(1.0, 1024, 1), boxcar_prototype(1024), dtype="complex128")
    tone = np.exp(2j * np.pi * 7.5 / 1024 * np.arange(2048))
    loss = -20 * math.log10(np.abs(bank.push(tone))[-1, 7])
    assert loss == pytest.approx(20 * math.log10(math.pi / 2), abs=1e-5)
    assert loss == pytest.approx(3.92, abs=5e-3)


@pytest.mark.parametrize("channels", [7, 8])
def test_bins_k_and_minus_k_are_mirror_images(channels):
    rng = np.random.default_rng(1)
    x = rng.standard_normal(100)
    y = AnalysisBank(ChannelPlan(1.0, channels, 1), boxcar_prototype(channels), dtype="complex128")(
        x
    )
    for k in range(1, channels):
        assert np.abs(y[:, k] - np.conj(y[:, channels - k])).max() < 1e-14


@pytest.mark.parametrize("channels", [4, 9, 16])
def test_sliding_dft_recursion(channels):
    """E. Jacobsen and R. Lyons, "The sliding DFT", IEEE SP Magazine 20(2), 2003 (from memory).

    S[n] = exp(j 2 pi k / M) (S[n-1] + x[n] - x[n-M]) is the DFT of the newest M samples, its phase
    counted from the oldest of them; frame phase counts from the newest: M - 1 samples apart.
    """
    rng = np.random.default_rng(2)
    count = 20 * channels
    x = rng.standard_normal(count) + 1j * rng.standard_normal(count)
    bank = AnalysisBank(
        ChannelPlan(1.0, channels, 1),
        boxcar_prototype(channels),
        dtype="complex128",
        phase="frame",
    )
    frames = channels * bank.push(x)
    k = np.arange(channels)
    turn = np.exp(2j * np.pi * k / channels)
    state = np.zeros(channels, complex)
    padded = np.concatenate([np.zeros(channels), x])
    for n in range(count):
        state = turn * (state + padded[n + channels] - padded[n])
        # The recursion's fixed rotation: exp(-j 2 pi k (M - 1) / M) = exp(+j 2 pi k / M).
        assert np.abs(frames[n] * turn - state).max() < 1e-13 * channels
