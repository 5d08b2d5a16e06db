"""Both reports on random banks agree, and the measured one hears small faults in a kernel."""

import copy

import numpy as np
import pytest

from chanbank import (
    AnalysisBank,
    ChannelPlan,
    Prototype,
    ReportDisagreement,
    SynthesisBank,
    bank_report,
    measured_report,
    window_prototype,
)


def random_bank(seed, *, pair=None, taps_per_branch=7):
    """Plan, prototypes, banks and occupied bandwidth: every geometry the library takes."""
    rng = np.random.default_rng(seed)
    channels = int(rng.integers(4, 97))
    lowest = 1 if rng.random() < 0.4 else channels // 2
    hop = int(rng.integers(lowest, channels + 1))
    real = bool(rng.random() < 0.5)
    pair = bool(rng.random() < 0.5) if pair is None else pair
    offset = [0.0, 0.5, float(rng.random())][int(rng.integers(3))]
    if real and pair and offset not in (0.0, 0.5):
        offset = 0.5
    branch = int(rng.integers(1, taps_per_branch + 1))
    window = [("kaiser", float(rng.uniform(4, 10))), "hann", "blackman", "boxcar"][
        int(rng.integers(4))
    ]
    taps = np.array(
        window_prototype(channels, branch, window, cutoff=float(rng.uniform(0.4, 0.6))).taps
    )
    kind = rng.integers(3)
    if kind == 1:  # not symmetric
        taps *= 1 + 1e-3 * rng.standard_normal(len(taps))
    elif kind == 2:  # the last branch row not filled
        taps = taps[: len(taps) - int(rng.integers(0, channels // 2))]
    plan = ChannelPlan(1e6, channels, hop, real=real, offset=offset)
    h = Prototype(taps, channels)
    held = {
        "dtype": ["complex64", "complex128"][int(rng.integers(2))],
        "phase": ["absolute", "frame"][int(rng.integers(2))],
        "layout": ["frames", "channels"][int(rng.integers(2))],
    }
    analysis, synthesis, g = AnalysisBank(plan, h, **held), None, None
    if pair:
        wide = int(rng.integers(1, taps_per_branch + 1))
        taps = window_prototype(channels, wide, ("kaiser", 7.0)).taps * hop
        delay = round(h.delay + (len(taps) - 1) / 2)
        g = Prototype(taps, channels, pair_delay=delay)
        synthesis = SynthesisBank(plan, g, **held)
    width = min(float(rng.uniform(0.3, 1.0)) * plan.spacing, plan.channel_rate)
    return plan, h, g, analysis, synthesis, width


@pytest.mark.parametrize("seed", range(30))
def test_formula_and_measurement_agree(seed):
    plan, h, g, analysis, synthesis, width = random_bank(seed)
    said = bank_report(plan, h, g, occupied_bandwidth=width)
    done = measured_report(
        analysis, synthesis, occupied_bandwidth=width, seed=seed, channels=some(plan, seed)
    )
    found = said.verify(done)
    assert found.agreed
    # Only what is counted, not measured, may be missing from the measurement.
    counted = {"multiplications", "additions", "converter_multiplications", "converter_additions"}
    assert set(found.skipped) <= counted | {"state"}
    assert {line.what for line in found.lines} >= {"tone responses", "tone frames", "noise frames"}
    # Above the floor of the dtype the figures agree in dB, whatever the report itself allows.
    for name, unit in ((n, said[n].definition.unit) for n in said.figures):
        if unit == "dB" and said[name].present and done[name].present:
            a, b = said[name].values, done[name].values
            a = a[done.channels] if a.ndim else a
            loud = np.abs(a) < -done.floor_db - 45
            assert (np.abs(a - b)[loud] < 0.1).all(), name


def some(plan, seed):
    """Five channels to test with noise: the edges, where real samples differ, and three others."""
    count = plan.output_channels
    rng = np.random.default_rng(seed)
    return np.unique([0, min(1, count - 1), count - 1, *rng.integers(0, count, 2)])


class Faulty:
    """An analysis bank with a fault in it, that looks like the sound one from outside."""

    def __init__(self, bank):
        self.bank, self.count = bank, 0

    def __getattr__(self, name):
        if name.startswith("__") or name == "bank":
            raise AttributeError(name)
        return getattr(self.bank, name)

    def push(self, samples):
        return self.bank.push(samples)


class TapOff(Faulty):
    """One tap off by a thousandth of the largest."""

    def __init__(self, bank, seed):
        taps = bank.prototype.taps.copy()
        place = np.random.default_rng(seed).integers(len(taps))
        taps[place] += 1e-3 * np.abs(taps).max()
        wrong = Prototype(taps, bank.plan.channels)
        held = {"dtype": bank.dtype.name, "phase": bank.phase, "layout": bank.layout}
        super().__init__(AnalysisBank(bank.plan, wrong, **held))
        self.prototype = bank.prototype


class FrameTurned(Faulty):
    """Each thirteenth frame is rotated by one sample too many."""

    def __init__(self, bank, seed):
        super().__init__(bank)

    def push(self, samples):
        first = self.bank.next_frame
        frames = self.bank.push(samples)
        rows = frames.swapaxes(-1, -2) if self.bank.layout == "channels" else frames
        turn = np.exp(2j * np.pi * self.bank.plan.normalised_frequencies)
        wrong = (first + np.arange(rows.shape[-2])) % 13 == 5
        rows[..., wrong, :] *= turn.astype(rows.dtype)
        return frames


class AntennaLeaks(Faulty):
    """Once a stream, the second antenna goes on from the history of the first."""

    def __init__(self, bank, seed):
        super().__init__(bank)
        self.rng, self.lines = np.random.default_rng(seed), None

    def reset(self, first_sample=0):
        self.lines, self.first, self.count = None, first_sample, 0
        self.when = int(self.rng.integers(8, 30))

    def push(self, samples):
        if self.lines is None:
            self.lines = [copy.deepcopy(self.bank) for _ in samples]
            for line in self.lines:
                line.reset(self.first)
        self.count += 1
        if self.count == self.when and len(samples) > 1:
            self.lines[1] = copy.deepcopy(self.lines[0])
        return np.stack([line.push(x) for line, x in zip(self.lines, samples, strict=True)])


class BorderDropped(Faulty):
    """At one border between pushes of a stream the history is lost."""

    def __init__(self, bank, seed):
        super().__init__(bank)
        self.rng = np.random.default_rng(seed)

    def reset(self, first_sample=0):
        self.bank.reset(first_sample)
        self.count, self.when = 0, int(self.rng.integers(8, 30))

    def push(self, samples):
        self.count += 1
        if self.count == self.when:
            self.bank.reset(self.bank.next_sample)
        return self.bank.push(samples)


GEOMETRIES = range(200, 208)


@pytest.fixture(scope="module")
def formula():
    """Sound banks of many geometries and their reports by formula."""
    held = {}
    for seed in GEOMETRIES:
        plan, h, _, bank, _, _ = random_bank(seed, pair=False, taps_per_branch=4)
        held[seed] = bank, bank_report(plan, h)
    return held


def measured(bank, seed):
    return measured_report(bank, channels=[0], seed=seed)


@pytest.mark.parametrize("seed", GEOMETRIES)
def test_the_sound_bank_passes(formula, seed):
    bank, said = formula[seed]
    assert said.verify(measured(Faulty(bank), seed)).agreed


@pytest.mark.parametrize(
    "fault, heard",
    [
        (TapOff, {"tone responses", "noise frames"}),
        (FrameTurned, {"tone frames"}),
        (AntennaLeaks, {"tone frames"}),
        (BorderDropped, {"tone frames"}),
    ],
)
@pytest.mark.parametrize("seed", GEOMETRIES)
def test_a_faulty_kernel_is_caught(formula, seed, fault, heard):
    bank, said = formula[seed]
    with pytest.raises(ReportDisagreement, match=r"tone|noise") as caught:
        said.verify(measured(fault(bank, seed), seed))
    lines = {line.what for line in caught.value.verification.lines if not line.agreed}
    assert lines >= heard


@pytest.mark.parametrize("channels", [1024, 16384])
def test_one_tap_is_caught_among_very_many(channels):
    """White noise is as loud in all channels: one tap in 2 M stands out however many there are."""
    plan = ChannelPlan(1e6, channels, channels)
    h = window_prototype(channels, 2, "hann")
    said = bank_report(plan, h)
    from chanbank.metrics import _drive, _kernel_checks, _tone_run

    for bank, sound in (
        (AnalysisBank(plan, h), True),
        (TapOff(AnalysisBank(plan, h), 7), False),
    ):
        driver = _drive.Driver(bank, None, np.random.default_rng(1))
        noise = _tone_run.run_noise(driver, 1)
        line = _kernel_checks.kernel_checks(SimpleReport(noise), said)[0]
        assert line.agreed is sound
        assert sound or line.difference > 3 * line.allowed


class SimpleReport:
    dtype = "complex64"

    def __init__(self, noise):
        self.noise, self.tones = (noise,), ()


@pytest.mark.parametrize("seed", [1, 4, 9])
def test_a_wrong_synthesis_tap_is_caught(seed):
    plan, h, g, analysis, synthesis, _ = random_bank(300 + seed, pair=True, taps_per_branch=4)
    taps = g.taps.copy()
    taps[len(taps) // 3] += 1e-3 * taps.max()
    wrong = Prototype(taps, g.channels, pair_delay=g.pair_delay)
    held = {"dtype": analysis.dtype.name, "phase": analysis.phase, "layout": analysis.layout}
    said = bank_report(plan, h, g)
    assert said.verify(measured_report(analysis, synthesis, channels=[0])).agreed
    done = measured_report(analysis, SynthesisBank(plan, wrong, **held), channels=[0])
    with pytest.raises(ReportDisagreement, match="noise samples"):
        said.verify(done)


def test_the_stream_in_progress_is_left_alone_and_the_seed_decides():
    plan, h = ChannelPlan(8.0, 8, 6), window_prototype(8, 3, "hann")
    rng = np.random.default_rng(0)
    x = rng.standard_normal(60).astype("float32") + 0j
    bank, twin = AnalysisBank(plan, h), AnalysisBank(plan, h)
    bank.push(x[:25].astype("complex64"))
    twin.push(x[:25].astype("complex64"))
    one = measured_report(bank, seed=5)
    two = measured_report(bank, seed=5)
    other = measured_report(bank, seed=6)
    assert one.to_dict() == two.to_dict() != other.to_dict()
    assert bank.next_sample == 25
    rest = x[25:].astype("complex64")
    assert np.array_equal(bank.push(rest), twin.push(rest))


def test_selected_channels_are_measured_alone():
    plan, h = ChannelPlan(16.0, 16, 12), window_prototype(16, 4, "hann")
    bank = AnalysisBank(plan, h, select=[3, 12, 7])
    done = measured_report(bank)
    assert done.channels.tolist() == [3, 12, 7]
    assert all(tone.channels.tolist() == [3, 12, 7] for tone in done.tones)
    assert bank_report(plan, h).verify(done).agreed
    with pytest.raises(ValueError, match="analysis must return all channels"):
        measured_report(bank, SynthesisBank(plan, h, pair_delay=127))
    with pytest.raises(ValueError, match="channels must be distinct output channels"):
        measured_report(bank, channels=[4])


def test_a_bank_too_large_to_sweep_says_so():
    plan, h = ChannelPlan(64.0, 64, 48, real=True), window_prototype(64, 4, ("kaiser", 6.0))
    done = measured_report(AnalysisBank(plan, h), max_samples=1000, channels=[0, 9, 32], seed=3)
    said = bank_report(plan, h)
    assert said.verify(done).agreed
    assert "max_samples" in done["stopband_level"].reason()
    assert any("swept near the tested channels only" in note for note in done.notes)
    # What came from noise instead carries a larger uncertainty, and is near.
    assert 0.01 < done["total_leakage"].uncertainty < 0.5
    for name in ("total_leakage", "alias_mean"):
        difference = np.abs(said[name].values[done.channels] - done[name].values)
        assert (difference < 4 * done[name].uncertainty).all(), name


def test_reports_of_other_banks_are_refused():
    h = window_prototype(8, 3, "hann")
    one = bank_report(ChannelPlan(8.0, 8, 6), h)
    with pytest.raises(ValueError, match="same plan"):
        one.verify(bank_report(ChannelPlan(8.0, 8, 5), h))
    with pytest.raises(ValueError, match="occupied_bandwidth"):
        one.verify(bank_report(ChannelPlan(8.0, 8, 6), h, occupied_bandwidth=0.5))
    with pytest.raises(TypeError, match="other must be a BankReport"):
        one.verify(3)
    wrong = bank_report(ChannelPlan(8.0, 8, 6), window_prototype(8, 3, "hamming"))
    with pytest.raises(ReportDisagreement, match="highest_sidelobe") as caught:
        one.verify(wrong)
    assert not caught.value.verification.agreed
    assert "DISAGREES" in str(caught.value.verification)
