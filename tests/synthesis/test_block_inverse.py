"""Critical sampling undone in blocks."""

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, Prototype
from chanbank.prototype.window import window_prototype
from chanbank.synthesis.block import BlockInverse


def decibels(ratio):
    return 20 * np.log10(ratio)


def kaiser(channels, branches, beta=8.0):
    return window_prototype(channels, branches, ("kaiser", beta))


def noise(count, seed=0):
    random = np.random.default_rng(seed)
    return random.standard_normal(count) + 1j * random.standard_normal(count)


@pytest.mark.parametrize(
    "offset, phase", [(0.0, "absolute"), (0.5, "frame"), (0.3, "absolute"), (0.3, "frame")]
)
def test_a_whole_signal_comes_back(offset, phase):
    plan, h = ChannelPlan(1.0, 12, 12, offset=offset), kaiser(12, 5)
    x = noise(601)
    y = AnalysisBank(plan, h, dtype="complex128", phase=phase)(x)
    inverse = BlockInverse(plan, h, len(y), length=601, phase=phase)
    # Rounding, amplified by the condition of the branches (about 1e2).
    assert abs(inverse(y) - x).max() < 1e-12
    assert inverse.within(-200) == (0, 601)


def test_real_signals_and_antennas():
    plan, h = ChannelPlan(1.0, 12, 12, real=True), kaiser(12, 4)
    x = np.random.default_rng(1).standard_normal((2, 400))
    y = AnalysisBank(plan, h, dtype="complex128")(x)
    back = BlockInverse(plan, h, y.shape[-2], length=400)(y)
    assert back.dtype == float and abs(back - x).max() < 1e-12


@pytest.mark.parametrize("offset", [0.0, 0.3])
def test_frames_cut_from_a_stream(offset):
    plan, h = ChannelPlan(1.0, 8, 8, offset=offset), kaiser(8, 4)
    x = noise(8 * 700)
    y = AnalysisBank(plan, h, dtype="complex128")(x)
    inverse = BlockInverse(plan, h, 300)
    back = inverse(y[200:500], first_frame=200)
    start = 200 * 8 + inverse.first_sample
    wrong = back - x[start : start + inverse.samples]
    level = inverse.error_db
    assert level[0] > -20 and level[-1] > -20  # the ends are lost
    assert level.min() < -150
    for wanted in (-40, -100):
        first, last = inverse.within(wanted)
        assert last - first > 500
        # One draw of the ends against the mean over the draws behind error_db.
        assert decibels(np.sqrt(np.mean(abs(wrong[first:last]) ** 2) / 2)) < wanted + 6
    assert inverse.within(-400) is None
    middle = len(level) // 2
    assert level[middle] < level[middle // 2] - 40


def test_noise_gain_and_what_regularisation_trades():
    plan, h = ChannelPlan(1.0, 16, 16), kaiser(16, 6)
    y = 200
    plain = BlockInverse(plan, h, y)
    damped = BlockInverse(plan, h, y, regularisation=1e-2)
    assert 0 < damped.noise_gain_db < plain.noise_gain_db
    assert damped.error_db.min() > plain.error_db.min() + 20
    # Channel noise of variance 1 in, against a tight bank's 1 / norm(h)^2.
    random = np.random.default_rng(2)
    frames = random.standard_normal((20, y, 16)) + 1j * random.standard_normal((20, y, 16))
    out = np.mean(abs(plain(frames)) ** 2) / 2
    tight = 1 / (h.taps**2).sum()
    assert 10 * np.log10(out / tight) == pytest.approx(plain.noise_gain_db, abs=0.4)


def test_refusals():
    plan, h = ChannelPlan(1.0, 8, 8), kaiser(8, 4)
    with pytest.raises(ValueError, match=r"hop 4, channels 8. Below that dual_prototype"):
        BlockInverse(ChannelPlan(1.0, 8, 4), h, 10)
    with pytest.raises(ValueError, match=r"ceil\(\(100 \+ 32 - 1\) / 8\) = 17; got 16"):
        BlockInverse(plan, h, 16, length=100)
    with pytest.raises(ValueError, match="branch 2 has none"):
        BlockInverse(plan, Prototype([1.0, 1, 0, 1, 1, 1, 1, 1], 8), 10)
    inverse = BlockInverse(plan, h, 10)
    with pytest.raises(ValueError, match=r"\(..., 10, 8\); got \(9, 8\)"):
        inverse(np.zeros((9, 8)))
    with pytest.raises(ValueError, match="finite"):
        inverse(np.full((10, 8), np.nan))
    with pytest.raises(ValueError, match="offset must be 0"):
        BlockInverse(ChannelPlan(1.0, 8, 8, real=True, offset=0.5), h, 10)
