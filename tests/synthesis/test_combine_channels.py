"""Neighbouring channels in one wider channel: what is inside, what leaks in, any rate."""

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, Prototype
from chanbank.synthesis.combine import ChannelCombiner, combine_channels
from chanbank.synthesis.dual import dual_prototype
from chanbank.synthesis.pair import prototype_pair

CHANNELS, HOP, EDGE = 64, 48, 64 / 48 - 0.5


def decibels(ratio):
    return 20 * np.log10(ratio)


def rms(x):
    return np.sqrt(np.mean(abs(x) ** 2))


@pytest.fixture(scope="module")
def designed():
    return prototype_pair(ChannelPlan(1.0, CHANNELS, HOP), 12, 24)


def tone(frequency, count, channels=CHANNELS):
    return np.exp(2j * np.pi * frequency * np.arange(count) / channels)


@pytest.mark.parametrize("spacings", [8, 7, 9])
def test_six_channels_in_one(designed, spacings):
    h, g = designed
    plan = ChannelPlan(1.0, CHANNELS, HOP)
    analysis = AnalysisBank(plan, h, dtype="complex128")
    combiner = ChannelCombiner(plan, g, 20, 6, spacings=spacings, dtype="complex128")
    assert combiner.alias_free
    count = CHANNELS * 120
    middle = slice(40 * spacings, -40 * spacings)
    inside = []
    for frequency in np.linspace(19 + EDGE, 26 - EDGE, 13):
        wide = combiner(analysis(tone(frequency, count)), length=count)
        same = np.exp(2j * np.pi * (frequency - 22.5) * np.arange(len(wide)) / spacings)
        inside.append(rms((wide - same)[middle]))
    assert decibels(max(inside)) < -98
    outside = []
    for frequency in [
        *np.linspace(25 + EDGE + 0.01, 40, 10),
        *np.linspace(0, 20 - EDGE - 0.01, 10),
    ]:
        wide = combiner(analysis(tone(frequency, count)), length=count)
        outside.append(rms(wide[middle]))
    assert decibels(max(outside)) < -110
    # Wideband: noise limited to the flat band, whole-number cycles so that it can be resampled.
    random = np.random.default_rng(0)
    cycles = np.arange(int(np.ceil((19 + EDGE) * 120)), int((26 - EDGE) * 120))
    weight = random.standard_normal(len(cycles)) + 1j * random.standard_normal(len(cycles))
    spectrum = np.zeros(count, complex)
    spectrum[cycles] = weight
    x = np.fft.ifft(spectrum)
    period = np.fft.fft(
        combiner(analysis(np.tile(x, 3)), length=3 * count)[120 * spacings :][: 120 * spacings]
    )
    want = np.zeros(120 * spacings, complex)
    want[(cycles - 22 * 120 - 60) % (120 * spacings)] = weight * spacings / CHANNELS
    # A whole period in, so that the phases agree.
    assert decibels(rms(period - want) / rms(want)) < -105


def test_what_it_reports():
    plan = ChannelPlan(1.6e6, CHANNELS, HOP, center_frequency=156.8e6)
    g = Prototype(np.ones(64), 64, pair_delay=63)
    combiner = ChannelCombiner(plan, g, 62, 4)
    # Channels 62, 63, 0 and 1 are neighbours: -2 .. 1 spacings.
    assert combiner.center_frequency == 156.8e6 - 0.5 * 25e3
    assert combiner.least_spacings == combiner.spacings == 5 and combiner.alias_free
    assert combiner.sample_rate == 125e3
    low, high = combiner.flat_band
    assert high - low == pytest.approx((4 + 2 - 2 * 64 / 48) * 25e3)
    assert not ChannelCombiner(plan, g, 0, 4, spacings=4).alias_free
    assert ChannelCombiner(ChannelPlan(1.0, 64, 32), g, 3, 1).flat_band is None


def test_every_rth_tap_is_a_dual_pair_for_fewer_channels():
    """All channels in one at the full rate is the synthesis itself."""
    plan = ChannelPlan(1.0, 12, 8)
    h, g = prototype_pair(plan, 6)
    random = np.random.default_rng(2)
    x = random.standard_normal(500) + 1j * random.standard_normal(500)
    frames = AnalysisBank(plan, h, dtype="complex128")(x)
    wide = combine_channels(frames, plan, g, 0, 12, spacings=12, length=500, dtype="complex128")
    mixed = x * np.exp(-2j * np.pi * 5.5 * np.arange(500) / 12)
    assert decibels(rms(wide - mixed) / rms(x)) < g.design["error_db"] + 0.5


@pytest.mark.parametrize(
    "offset, phase, layout",
    [(0.0, "frame", "frames"), (0.37, "frame", "channels"), (0.5, "absolute", "frames")],
)
def test_offsets_phases_layouts_and_only_the_channels_wanted(offset, phase, layout):
    plan = ChannelPlan(1.0, 16, 12, offset=offset)
    h, g = prototype_pair(plan, 6, 8)
    count = 1600
    x = tone(6.2 + offset, count, 16)
    options = {"dtype": "complex128", "phase": phase, "layout": layout}
    frames = AnalysisBank(plan, h, **options)(x)
    wide = combine_channels(frames, plan, g, 4, 6, spacings=8, length=count, **options)
    same = np.exp(2j * np.pi * (6.2 - 6.5) * np.arange(800) / 8)
    assert rms((wide - same)[100:-100]) < 3e-3
    own = np.take(frames, np.arange(4, 10), axis=-1 if layout == "frames" else -2)
    again = combine_channels(own, plan, g, 4, 6, spacings=8, length=count, **options)
    assert np.array_equal(again, wide)


def test_a_dual_without_a_series_is_interpolated():
    plan = ChannelPlan(1.0, CHANNELS, HOP)
    h, _ = prototype_pair(plan, 8)
    exact = dual_prototype(plan, h, taps_per_branch=16, exact=False)
    count = CHANNELS * 80
    frames = AnalysisBank(plan, h, dtype="complex128")(tone(22.3, count))
    wide = combine_channels(
        frames, plan, exact, 20, 6, spacings=9, length=count, dtype="complex128"
    )
    same = np.exp(2j * np.pi * (22.3 - 22.5) * np.arange(len(wide)) / 9)
    # As good as the pair itself (the worst tone runs up to 16 dB above the rms).
    assert decibels(rms((wide - same)[200:-200])) < exact.design["error_db"] + 16


@pytest.mark.parametrize("dtype", ["complex64", "complex128"])
@pytest.mark.parametrize("spacings, count", [(8, 6), (7, 5)])
def test_pieces_give_the_bits_of_one_call(designed, dtype, spacings, count):
    h, g = designed
    plan = ChannelPlan(1.0, CHANNELS, HOP)
    random = np.random.default_rng(3)
    x = (random.standard_normal((2, 3000)) + 1j * random.standard_normal((2, 3000))).astype(dtype)
    frames = AnalysisBank(plan, h, dtype=dtype)(x)
    combiner = ChannelCombiner(plan, g, 20, count, spacings=spacings, dtype=dtype)
    whole = combiner(frames)
    assert whole.dtype == dtype and whole.shape[0] == 2
    parts = [combiner.push(piece) for piece in np.split(frames, [0, 1, 2, 9, 40], axis=1)]
    parts.append(combiner.finish())
    assert np.array_equal(np.concatenate(parts, axis=-1), whole)


def test_refusals():
    plan = ChannelPlan(1.0, 16, 12)
    g = Prototype(np.ones(16), 16, pair_delay=15)
    with pytest.raises(ValueError, match="carries none"):
        ChannelCombiner(plan, Prototype(np.ones(16), 16), 0, 2)
    with pytest.raises(ValueError, match="plan of 16 and a prototype for 8"):
        ChannelCombiner(plan, Prototype(np.ones(8), 8, pair_delay=7), 0, 2)
    with pytest.raises(ValueError, match=r"count 6, spacings 5, channels 16"):
        ChannelCombiner(plan, g, 0, 6, spacings=5)
    with pytest.raises(ValueError, match="16 channels; got 16"):
        ChannelCombiner(plan, g, 16, 2)
    with pytest.raises(ValueError, match=r"7 \+ 3 > 9"):
        ChannelCombiner(ChannelPlan(1.0, 16, 12, real=True), g, 7, 3)
    combiner = ChannelCombiner(plan, g, 0, 6)
    with pytest.raises(ValueError, match="got 5"):
        combiner.push(np.zeros((3, 5), "complex64"))
    with pytest.raises(TypeError, match="complex128"):
        combiner.push(np.zeros((3, 16), "complex128"))
    with pytest.raises(ValueError, match="length must be at most"):
        combiner(np.zeros((3, 16), "complex64"), length=500)
