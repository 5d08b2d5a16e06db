"""Real recordings of radio telescopes through the whole path.

The samples come with the `baseband` package: a pulsar observation of 16 MHz, complex 8 bit, two
polarisations (DADA), and 32 MHz of real 2-bit samples in eight threads (VDIF).
"""

import numpy as np
import pytest
from baseband import dada, data, vdif
from scipy.signal import upfirdn

from chanbank import AnalysisBank, ChannelPlan
from chanbank.prototype.window import window_prototype
from chanbank.recordings import open_recording, write_sigmf
from chanbank.splitting import split_recording


def frame_bounds(plan, taps, points=256):
    """A and B with A sum abs(x)^2 <= sum abs(y)^2 <= B sum abs(x)^2, on a grid of frequencies.

    Squares of the extreme singular values of the p x q matrices of the Zak transform, p = M/c,
    q = D/c, c = gcd(M, D) (M. Zibulski and Y. Y. Zeevi, Applied and Computational Harmonic
    Analysis 4, 1997, 188-221).
    """
    channels, hop = plan.channels, plan.hop
    common = np.gcd(channels, hop)
    p, q = channels // common, hop // common
    length = len(taps)
    theta = 2 * np.pi * np.arange(points) / points
    low, high = np.inf, 0.0
    for b in range(common):
        matrix = np.zeros((points, p, q), complex)
        for j in range(p):
            for s in range(q):
                base = j * hop - b - s * channels
                step = q * channels
                first = -(base // step)
                for i in range(first, (length - 1 - base) // step + 1):
                    if 0 <= base + i * step < length:
                        matrix[:, j, s] += taps[base + i * step] * np.exp(-1j * theta * i)
        values = np.linalg.svd(np.sqrt(channels) * matrix, compute_uv=False)
        low, high = min(low, values.min() ** 2), max(high, values.max() ** 2)
    return low, high


def down_converters(samples, plan, taps):
    """Mix by the absolute sample index, filter, keep every D-th sample: SciPy alone."""
    index = np.arange(len(samples))
    columns = []
    for k in range(plan.output_channels):
        mixed = samples * np.exp(-2j * np.pi * (k * index % plan.channels) / plan.channels)
        columns.append(upfirdn(taps, mixed, 1, plan.hop))
    return np.stack(columns, axis=-1)


def read_all(result):
    """Every channel recording, (streams, frames, channels)."""
    channels = []
    for channel in result:
        with open_recording(channel.path, verify=True) as recording:
            channels.append(np.atleast_2d(recording.read()))
    return np.stack(channels, axis=-1)


def check(got, samples, plan, taps):
    low, high = frame_bounds(plan, taps)
    assert 1 < high / low < 4  # the bounds say something
    weights = np.ones(plan.output_channels)
    if plan.real:
        # The channels between 0 and half the rate stand for their mirror images, too.
        weights[1 : (plan.channels + 1) // 2] = 2
    for frames, stream in zip(got, samples, strict=True):
        oracle = down_converters(stream, plan, taps)
        bound = 5e-7 * np.abs(taps).sum() * np.abs(stream).max()
        assert frames.shape == oracle.shape
        assert np.abs(frames - oracle).max() <= bound
        energy = np.sum(weights * np.abs(frames.astype(complex)) ** 2)
        ratio = energy / np.sum(np.abs(stream.astype(complex)) ** 2)
        # The grid's spacing lets a bound slip by its own square; single precision by less.
        assert low * (1 - 1e-3) <= ratio <= high * (1 + 1e-3)


def test_a_pulsar_in_complex_8_bit(tmp_path):
    with dada.open(data.SAMPLE_DADA, "rs") as stream:
        samples = stream.read().T / 128  # full scale of 8 bits is 1.0
    plan = ChannelPlan(16e6, 20, 15, center_frequency=320e6)
    bank = AnalysisBank(plan, window_prototype(20, 8, ("kaiser", 6.0)))
    with open_recording(
        data.SAMPLE_DADA,
        datatype="ci8",
        streams=2,
        header_bytes=4096,
        sample_rate=16e6,
        center_frequency=320e6,
    ) as recording:
        assert recording.shape == (2, 16000)
        np.testing.assert_array_equal(recording.read(as_float="single"), samples)
        result = split_recording(recording, bank, tmp_path / "out", progress=False)
    check(read_all(result), samples, plan, bank.prototype.taps)
    assert result.channels[0].frequency == 320e6


@pytest.mark.parametrize("datatype", ["rf32_le", "ri8"])
def test_real_2_bit_samples_in_eight_threads(tmp_path, datatype):
    with vdif.open(data.SAMPLE_VDIF, "rs") as stream:
        samples = stream.read().T
    samples = samples / np.float32(8)
    if datatype == "ri8":
        samples = np.rint(samples * 128).astype(np.int8)
    write_sigmf(tmp_path / "quay", samples, sample_rate=32e6, datatype=datatype)
    plan = ChannelPlan(32e6, 24, 18, real=True)
    bank = AnalysisBank(plan, window_prototype(24, 8, ("kaiser", 6.0)))
    with open_recording(tmp_path / "quay") as recording:
        assert recording.shape == (8, 40000)
        result = split_recording(recording, bank, tmp_path / "out", progress=False)
    if datatype == "ri8":
        samples = samples / np.float32(128)
    check(read_all(result), samples, plan, bank.prototype.taps)
