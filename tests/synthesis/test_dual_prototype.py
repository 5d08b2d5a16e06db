"""Duals: exact where they can be, balanced elsewhere, and good bandpasses in both cases."""

import numpy as np
import pytest
import scipy.signal

from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank
from chanbank.prototype.nyquist import nyquist_prototype
from chanbank.prototype.window import window_prototype
from chanbank.synthesis.condition import residual, white_error
from chanbank.synthesis.dual import dual_prototype


def kaiser(channels, branches, beta=9.0):
    return window_prototype(channels, branches, ("kaiser", beta))


def decibels(ratio):
    return 20 * np.log10(ratio)


def stopband(taps, channels, edge):
    size = 16 * len(taps)
    level = abs(np.fft.rfft(taps, size))
    frequencies = np.arange(len(level)) * channels / size
    return decibels(level[frequencies >= edge].max() / level[frequencies < edge].max())


@pytest.mark.parametrize("hop", [8, 16, 24, 32])
def test_canonical_dual_against_scipy(hop):
    # scipy.signal.ShortTimeFFT computes the canonical dual window where the window is no longer
    # than the transform: with least="norm" this is the shortest exact dual.
    window = np.hanning(66)[1:-1] ** 0.7 * np.linspace(1, 2, 64)  # deliberately lopsided
    want = scipy.signal.ShortTimeFFT(window, hop=hop, fs=1.0, fft_mode="twosided").dual_win
    plan = ChannelPlan(1.0, 64, hop)
    # The analysis sum runs h[i] x[nD - i], a correlation with the reversed window.
    h = Prototype(window[::-1].copy(), 64)
    g = dual_prototype(plan, h, taps_per_branch=1, exact=True, least="norm", pair_delay=63)
    # SciPy's inverse transform divides by M, the synthesis bank here does not.
    assert abs(g.taps * 64 - want).max() < 1e-12 * abs(want).max()


@pytest.mark.parametrize(
    "channels, hop, branches, span",
    [
        (32, 16, 8, None),
        (32, 16, 5, 6),
        (30, 20, 4, 8),
        (33, 22, 3, 6),
        (33, 22, 4, 7),
        (21, 9, 4, 4),
    ],
)
def test_exact_duals_reconstruct_whole_signals(channels, hop, branches, span):
    h = kaiser(channels, branches, 7.0)
    plan = ChannelPlan(1.0, channels, hop, offset=0.3)
    g = dual_prototype(plan, h, taps_per_branch=span)
    assert g.design["exact"] and g.design["error_db"] < -280
    random = np.random.default_rng(0)
    x = random.standard_normal(777) + 1j * random.standard_normal(777)
    y = AnalysisBank(plan, h, dtype="complex128")(x)
    back = SynthesisBank(plan, g, dtype="complex128")(y, length=777)
    # The ends included; some 1e3 roundings of size 1e-16.
    assert abs(back - x).max() < 1e-12


@pytest.mark.parametrize("channels, hop, branches", [(33, 22, 3), (33, 22, 4), (32, 24, 6)])
def test_a_symmetric_prototype_gets_a_symmetric_dual(channels, hop, branches):
    h = kaiser(channels, branches)
    for span in (branches, branches + 1, 3 * branches):
        g = dual_prototype(ChannelPlan(1.0, channels, hop), h, taps_per_branch=span, exact=False)
        taps = g.taps
        if (branches + span) * channels % 2:
            # Half a sample apart: the dual stands on whole samples, its first tap is zero.
            assert taps[0] == 0.0
            taps = taps[1:]
            assert g.pair_delay == ((branches + span) * channels - 1) // 2
        else:
            assert g.pair_delay == (branches + span) * channels // 2 - 1
        assert np.array_equal(taps, taps[::-1])


def test_frequency_sampling_prototypes_keep_their_own_delay():
    # Symmetric about KM/2: with full-length duals the pair's delay is (K + Q) M / 2.
    h = nyquist_prototype(16, 4)
    g = dual_prototype(ChannelPlan(1.0, 16, 8), h, taps_per_branch=8)
    assert g.pair_delay == (4 + 8) * 8
    assert g.design["error_db"] < -280


def test_a_prototype_without_symmetry_and_lengths_that_fill_no_branch():
    random = np.random.default_rng(1)
    taps = np.hanning(51) * (1 + 0.2 * random.standard_normal(51))
    h = Prototype(taps / taps.sum(), 16)
    plan = ChannelPlan(1.0, 16, 10)
    g = dual_prototype(plan, h)
    assert g.design["exact"]
    assert decibels(white_error(plan, h, g)) == pytest.approx(g.design["error_db"], abs=1e-6)
    early = dual_prototype(plan, h, taps_per_branch=8, pair_delay=50, exact=False)
    assert early.pair_delay == 50 and early.design["error_db"] < -15


def test_balanced_dual_stands_where_it_was_asked_to():
    plan, h = ChannelPlan(1.0, 64, 48), kaiser(64, 8, 8.0)
    for balance in (0.0, 12.0, -12.0):
        g = dual_prototype(plan, h, taps_per_branch=10, balance=balance)
        design = g.design
        assert not design["exact"]
        assert design["stopband_db"] == pytest.approx(design["error_db"] - balance, abs=0.3)
        # The design's own word against an independent look at the coefficients.
        assert stopband(g.taps, 64, 64 / 48 - 0.5) == pytest.approx(design["stopband_db"], abs=0.1)
        assert decibels(white_error(plan, h, g)) == pytest.approx(design["error_db"], abs=1e-6)


def dense_optimum(plan, h, span, delay, edge, weight):
    """The same convex problem as one dense matrix, for a small case."""
    channels, hop = plan.channels, plan.hop
    length = span * channels
    rows = []
    for s in range(length):
        unit = np.zeros(length)
        unit[s] = 1.0
        left = residual(plan, h, Prototype(unit, channels), delay).values.copy()
        rows.append(left)
    zero = residual(plan, h, Prototype(np.zeros(length), channels), delay).values
    matrix = np.stack([(row - zero).ravel() for row in rows], axis=1)
    index = np.arange(length)
    difference = (index[:, None] - index) / channels
    inside = 2 * edge * np.sinc(2 * edge * difference)
    energy = channels * np.eye(length) - inside
    gain = hop / h.taps.sum()
    normal = matrix.T @ matrix / hop + weight / gain**2 * energy
    return np.linalg.solve(normal, -matrix.T @ zero.ravel() / hop)


@pytest.mark.parametrize("lopsided", [False, True])
def test_the_low_rank_solution_is_the_optimum(lopsided):
    plan = ChannelPlan(1.0, 12, 8)
    taps = kaiser(12, 3, 6.0).taps
    if lopsided:
        taps = taps * np.linspace(0.5, 1.5, 36)
        taps = taps / taps.sum()
    h = Prototype(taps, 12)
    g = dual_prototype(plan, h, taps_per_branch=4, exact=False)
    want = dense_optimum(plan, h, 4, g.pair_delay, 1.0, g.design["weight"])
    assert abs(g.taps - want).max() < 1e-7 * abs(want).max()


def test_the_exact_dual_filters_better_than_the_shortest_one():
    plan, h = ChannelPlan(1.0, 64, 32), kaiser(64, 8)
    best = dual_prototype(plan, h, taps_per_branch=16, exact=True)
    short = dual_prototype(plan, h, taps_per_branch=16, exact=True, least="norm")
    assert best.design["exact"] and short.design["exact"]
    assert best.design["stopband_db"] < short.design["stopband_db"] - 10
    assert short.design["noise_gain_db"] <= best.design["noise_gain_db"] + 1e-9


def test_short_exact_duals_say_that_they_filter_poorly():
    g = dual_prototype(ChannelPlan(1.0, 32, 16), kaiser(32, 8), taps_per_branch=8)
    assert g.design["exact"] and "filters much worse" in g.design["note"]


def test_any_hop_up_to_one_below_the_number_of_channels():
    h = kaiser(9, 3, 5.0)
    for hop in range(1, 9):
        g = dual_prototype(ChannelPlan(1.0, 9, hop), h)
        assert g.design["error_db"] < (-280 if g.design["exact"] else -15)


def test_sizes_of_real_banks():
    h = kaiser(4096, 12, 10.0)
    g = dual_prototype(ChannelPlan(1.0, 4096, 3072), h, taps_per_branch=12)
    assert g.design["error_db"] < -65 and g.design["stopband_db"] < -65
    small = dual_prototype(ChannelPlan(1.0, 64, 48), kaiser(64, 12, 10.0), taps_per_branch=12)
    assert g.design["error_db"] == pytest.approx(small.design["error_db"], abs=0.3)


def test_the_boxcar_is_its_own_dual_even_at_critical_sampling():
    h = Prototype(np.ones(8) / 8, 8)
    g = dual_prototype(ChannelPlan(1.0, 8, 8), h)
    assert g.design["exact"]
    assert g.taps == pytest.approx(np.ones(8), abs=1e-9)


def test_refusals():
    plan, h = ChannelPlan(1.0, 32, 24), kaiser(32, 8)
    with pytest.raises(ValueError, match=r"at critical sampling .* BlockInverse"):
        dual_prototype(ChannelPlan(1.0, 32, 32), h)
    with pytest.raises(ValueError, match=r"taps_per_branch must be at least 22 .* got 21"):
        dual_prototype(plan, h, taps_per_branch=21, exact=True)
    # The length it names does suffice.
    assert dual_prototype(plan, h, taps_per_branch=22, exact=True).design["exact"]
    with pytest.raises(ValueError, match="plan of 32 and a prototype for 16"):
        dual_prototype(plan, kaiser(16, 8))
    with pytest.raises(ValueError, match="other than zero"):
        dual_prototype(plan, Prototype(np.zeros(32), 32))
    with pytest.raises(ValueError, match="stopband < channels / 2"):
        dual_prototype(plan, h, stopband=16.0)
    with pytest.raises(ValueError, match="pair_delay <="):
        dual_prototype(plan, h, taps_per_branch=8, pair_delay=512)
    with pytest.raises(ValueError, match="element 3 is nan"):
        dual_prototype(plan, Prototype([1.0, 2.0, 3.0, np.nan], 32))
