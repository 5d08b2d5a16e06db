"""Self-dual prototypes: the condition to rounding, Parseval, published kin."""

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank
from chanbank.prototype.tight import tight_prototype
from chanbank.synthesis.condition import noise_gain, white_error
from chanbank.synthesis.frames import frame_bounds


def decibels(ratio):
    return 20 * np.log10(ratio)


def own_dual(h):
    return Prototype(
        h.taps * h.design["scale"], h.channels, pair_delay=h.length - 1, label="own dual"
    )


@pytest.mark.parametrize(
    "channels, hop, branches, stopband",
    [
        # Stopbands as reached when this was written, less 1 dB.
        (64, 32, 1, 22),
        (64, 32, 4, 49),
        (64, 32, 6, 67),
        (64, 48, 8, 30.5),
        (64, 16, 4, 150),
        (60, 40, 6, 35),
        (15, 10, 5, 25),
    ],
)
def test_self_dual_to_machine_precision(channels, hop, branches, stopband):
    plan = ChannelPlan(1.0, channels, hop)
    h = tight_prototype(plan, branches)
    assert h.taps.sum() == pytest.approx(1, abs=1e-12)
    assert np.array_equal(h.taps, h.taps[::-1])
    g = own_dual(h)
    assert decibels(white_error(plan, h, g)) < -295
    assert abs(decibels(noise_gain(plan, h, g))) < 1e-9
    assert h.design["stopband_db"] < -stopband
    got = frame_bounds(plan, h)
    assert got.condition - 1 < 1e-12


def test_the_design_keeps_at_many_channels():
    plan = ChannelPlan(1.0, 4096, 2048)
    h = tight_prototype(plan, 8)
    assert decibels(white_error(plan, h, own_dual(h))) <= -300
    assert h.design["stopband_db"] <= -88


def test_parseval():
    plan = ChannelPlan(1.0, 24, 16, offset=0.3)
    h = tight_prototype(plan, 5)
    random = np.random.default_rng(0)
    x = random.standard_normal(1000) + 1j * random.standard_normal(1000)
    frames = AnalysisBank(plan, h, dtype="complex128")(x)
    energy = (abs(x) ** 2).sum() * 24 / 16 * (h.taps**2).sum()
    assert (abs(frames) ** 2).sum() == pytest.approx(energy, rel=1e-12)
    back = SynthesisBank(plan, own_dual(h), dtype="complex128")(frames, length=1000)
    assert abs(back - x).max() < 1e-13 * abs(x).max() * 10


def test_refusals():
    with pytest.raises(ValueError, match="got hop 16 = channels 16"):
        tight_prototype(ChannelPlan(1.0, 16, 16), 2)
    with pytest.raises(ValueError, match="12 \\* 1025 / 1 = 12300"):
        tight_prototype(ChannelPlan(1.0, 1025, 1024), 12)
    with pytest.raises(ValueError, match="stopband < min\\(channels, 16\\) / 2"):
        tight_prototype(ChannelPlan(1.0, 8, 4), 4, stopband=4.5)
