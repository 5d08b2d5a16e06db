"""Block powers against their definition, the noise estimate, bursts, duty."""

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan
from chanbank.analysis.activity import measure_activity
from chanbank.analysis.power import BlockPower
from chanbank.prototype.window import window_prototype
from chanbank.recordings import SigMFWriter, open_recording, write_sigmf


def noise(count, seed=0, streams=1):
    generator = np.random.default_rng(seed)
    shape = (count,) if streams == 1 else (streams, count)
    samples = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
    return (samples / np.sqrt(2)).astype(np.complex64)


def bank_of(channels=16, hop=12, **settings):
    plan = ChannelPlan(64e3, channels, hop)
    return AnalysisBank(plan, window_prototype(channels, 6, "hamming"), **settings)


def measure(folder, samples, bank=None, *, rate=64e3, **settings):
    write_sigmf(folder / "quay", samples, sample_rate=rate, center_frequency=1e6, overwrite=True)
    with open_recording(folder / "quay") as recording:
        return measure_activity(recording, bank or bank_of(), **settings)


def direct(samples, bank, burst, block):
    """Mean and strongest burst of each block, frame by frame; the transients left out."""
    hop, length, count = bank.plan.hop, bank.prototype.length, samples.shape[-1]
    frames = bank(samples).astype(complex)
    frames = frames.reshape(-1, *frames.shape[-2:])
    power = (np.abs(frames) ** 2).mean(axis=0)[-(-(length - 1) // hop) : -(-count // hop)]
    means, peaks = [], []
    for at in range(0, len(power), block):
        part = power[at : at + block]
        bursts = [part[b : b + burst] for b in range(0, len(part), burst)]
        judged = [b.mean(axis=0) for b in bursts if 2 * len(b) >= burst or len(bursts) == 1]
        means.append(part.mean(axis=0))
        peaks.append(np.max(judged, axis=0))
    return np.array(means), np.array(peaks), power


@pytest.mark.parametrize("streams", [1, 2])
@pytest.mark.parametrize(("burst", "block"), [(16, 16), (16, 64), (5, 35), (7, 700), (1000, 2000)])
def test_block_powers_are_their_definition(tmp_path, monkeypatch, burst, block, streams):
    monkeypatch.setattr("chanbank.analysis.runs._BLOCK_BYTES", 20000)
    bank, samples = bank_of(), noise(5001, streams=streams)
    activity = measure(tmp_path, samples, bank, burst_frames=burst, block_frames=block)
    total = -(-5001 // 12) - -(-95 // 12)
    burst = min(burst, total)
    block = burst * -(-block // burst)
    assert (activity.burst_frames, activity.block_frames) == (burst, block)
    means, peaks, power = direct(samples, bank, burst, block)
    # float32 sums of at most 1000 terms.
    np.testing.assert_allclose(activity.power, means, rtol=1e-5)
    np.testing.assert_allclose(activity.peak, peaks, rtol=1e-5)
    np.testing.assert_allclose(10 ** (activity.mean_power_db / 10), power.mean(axis=0), rtol=1e-5)
    np.testing.assert_allclose(10 ** (activity.peak_power_db / 10), peaks.max(axis=0), rtol=1e-5)
    assert activity.frames.sum() == len(power)
    first = -(-95 // 12)
    expected = (12 * (first + np.arange(0, len(power), block)) - 47.5) / 64e3
    np.testing.assert_allclose(activity.times, expected, rtol=1e-12)


def test_white_noise_has_its_density(tmp_path):
    # Noise of variance 1 over 64 kHz: -48.06 dB re full scale per hertz in every channel,
    # whatever the bank (Harris 1978: the ENBW is what turns power into density).
    activity = measure(tmp_path, noise(600_000))
    effective = 600_000 / 16 / 1.4  # about as many independent values in each channel
    sigma = 4.34 / np.sqrt(effective)
    assert np.abs(activity.density_db + 10 * np.log10(64e3)).max() < 5 * sigma
    assert activity.noise_density_db == pytest.approx(-10 * np.log10(64e3), abs=0.1)
    taps = bank_of().prototype.taps
    assert activity.noise_power_db == pytest.approx(10 * np.log10(np.sum(taps**2)), abs=0.1)
    assert activity.active(10).tolist() == []
    assert not activity.duty(10).any()


def test_full_scale_is_0_db(tmp_path):
    tone = np.exp(2j * np.pi * 3 / 16 * np.arange(9600)).astype(np.complex64)
    activity = measure(tmp_path, tone)
    assert activity.mean_power_db[3] == pytest.approx(0, abs=1e-4)
    counts = np.empty(2 * 9600, np.int16)
    counts[0::2], counts[1::2] = 16384, 0
    write_sigmf(tmp_path / "counts", counts, datatype="ci16_le", sample_rate=64e3)
    with open_recording(tmp_path / "counts") as recording:
        activity = measure_activity(recording, bank_of())
    assert activity.mean_power_db[0] == pytest.approx(-6.0206, abs=1e-4)
    real = AnalysisBank(ChannelPlan(64e3, 16, 12, real=True), bank_of().prototype)
    activity = measure(tmp_path, tone.real.copy(), real)
    assert activity.mean_power_db[3] == pytest.approx(-6.0206, abs=1e-4)


def test_three_quarters_of_the_channels_may_be_busy(tmp_path):
    samples = 0.01 * noise(40_000)
    quiet = measure(tmp_path, samples)
    t = np.arange(40_000)
    for k in range(12):
        samples += (0.1 * np.exp(2j * np.pi * (k / 16 * t + 0.1 * k))).astype(np.complex64)
    busy = measure(tmp_path, samples)
    assert busy.noise_power_db == pytest.approx(quiet.noise_power_db, abs=1)
    assert busy.active(20).tolist() == list(range(12))
    assert busy.duty(20)[:12].tolist() == [1.0] * 12


def test_a_short_burst_counts(tmp_path):
    # 40 ms in 10 s: the mean rises by less than the threshold, the burst does not hide.
    samples = 0.01 * noise(640_000)
    t = np.arange(2560)
    shape = np.hanning(2560)
    samples[300_000:302_560] += (0.01 * shape * np.exp(2j * np.pi * 5 / 16 * t)).astype("c8")
    activity = measure(tmp_path, samples, burst_frames=64)
    assert activity.active(10).tolist() == [5]
    assert activity.mean_power_db[5] < activity.noise_power_db + 10
    rows = np.flatnonzero(activity.peak[:, 5] > 10 ** ((activity.noise_power_db + 10) / 10))
    assert activity.times[rows].min() > 300_000 / 64e3 - 0.012
    assert activity.times[rows].max() < 302_560 / 64e3
    assert activity.duty(10)[5] == pytest.approx(len(rows) / len(activity.times), rel=0.05)
    # Many bursts in a block: the block still shows its strongest one.
    coarse = measure(tmp_path, samples, burst_frames=64, block_frames=6400)
    assert coarse.active(10).tolist() == [5]
    assert coarse.peak_power_db[5] == activity.peak_power_db[5]


def test_the_record_of_blocks_stays_small(tmp_path, monkeypatch):
    monkeypatch.setattr("chanbank.analysis.activity._KEPT_VALUES", 16 * 20)
    activity = measure(tmp_path, noise(50_000), burst_frames=8)
    assert len(activity.times) <= 20
    assert activity.block_frames % 8 == 0
    assert activity.frames.sum() == -(-50_000 // 12) - -(-95 // 12)


def test_blocks_do_not_run_across_segments(tmp_path):
    with SigMFWriter(tmp_path / "quay", "cf32_le", sample_rate=64e3) as writer:
        writer.capture(center_frequency=1e6)
        writer.write(noise(5000))
        writer.capture(center_frequency=2e6)
        writer.write(2 * noise(50, seed=1))  # too short for a frame of its own
        writer.capture(center_frequency=3e6)
        writer.write(4 * noise(5000, seed=2))
    with open_recording(tmp_path / "quay") as recording:
        activity = measure_activity(recording, bank_of(), block_frames=128)
    levels = 10 * np.log10(activity.power.mean(axis=1))
    quiet, loud = levels[activity.times < 5000 / 64e3], levels[activity.times > 5050 / 64e3]
    assert len(quiet) + len(loud) == len(levels) == 8
    assert np.ptp(quiet) < 2 and np.ptp(loud) < 2
    assert loud.mean() - quiet.mean() == pytest.approx(12.04, abs=0.5)


def test_exact_silence(tmp_path):
    activity = measure(tmp_path, np.zeros(5000, np.complex64))
    assert activity.noise_power_db == -np.inf
    assert (activity.mean_power_db == -np.inf).all()
    assert activity.active().tolist() == [] and not activity.duty().any()
    # Stretches of exact silence (lost samples filled up) say nothing about the noise.
    samples = np.zeros(60_000, np.complex64)
    samples[:20_000] = noise(20_000)
    taps = bank_of().prototype.taps
    assert measure(tmp_path, samples).noise_power_db == pytest.approx(
        10 * np.log10(np.sum(taps**2)), abs=0.5
    )


def test_a_recording_shorter_than_the_prototype(tmp_path):
    # No frame is free of transients: all are taken.
    activity = measure(tmp_path, noise(50))
    assert activity.frames.sum() == -(-(50 + 95) // 12)
    assert np.isfinite(activity.mean_power_db).all()


def test_a_stretch_and_a_selection(tmp_path):
    samples = noise(5001)
    bank = bank_of(select=[3, 1])
    part = measure(tmp_path, samples, bank, start=1200, length=3000)
    assert part.channels.tolist() == [3, 1]
    assert part.frequencies.tolist() == [1012000.0, 1004000.0]
    seconds = measure(tmp_path, samples, bank, start=0.01875, length=0.046875, unit="seconds")
    np.testing.assert_array_equal(seconds.power, part.power)
    alone = measure(tmp_path, samples[1200:4200].copy(), bank)
    np.testing.assert_allclose(part.power, alone.power, rtol=1e-5)
    np.testing.assert_allclose(part.times, alone.times + 1200 / 64e3)


def test_huge_values_do_not_overflow(tmp_path):
    # The square of 1e25 is beyond single precision; the power is not.
    activity = measure(tmp_path, 1e25 * noise(5000).astype(np.complex128).astype("c8"))
    assert activity.nonfinite_frames.tolist() == [0] * 16
    taps = bank_of().prototype.taps
    wanted = 500 + 10 * np.log10(np.sum(taps**2))
    assert activity.mean_power_db.mean() == pytest.approx(wanted, abs=0.5)


def test_arrays_are_read_only(tmp_path):
    activity = measure(tmp_path, noise(5000))
    for name in ("channels", "frequencies", "times", "frames", "power", "peak", "mean_power_db"):
        assert not getattr(activity, name).flags.writeable, name
    with pytest.raises(ValueError, match="threshold_db"):
        activity.active(float("nan"))
    with pytest.raises(TypeError, match="threshold_db"):
        activity.duty("loud")
    assert "16 channels" in repr(activity)


def test_partial_bursts(tmp_path):
    # Pieces of any sizes give what one piece gives.
    generator = np.random.default_rng(7)
    frames = generator.standard_normal((2, 3, 1000)) + 1j * generator.standard_normal((2, 3, 1000))
    whole = BlockPower(3, [1000], 10, 4)
    whole.add(frames)
    whole.end_run()
    pieces = BlockPower(3, [1000], 10, 4)
    at = 0
    while at < 1000:
        step = int(generator.integers(0, 57))
        pieces.add(frames[..., at : at + step])
        at += step
    pieces.end_run()
    # Sums in another order: double precision.
    np.testing.assert_allclose(pieces.power, whole.power, rtol=2e-7)
    np.testing.assert_allclose(pieces.peak, whole.peak, rtol=2e-7)
    assert pieces.frames.tolist() == whole.frames.tolist() == [40] * 25
