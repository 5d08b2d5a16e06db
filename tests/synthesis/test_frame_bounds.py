"""Frame bounds against closed forms, published tables and the explicit polyphase matrix."""

import numpy as np
import pytest
import scipy.signal
from scipy.special import gamma

from chanbank import ChannelPlan, Prototype, window_prototype
from chanbank.synthesis import frames as module
from chanbank.synthesis.frames import frame_bounds

# A few hundred products of doubles.
CLOSE = 1e-11


def bounds(taps, channels, hop):
    return frame_bounds(ChannelPlan(1.0, channels, hop), Prototype(taps, channels))


@pytest.mark.parametrize(
    "window, rate, low, high",
    [
        # Painless case (Daubechies, Grossmann and Meyer 1986): S is diagonal,
        # M sum over m of w[n - m D]^2; its extremes over n, worked out for cosine windows.
        ("boxcar", 2, 2, 2),
        ("hann", 2, 0.5, 1),
        ("hann", 4, 1.5, 1.5),
        ("hann", 8, 3, 3),
        (("general_hamming", 0.54), 2, 0.5832, 1.0064),
        (("general_hamming", 0.54), 4, 4 * (0.54**2 + 0.46**2 / 2), 4 * (0.54**2 + 0.46**2 / 2)),
        ("blackman", 2, 0.2312, 1),
        ("blackman", 4, 1.2056, 1.2312),
        ("blackman", 8, 2.4368, 2.4368),
    ],
)
def test_windows_no_longer_than_the_transform(window, rate, low, high):
    got = bounds(scipy.signal.get_window(window, 64), 64, 64 // rate)
    assert got.lower / 64 == pytest.approx(low, rel=CLOSE)
    assert got.upper / 64 == pytest.approx(high, rel=CLOSE)


def test_the_sine_window_is_tight_from_double_oversampling_on():
    # Princen and Bradley, IEEE Trans. ASSP 34(5), 1986: w[n]^2 + w[n + M/2]^2 = 1.
    sine = np.sin(np.pi * np.arange(64) / 64)
    for rate in (2, 4, 8):
        got = bounds(sine, 64, 64 // rate)
        assert got.lower == pytest.approx(64 * rate / 2, rel=CLOSE)
        assert got.condition == pytest.approx(1, rel=CLOSE)
        assert abs(got.condition_db) < 1e-9


@pytest.mark.parametrize(
    "product, q, low, high",
    [
        # Gaussian window, exact bounds (Daubechies 1990 gives them as 1.203, 7.091 and 3.853,
        # 4.147 for redundancy 4; the others were computed anew to five figures).
        (np.pi / 2, 0.5, 1.2025, 7.0905),
        (np.pi / 2, 1.0, 3.8531, 4.1470),
        (np.pi / 2, 2.0, 3.3220, 4.6789),
        (np.pi / 2, 3.0, 1.4272, 6.7719),
        (3 * np.pi / 4, 1.0, 1.7696, 3.5724),
        (3 * np.pi / 4, 2.0, 2.2146, 3.1192),
        (np.pi, 1.0, 0.6012, 3.5456),
        (np.pi, 2.0, 1.6001, 2.4251),
        (3 * np.pi / 2, 1.5, 0.4001, 2.3637),
        (3 * np.pi / 2, 2.0, 0.8313, 1.8178),
    ],
)
def test_gaussian_window_against_the_exact_columns(product, q, low, high):
    # g(x) = pi^(-1/4) exp(-x^2 / 2) in steps d: q = D d, p = 2 pi / (M d).
    hop = 24
    channels = round(2 * np.pi / product * hop)
    step = q / hop
    x = np.arange(-9, 9 + step, step)
    taps = np.pi**-0.25 * np.exp(-(x**2) / 2)
    got = bounds(taps, channels, hop)
    assert got.lower * step == pytest.approx(low, abs=6e-5)
    assert got.upper * step == pytest.approx(high, abs=6e-5)


def test_square_lattice_of_redundancy_two_has_condition_root_two():
    # Strohmer and Beaver, IEEE Trans. Commun. 51(7), 2003.
    hop, channels = 32, 64
    step = np.sqrt(np.pi) / hop
    # The extremes lie where samples fall on the window's centre and half-way.
    x = step * np.arange(-180, 181)
    got = bounds(np.pi**-0.25 * np.exp(-(x**2) / 2), channels, hop)
    assert got.condition == pytest.approx(np.sqrt(2), rel=1e-9)
    assert got.upper * step == pytest.approx(2 * np.sqrt(np.pi) / gamma(0.75) ** 2, rel=1e-9)


def explicit(taps, channels, hop, points):
    """Extremes of E(w)^H E(w), E[k, r] = sum_l f_k[l D + r] exp(jwl), on a grid of w."""
    k = np.arange(channels)[:, None]
    index = np.arange(len(taps))
    low, high = np.inf, 0.0
    for w in np.linspace(0, 2 * np.pi, points):
        terms = np.exp(-2j * np.pi * k * index / channels) * taps * np.exp(1j * w * (index // hop))
        matrix = np.stack([terms[:, r::hop].sum(axis=1) for r in range(hop)], axis=1)
        value = np.linalg.svd(matrix, compute_uv=False)
        low, high = min(low, value[-1] ** 2), max(high, value[0] ** 2)
    return low, high


@pytest.mark.parametrize(
    "channels, hop, length", [(8, 6, 24), (10, 4, 25), (9, 6, 27), (12, 8, 30)]
)
def test_against_the_explicit_polyphase_matrix(channels, hop, length):
    taps = np.random.default_rng(channels).standard_normal(length)
    got = bounds(taps, channels, hop)
    low, high = explicit(taps, channels, hop, 721)
    # The grid can only miss extremes inwards; a step of 2 pi / 720 misses by at most its square
    # times the curvature.
    assert got.lower <= low * (1 + 1e-12) and got.upper >= high * (1 - 1e-12)
    assert got.lower == pytest.approx(low, rel=1e-3)
    assert got.upper == pytest.approx(high, rel=1e-3)


def test_two_taps_to_a_branch_at_critical_sampling():
    # One-line closed form: A = M min (|a| - |b|)^2, B = M max (|a| + |b|)^2.
    taps = np.sin(np.pi * (np.arange(16) + 0.5) / 16)
    got = bounds(taps, 8, 8)
    a, b = abs(taps[:8]), abs(taps[8:])
    assert got.lower == pytest.approx(8 * ((a - b) ** 2).min(), rel=1e-9)
    assert got.upper == pytest.approx(8 * ((a + b) ** 2).max(), rel=1e-9)
    assert got.lower == pytest.approx(0.15372, abs=1e-5)


@pytest.mark.parametrize("banded", [4096, 4])  # as a band, and by Lanczos steps
def test_sparse_and_dense_ways_agree(monkeypatch, banded):
    taps = np.hanning(4 * 37 + 2)[1:-1]
    dense = bounds(taps, 37, 30)
    monkeypatch.setattr(module, "_DENSE", 4)
    monkeypatch.setattr(module, "_BANDED", banded)
    sparse = bounds(taps, 37, 30)
    assert sparse.lower == pytest.approx(dense.lower, rel=1e-6)
    assert sparse.upper == pytest.approx(dense.upper, rel=1e-6)


def test_a_bank_that_loses_something_has_lower_bound_zero():
    taps = np.ones(16)
    taps[3::8] = 0
    got = bounds(taps, 8, 8)
    assert got.lower == 0 and got.condition == np.inf and got.lower_db == -np.inf


def test_refusals():
    with pytest.raises(ValueError, match="plan of 8 and a prototype for 4"):
        frame_bounds(ChannelPlan(1.0, 8, 4), Prototype([1.0], 4))


@pytest.mark.parametrize(
    "channels, hop, digits", [(200, 149, 1e-7), (128, 101, 1e-7), (540, 539, 0)]
)
def test_matrices_of_many_columns_agree_with_their_dense_form(channels, hop, digits, monkeypatch):
    prototype = window_prototype(channels, 6, ("kaiser", 8.0))
    plan = ChannelPlan(1.0, channels, hop)
    sparse = frame_bounds(plan, prototype)
    monkeypatch.setattr(module, "_DENSE", 1 << 20)
    matrices = module._Polyphase(prototype.taps, channels, hop)
    low, high = matrices.extremes(np.linspace(0, np.pi, 7))
    dense = module.FrameBounds(low.min(), high.max())
    # Eigenvalues of A^H A carry some eps of the largest for each column at worst; up to 512
    # columns the sparse way looks at five angles only.
    slack = max(digits, 540 * 2.3e-16) * dense.upper
    assert abs(sparse.lower - dense.lower) < slack
    assert abs(sparse.upper - dense.upper) < slack
