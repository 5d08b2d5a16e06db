"""Root-Nyquist prototypes against their defining equations and published figures."""

import numpy as np
import pytest

from chanbank import ChannelPlan, Prototype
from chanbank.prototype.nyquist import nyquist_prototype
from chanbank.synthesis.condition import white_error

SMOOTH = [(k, "smooth") for k in range(2, 9)]
OPTIMISED = [(6, "optimised"), (8, "optimised")]


@pytest.mark.parametrize("k, method", SMOOTH + OPTIMISED)
def test_frequency_samples_are_power_complementary(k, method):
    h = nyquist_prototype(32, k, method=method)
    assert h.length == 32 * k and h.taps.sum() == pytest.approx(1, abs=1e-12)
    # H_m = H(m / K); of the printed rows the last is complementary to 2.2e-7 only.
    levels = abs(h.response(np.arange(k + 1) / k))
    assert levels**2 + levels[::-1] ** 2 == pytest.approx(1, abs=3e-7)
    if k > 2:
        assert h.taps[0] == 0.0
        assert h.delay == 16 * k


@pytest.mark.parametrize("k, free", [(3, 1), (4, 1), (5, 2), (6, 2), (7, 3), (8, 3)])
def test_smooth_rows_solve_their_equations(k, free):
    # Mirabbasi and Martin 2003: sum over k of (-1)^k k^(2p) H_k = 0, p = 0 .. free - 1.
    values = np.array(nyquist_prototype(16, k).design["frequency_samples"])
    index = np.arange(1, k)
    for power in range(free):
        terms = 2 * (-1.0) ** index * index ** (2 * power) * values[1:]
        total = terms.sum() + (values[0] if power == 0 else 0.0)
        # Eight printed digits, weighed by k^(2p).
        assert abs(total) < 1e-8 * (1 + 2 * (index ** (2 * power)).sum())


def test_closed_forms_of_the_short_rows():
    k3 = nyquist_prototype(16, 3).design["frequency_samples"]
    assert k3[1] == pytest.approx((1 + np.sqrt(7)) / 4, abs=6e-9)
    assert k3[2] == pytest.approx((np.sqrt(7) - 1) / 4, abs=6e-9)
    half = (1 + np.sqrt(2)) / 2
    rest = np.sqrt(2 - half**2)
    k4 = nyquist_prototype(16, 4).design["frequency_samples"]
    assert k4[1] == pytest.approx((half + rest) / 2, abs=6e-9)
    assert k4[3] == pytest.approx((half - rest) / 2, abs=6e-9)


@pytest.mark.parametrize(
    "k, method, error, beyond",
    [
        # Matched pair at M/D = 2, error for white input; published for K = 3 and 4 as -44 and
        # -65 dB (Bellanger et al. 2010, from memory), the others computed independently.
        (3, "smooth", -43.43, -32.57),
        (4, "smooth", -65.20, -39.86),
        (5, "smooth", -58.15, -48.24),
        (6, "smooth", -79.45, -58.13),
        (7, "smooth", -73.58, -63.46),
        (8, "smooth", -88.31, -61.54),
        (6, "optimised", -89.33, -53.24),
        (8, "optimised", -111.55, -77.27),
    ],
)
def test_near_reconstruction_figures(k, method, error, beyond):
    plan = ChannelPlan(1.0, 64, 32)
    h = nyquist_prototype(64, k, method=method)
    # Frequency-sampling prototypes are symmetric about KM/2: the pair's delay is KM. The factor
    # makes the mean gain 1: M sum h g = D g-scale.
    scale = 32 / (64 * (h.taps**2).sum())
    g = Prototype(h.taps * scale, 64, pair_delay=64 * k)
    assert 20 * np.log10(white_error(plan, h, g)) == pytest.approx(error, abs=0.05)
    off = 20 * np.log10(white_error(plan, h, g, 64 * k - 1))
    assert off > error + 3  # one sample off costs dearly
    assert h.design["stopband_db"] == pytest.approx(beyond, abs=0.02)


@pytest.mark.parametrize("a, middle", [(0.22, 1.060113), (0.5, 1.136620), (1.0, 1.273240)])
def test_root_raised_cosine(a, middle):
    h = nyquist_prototype(8, 401, method="root-raised-cosine", rolloff=a)
    assert h.length == 3208 and h.delay == 3207 / 2
    taps = h.taps / np.sqrt((h.taps**2).sum() / 8)
    # Odd length in periods, even M: the centre falls between taps; the peak is approached.
    assert taps.max() == pytest.approx(middle, rel=0.02)
    # Its own correlation at whole periods vanishes (truncation leaves 1.1e-6 at most).
    own = np.correlate(taps, taps, "full")[len(taps) - 1 :: 8] / 8
    assert own[0] == pytest.approx(1, abs=1e-12)
    assert abs(own[1:200]).max() < 2e-6
    assert abs(h.response([0.5]))[0] == pytest.approx(np.sqrt(0.5), abs=1e-4)


def test_root_raised_cosine_at_its_removable_points():
    # Odd M and P: taps fall on t = 0 and, for a = 1/4, on t = 1 = 1 / (4 a).
    h = nyquist_prototype(5, 15, method="root-raised-cosine", rolloff=0.25)
    centre = 37
    peak = 1 - 0.25 + 1 / np.pi
    corner = (0.25 / np.sqrt(2)) * ((1 + 2 / np.pi) * np.sin(np.pi) + (1 - 2 / np.pi) * -1.0)
    assert h.taps[centre + 5] / h.taps[centre] == pytest.approx(corner / peak, rel=1e-12)


@pytest.mark.parametrize(
    "length, error", [(4, -45.6), (6, -53.6), (8, -58.9), (12, -66.1), (16, -71.0)]
)
def test_root_raised_cosine_pairs(length, error):
    plan = ChannelPlan(1.0, 64, 32)
    h = nyquist_prototype(64, length, method="root-raised-cosine")
    scale = 32 / (64 * (h.taps**2).sum())
    g = Prototype(h.taps * scale, 64, pair_delay=64 * length - 1)
    assert 20 * np.log10(white_error(plan, h, g)) == pytest.approx(error, abs=0.3)


def test_refusals():
    with pytest.raises(ValueError, match=r"one of 2, 3, 4, 6, 8 .* got 5"):
        nyquist_prototype(16, 5, method="optimised")
    with pytest.raises(ValueError, match="rolloff must be None"):
        nyquist_prototype(16, 4, rolloff=0.5)
    with pytest.raises(ValueError, match="rolloff"):
        nyquist_prototype(16, 4, method="root-raised-cosine", rolloff=1.5)
