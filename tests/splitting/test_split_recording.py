"""The main job: every channel recording against the bank, SciPy's down-converters and the clock."""

import json
import warnings
from datetime import UTC, datetime, timedelta
from fractions import Fraction

import numpy as np
import pytest
import sigmf
from oracles import down_converters

from chanbank import AnalysisBank, ChannelPlan, Prototype
from chanbank.prototype.window import window_prototype
from chanbank.recordings import SigMFWriter, open_recording, write_sigmf
from chanbank.recordings.timestamp import parse_instant
from chanbank.splitting import split_recording


@pytest.fixture(autouse=True)
def no_waiting_for_the_disk(monkeypatch):
    """Thousands of small files are not worth a flush each; the writers' own tests keep it."""
    monkeypatch.setattr("os.fsync", lambda descriptor: None)


START = "2031-05-04T09:30:00.123456789Z"


def noise(count, seed=0, streams=1):
    generator = np.random.default_rng(seed)
    shape = (count,) if streams == 1 else (streams, count)
    samples = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
    return (0.1 * samples).astype(np.complex64)


def make(folder, samples, **about):
    about = {"sample_rate": 96000, "center_frequency": 1e6, "datetime": START, **about}
    write_sigmf(folder / "quay", samples, **about)
    return open_recording(folder / "quay")


def bank_of(channels=12, hop=9, taps_per_branch=5, *, offset=0, **settings):
    plan = ChannelPlan(96e3, channels, hop, offset=offset)
    return AnalysisBank(plan, window_prototype(channels, taps_per_branch, "hamming"), **settings)


def split(recording, bank, destination, **settings):
    return split_recording(recording, bank, destination, progress=False, **settings)


def frames(bank, samples):
    """The bank's own answer, channel by channel."""
    twin = AnalysisBank(bank.plan, bank.prototype, dtype=bank.dtype.name, layout="channels")
    return twin(samples)


def data_of(channel):
    with open_recording(channel.path, verify=True) as recording:
        return recording.read()


# --- samples -------------------------------------------------------------------------------------


@pytest.mark.parametrize("offset", [0, "1/3"])
@pytest.mark.parametrize(("channels", "hop"), [(12, 9), (7, 5), (16, 16), (1, 1)])
def test_every_channel_is_the_down_converters(tmp_path, channels, hop, offset):
    bank = bank_of(channels, hop, offset=offset)
    samples = noise(1003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out")
    assert [c.index for c in result] == list(range(channels))
    oracle = down_converters(samples, bank.plan, bank.prototype.taps)
    # Single precision: one rounding per tap and per stage of the DFT at most.
    bound = 5e-7 * np.abs(bank.prototype.taps).sum() * np.abs(samples).max()
    for channel, expected in zip(result, oracle.T, strict=True):
        got = data_of(channel)
        assert got.dtype == np.complex64 and channel.samples == len(expected) == len(got)
        assert np.abs(got - expected).max() <= bound
    np.testing.assert_array_equal(
        np.array([data_of(channel) for channel in result]), frames(bank, samples)
    )


def test_without_transients(tmp_path):
    bank, samples = bank_of(), noise(1003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", transients=False)
    # The prototype of frame n lies on samples 9n - 59 .. 9n: from n = 7 to n = 111.
    length = bank.prototype.length
    assert length == 60
    expected = frames(bank, samples)[:, 7:112]
    np.testing.assert_array_equal(np.array([data_of(c) for c in result]), expected)
    with open_recording(result.channels[3].path) as channel:
        assert channel.segments[0].global_index == 7


@pytest.mark.parametrize(
    "stretch",
    [
        {"start": 101, "length": 700},
        {"start": 101 / 96e3, "length": 700 / 96e3, "unit": "seconds"},
    ],
)
def test_a_stretch_keeps_time_and_phase(tmp_path, stretch):
    bank, samples = bank_of(), noise(1003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", **stretch)
    alone = np.zeros_like(samples)
    alone[101:801] = samples[101:801]
    first, stop = -(-101 // 9), -(-(801 + 59) // 9)
    expected = frames(bank, alone)[:, first:stop]
    np.testing.assert_array_equal(np.array([data_of(c) for c in result]), expected)
    with open_recording(result.channels[0].path) as channel:
        assert channel.segments[0].global_index == first


def test_several_streams(tmp_path):
    bank, samples = bank_of(), noise(503, streams=3)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", select=[4, 11])
    expected = frames(bank, samples)
    for channel in result:
        got = data_of(channel)
        assert got.shape == (3, channel.samples)
        np.testing.assert_array_equal(got, expected[:, channel.index])


def test_integer_samples_without_conversion(tmp_path):
    bank = bank_of()
    counts = np.random.default_rng(2).integers(-9000, 9000, 2 * 1003).astype(np.int16)
    with make(tmp_path, counts, datatype="ci16_le") as recording:
        result = split(recording, bank, tmp_path / "out")
    np.testing.assert_array_equal(np.array([data_of(c) for c in result]), frames(bank, counts))


def test_real_samples(tmp_path):
    plan = ChannelPlan(96e3, 12, 9, real=True)
    bank = AnalysisBank(plan, window_prototype(12, 5, "hamming"))
    samples = noise(1003).real.copy()
    with make(tmp_path, samples, center_frequency=None) as recording:
        result = split(recording, bank, tmp_path / "out")
    assert [c.frequency for c in result] == [8000.0 * k for k in range(7)]
    oracle = down_converters(samples, plan, bank.prototype.taps)
    bound = 5e-7 * np.abs(bank.prototype.taps).sum() * np.abs(samples).max()
    assert np.abs(np.array([data_of(c) for c in result]) - oracle.T).max() <= bound


def test_double_precision_is_narrowed_to_the_datatype(tmp_path):
    bank, samples = bank_of(dtype="complex128"), noise(503).astype(complex)
    with make(tmp_path, samples) as recording:
        assert recording.datatype == "cf64_le"
        result = split(recording, bank, tmp_path / "out", select=[5])
        with pytest.raises(ValueError, match=r'recording of cf64_le .* dtype="complex128"'):
            split(recording, bank_of(), tmp_path / "other")
    expected = frames(bank, samples)[5].astype(np.complex64)
    np.testing.assert_array_equal(data_of(result.channels[0]), expected)


def test_the_banks_own_stream_is_not_touched(tmp_path):
    bank, samples = bank_of(), noise(503)
    bank.push(samples[:100])
    with make(tmp_path, samples) as recording:
        split(recording, bank, tmp_path / "out")
    assert bank.next_sample == 100


def test_many_blocks_give_what_one_call_gives(tmp_path, monkeypatch):
    monkeypatch.setattr("chanbank.analysis.runs._BLOCK_BYTES", 3000)
    bank, samples = bank_of(), noise(5003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out")
    np.testing.assert_array_equal(np.array([data_of(c) for c in result]), frames(bank, samples))


# --- place and time ------------------------------------------------------------------------------


def test_frequencies_and_rate(tmp_path):
    with make(tmp_path, noise(503)) as recording:
        result = split(recording, bank_of(offset="1/3"), tmp_path / "out")
    for channel in result:
        steps = (channel.index + Fraction(1, 3) + 6) % 12 - 6
        expected = float(1000000 + 8000 * steps)
        # One rounding of a sum of about 1 MHz.
        assert channel.frequency == pytest.approx(expected, abs=2e-10)
        with open_recording(channel.path) as opened:
            assert opened.center_frequency == pytest.approx(expected, abs=2e-10)
            assert opened.sample_rate == pytest.approx(96000 / 9, rel=1e-15)


@pytest.mark.parametrize("transients", [True, False])
def test_the_clock(tmp_path, transients):
    # A pulse at sample 777: in each channel the symmetric prototype puts its peak, between
    # frames, at the instant of that sample. The start time tells when frame 0 of the file was.
    bank = bank_of(12, 1, 5)
    samples = np.zeros(1003, np.complex64)
    samples[777] = 1
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", transients=transients, select=[0, 5])
    for channel in result:
        with open_recording(channel.path) as opened:
            envelope = np.abs(opened.read())
            begin = parse_instant(opened.segments[0].datetime)
        centre = float(np.sum(envelope * np.arange(len(envelope))) / envelope.sum())
        seen = float(begin - parse_instant(START)) + centre / 96e3
        assert seen == pytest.approx(777 / 96e3, abs=2e-9)  # the clock's picoseconds, float32


def test_start_times_are_exact(tmp_path):
    bank = bank_of()
    with make(tmp_path, noise(1003)) as recording:
        result = split(recording, bank, tmp_path / "out", start=100, select=[0])
    with open_recording(result.channels[0].path) as channel:
        text = channel.segments[0].datetime
    # Frame 12 is the first at or after sample 100; its instant lies (60 - 1)/2 samples before.
    seconds = Fraction(12 * 9) - Fraction(59, 2)
    whole = datetime(2031, 5, 4, 9, 30, 0, 123456, UTC) + timedelta(
        microseconds=int(seconds * 10**6 / 96000)
    )
    assert text.startswith(whole.isoformat()[:-9])
    exact = parse_instant(START) + seconds / 96000
    assert abs(parse_instant(text) - exact) <= Fraction(1, 2 * 10**12)


def test_no_clock_no_start_time(tmp_path):
    with make(tmp_path, noise(503), datetime=None) as recording:
        result = split(recording, bank_of(), tmp_path / "out", select=[0])
    with open_recording(result.channels[0].path) as channel:
        assert channel.segments[0].datetime is None


def retuned(folder, parts, **about):
    """A recording of several captures: (samples, frequency, global index, datetime)."""
    with SigMFWriter(folder / "quay", "cf32_le", sample_rate=96e3, **about) as writer:
        for samples, frequency, index, instant in parts:
            writer.capture(center_frequency=frequency, global_index=index, datetime=instant)
            writer.write(samples)
    return open_recording(folder / "quay")


def test_the_bank_never_filters_across_a_retune_or_a_gap(tmp_path):
    bank, samples = bank_of(), noise(1500)
    parts = [
        (samples[:500], 1e6, 0, START),
        (samples[500:900], 2e6, 500, None),
        (samples[900:], 2e6, 2000, "2031-05-04T09:30:07Z"),
    ]
    with retuned(tmp_path, parts) as recording:
        assert len(recording.segments) == 3
        result = split(recording, bank, tmp_path / "out")
    pieces = []
    for position, first in ((0, 0), (1, 500), (2, 2000)):
        alone = np.zeros(3000, np.complex64)
        part = parts[position][0]
        alone[first : first + len(part)] = part
        begin, stop = -(-first // 9), -(-(first + len(part) + 59) // 9)
        pieces.append((begin, frames(bank, alone)[:, begin:stop]))
    expected = np.concatenate([piece for _, piece in pieces], axis=1)
    np.testing.assert_array_equal(np.array([data_of(c) for c in result]), expected)
    with open_recording(result.channels[10].path) as channel:
        segments = channel.segments
    assert [s.length for s in segments] == [piece.shape[1] for _, piece in pieces]
    assert [s.global_index for s in segments] == [begin for begin, _ in pieces]
    assert [s.center_frequency for s in segments] == [1e6 - 16e3, 2e6 - 16e3, 2e6 - 16e3]
    assert segments[1].datetime is None
    begin = (
        parse_instant("2031-05-04T09:30:07Z")
        + (Fraction(pieces[2][0] * 9 - 2000) - Fraction(59, 2)) / 96000
    )
    assert abs(parse_instant(segments[2].datetime) - begin) <= Fraction(1, 2 * 10**12)


def test_captures_begin_where_their_frames_do(tmp_path):
    # 490 samples and 59 of the prototype's tail are 61 hops exactly: no frame more.
    samples = noise(1000)
    parts = [(samples[:490], 1e6, 0, None), (samples[490:], 2e6, 490, None)]
    with retuned(tmp_path, parts) as recording:
        result = split(recording, bank_of(), tmp_path / "out", select=[0])
    with open_recording(result.channels[0].path) as channel:
        assert [(s.start, s.length) for s in channel.segments] == [(0, 61), (61, 63)]
        assert channel.samples == 61 + 63


def test_segments_too_short_for_a_frame_are_left_out(tmp_path):
    bank, samples = bank_of(), noise(1500)
    parts = [(samples[:20], 1e6, 0, None), (samples[20:], 2e6, 20, None)]
    with retuned(tmp_path, parts) as recording:
        result = split(recording, bank, tmp_path / "out", transients=False, select=[0])
        with open_recording(result.channels[0].path) as channel:
            assert [s.center_frequency for s in channel.segments] == [2e6]
        with pytest.raises(ValueError, match=r"transients=False leaves no frame: .* 60 taps"):
            split(recording, bank, tmp_path / "other", transients=False, length=40)


# --- annotations and metadata --------------------------------------------------------------------


def test_annotations_go_where_they_belong(tmp_path):
    bank = bank_of()
    with SigMFWriter(
        tmp_path / "quay", "cf32_le", sample_rate=96e3, center_frequency=1e6,
        extensions=[("buoy", "1.0.0", True)],
    ) as writer:  # fmt: skip
        writer.write(noise(1003))
        writer.annotate(90, 180, lower_edge=1008e3 - 100, upper_edge=1008e3 + 100, label="narrow")
        writer.annotate(0, 1003, label="all", comment="everywhere", fields={"buoy:seen": 3})
        writer.annotate(500, 1, lower_edge=1012e3, upper_edge=1020e3, label="one sample")
        writer.annotate(0, 9, lower_edge=1047e3, upper_edge=1048e3, label="at the edge")
    with open_recording(tmp_path / "quay") as recording:
        result = split(recording, bank, tmp_path / "out")
    labels = []
    for channel in result:
        with open_recording(channel.path) as opened:
            labels.append({a.label: a for a in opened.annotations})
    assert [sorted(found) for found in labels] == [
        ["all"],
        ["all", "narrow"],
        ["all", "one sample"],  # 1012..1020 kHz is the band of channel 2 alone
        ["all"],
        ["all"],
        ["all"],
        ["all", "at the edge"],  # -48 kHz is +48 kHz
        ["all"],
        ["all"],
        ["all"],
        ["all"],
        ["all"],
    ]
    # Frame n describes sample 9n - 29.5: 90..269 are seen by frames 14..33.
    narrow = labels[1]["narrow"]
    assert (narrow.start, narrow.length) == (14, 20)
    assert (narrow.lower_edge, narrow.upper_edge) == (1008e3 - 100, 1008e3 + 100)
    everywhere = labels[0]["all"]
    assert (everywhere.start, everywhere.length) == (4, 111)
    assert everywhere.comment == "everywhere" and everywhere.fields["buoy:seen"] == 3
    single = labels[2]["one sample"]
    assert (single.start, single.length) == (59, 1)


def test_annotations_of_a_recording_without_a_centre_are_relative(tmp_path):
    with SigMFWriter(tmp_path / "quay", "cf32_le", sample_rate=96e3) as writer:
        writer.write(noise(1003))
        writer.annotate(0, 100, lower_edge=-9e3, upper_edge=-7e3, label="low")
    plan = ChannelPlan(96e3, 12, 9, center_frequency=5e6)
    bank = AnalysisBank(plan, window_prototype(12, 5, "hamming"))
    with open_recording(tmp_path / "quay") as recording:
        result = split(recording, bank, tmp_path / "out")
    with open_recording(result.channels[11].path) as channel:
        assert channel.center_frequency == 5e6 - 8e3
        (low,) = channel.annotations
        assert (low.lower_edge, low.upper_edge) == (5e6 - 9e3, 5e6 - 7e3)


def test_the_design_travels_with_every_channel(tmp_path):
    bank = bank_of(offset="1/3")
    with make(tmp_path, noise(1003)) as recording:
        result = split(recording, bank, tmp_path / "out", select=[7])
    with open_recording(result.channels[0].path) as channel:
        top = channel.metadata["global"]
    assert top["chanbank:channel"] == 7
    assert (top["chanbank:channels"], top["chanbank:hop"], top["chanbank:offset"]) == (12, 9, "1/3")
    assert top["chanbank:spacing"] == 8000.0 and top["chanbank:delay"] == 29.5
    taps = bank.prototype.taps
    assert top["chanbank:enbw"] == pytest.approx(96e3 * np.sum(taps**2) / np.sum(taps) ** 2)
    assert top["chanbank:source"]["name"] == "quay.sigmf-meta"
    assert Prototype.load(result.prototype) == bank.prototype
    assert top["chanbank:prototype"]["file"] == "prototype.npz"
    assert top["chanbank:prototype"]["length"] == 60
    figures = top["chanbank:activity"]
    assert figures["mean_power_db"] == result.channels[0].mean_power_db
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        handle = sigmf.fromfile(result.channels[0].path)
        handle.validate()
    json.dumps(result.to_dict(), allow_nan=False)


# --- integers ------------------------------------------------------------------------------------


def test_16_bit_channels_have_their_own_scale(tmp_path):
    bank, samples = bank_of(), noise(1003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", datatype="ci16_le")
    expected = frames(bank, samples)
    for channel in result:
        with open_recording(channel.path, verify=True) as opened:
            assert opened.datatype == "ci16_le"
            raw = opened.read()
            got = channel.scale * opened.read(as_float="double")
            assert opened.metadata["global"]["chanbank:scale"] == channel.scale
        assert np.abs(raw).max() == 32767  # all of the range is used, and nothing is clipped
        assert (channel.clipped, channel.zeroed) == (0, 0)
        error = got - expected[channel.index]
        # Half a step, and the rounding of the division in single precision.
        step = channel.scale / 2**15
        assert max(np.abs(error.real).max(), np.abs(error.imag).max()) <= step / 2 + 1e-7


def test_a_scale_for_all_channels(tmp_path):
    samples = noise(1003)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank_of(), tmp_path / "out", datatype="ci16_le", scale=0.05)
        with pytest.raises(ValueError, match="scale is for datatype 'ci16_le'"):
            split(recording, bank_of(), tmp_path / "other", scale=0.05)
    expected = frames(bank_of(), samples) / np.float32(0.05)
    for channel in result:
        parts = expected[channel.index].view(np.float32)
        assert channel.scale == 0.05
        assert channel.clipped == np.count_nonzero(np.rint(parts * 32768) > 32767) + (
            np.count_nonzero(np.rint(parts * 32768) < -32768)
        )
    assert sum(channel.clipped for channel in result) > 0


def test_silence_as_integers(tmp_path):
    with make(tmp_path, np.zeros(503, np.complex64)) as recording:
        result = split(recording, bank_of(), tmp_path / "out", datatype="ci16_le")
    assert not data_of(result.channels[0]).any()
    assert result.channels[0].mean_power_db == -np.inf
    assert result.to_dict()["channels"][0]["mean_power_db"] is None
    json.dumps(result.to_dict(), allow_nan=False)
    assert result.activity.active().tolist() == []


# --- samples that are not finite -----------------------------------------------------------------


def test_samples_that_are_not_finite_are_passed_on_and_counted(tmp_path):
    bank, samples = bank_of(), noise(1003)
    samples[400] = np.nan
    samples[700] = np.inf
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out")
        short = split(recording, bank, tmp_path / "short", datatype="ci16_le")
    # 60 taps fill five whole branches: sample s touches the frames n with 9n - 59 <= s <= 9n.
    touched = [n for n in range(118) if 9 * n - 59 <= 400 <= 9 * n or 9 * n - 59 <= 700 <= 9 * n]
    assert result.activity.nonfinite_samples == 2
    clean = frames(bank, np.where(np.isfinite(samples), samples, 0))
    for channel, small in zip(result, short, strict=True):
        got = data_of(channel)
        assert np.flatnonzero(~np.isfinite(got)).tolist() == touched
        assert channel.nonfinite_frames == len(touched) == small.zeroed
        rest = np.delete(got, touched)
        # Powers leave the transients out: frames 7 to 111 are complete.
        settled = got[7:112][np.isfinite(got[7:112])].astype(complex)
        power = np.mean(np.abs(settled) ** 2)
        assert channel.mean_power_db == pytest.approx(10 * np.log10(power), abs=1e-5)
        np.testing.assert_array_equal(rest, np.delete(clean[channel.index], touched))
        assert not data_of(small).reshape(-1, 2)[touched].any()
    assert "2 samples of the source are not finite" in str(result)


# --- choosing ------------------------------------------------------------------------------------


def test_channels_by_index_and_frequency(tmp_path):
    bank, samples = bank_of(), noise(503)
    expected = frames(bank, samples)
    with make(tmp_path, samples) as recording:
        by_index = split(recording, bank, tmp_path / "a", select=[11, 0])
        by_frequency = split(recording, bank, tmp_path / "b", frequencies=[992e3, 1003.9e3])
        own = split(recording, bank_of(select=[11, 0]), tmp_path / "c")
    for result in (by_index, by_frequency, own):
        assert [c.index for c in result] == [11, 0]
        assert [c.frequency for c in result] == [992e3, 1e6]
        for channel in result:
            np.testing.assert_array_equal(data_of(channel), expected[channel.index])
    names = sorted(path.name for path in (tmp_path / "a").iterdir())
    assert names == [
        "channel_00_1000000Hz.sigmf-data",
        "channel_00_1000000Hz.sigmf-meta",
        "channel_11_992000Hz.sigmf-data",
        "channel_11_992000Hz.sigmf-meta",
        "prototype.npz",
    ]


def test_active_channels(tmp_path):
    bank = bank_of(12, 8, 8)
    samples = 0.01 * noise(40000)
    t = np.arange(40000)
    samples[10000:10800] += (0.008 * np.exp(2j * np.pi * 3 / 12 * t[:800])).astype(np.complex64)
    samples += (0.1 * np.exp(2j * np.pi * 8 / 12 * t)).astype(np.complex64)
    with make(tmp_path, samples) as recording:
        result = split(recording, bank, tmp_path / "out", select="active", burst_frames=32)
        none = split(recording, bank, tmp_path / "none", select="active", threshold_db=150)
    assert [c.index for c in result] == [3, 8]
    burst, carrier = result
    assert 0.01 < burst.duty < 0.05 and carrier.duty == 1.0
    assert burst.peak_power_db == pytest.approx(20 * np.log10(0.008), abs=0.3)
    assert carrier.mean_power_db == pytest.approx(-20, abs=0.1)
    assert len(result.activity.channels) == 12
    np.testing.assert_array_equal(data_of(carrier), frames(bank, samples)[8])
    assert len(none) == 0 and none.prototype is None
    assert not (tmp_path / "none").exists()


def test_figures_do_not_depend_on_the_choice(tmp_path):
    # The noise is seen in all channels, also where only the busy ones are written.
    samples = 0.01 * noise(20000)
    samples += (0.1 * np.exp(2j * np.pi * 8 / 12 * np.arange(20000))).astype(np.complex64)
    with make(tmp_path, samples) as recording:
        few = split(recording, bank_of(), tmp_path / "few", select=[8])
        full = split(recording, bank_of(), tmp_path / "all")
    assert few.channels[0].duty == full.channels[8].duty == 1.0
    assert few.activity.noise_power_db == full.activity.noise_power_db


# --- refusals ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("argument", "value", "error", "message"),
    [
        ("select", 3, TypeError, "select must be None, 'active' or"),
        ("select", "busy", ValueError, "select must be None, 'active' or"),
        ("select", [], ValueError, "select must be"),
        ("select", [1, 1], ValueError, "select must be"),
        ("select", [12], ValueError, "from 0 to 11; got 12"),
        ("select", [0.5], TypeError, "select must be an integer"),
        ("frequencies", 3, TypeError, "frequencies must be"),
        ("frequencies", [], ValueError, "frequencies must be"),
        ("frequencies", [1e6, 1.001e6], ValueError, "frequencies must be .* one for each channel"),
        ("frequencies", [2e6], ValueError, "within the recorded band, 952000 to 1048000 Hz"),
        ("start", -1, ValueError, "start"),
        ("start", 0.5, ValueError, "start must be a whole number of samples"),
        ("start", float("nan"), ValueError, "start"),
        ("start", 503, ValueError, "start 503, length 0 and 503 samples"),
        ("length", 504, ValueError, "start 0, length 504 and 503 samples"),
        ("length", 0, ValueError, "length"),
        ("unit", "hours", ValueError, "unit must be one of 'samples', 'seconds'"),
        ("datatype", "cf16_le", ValueError, "datatype"),
        ("scale", 0, ValueError, "scale"),
        ("threshold_db", "loud", TypeError, "threshold_db"),
        ("burst_frames", 0, ValueError, "burst_frames"),
        ("transients", 1, TypeError, "transients"),
        ("progress", None, TypeError, "progress"),
        ("overwrite", "yes", TypeError, "overwrite"),
        ("destination", 3, TypeError, "destination"),
        ("bank", None, TypeError, "bank must be a AnalysisBank"),
        ("recording", "quay", TypeError, "recording must be a Recording"),
    ],
)
def test_bad_arguments_before_any_file(tmp_path, argument, value, error, message):
    with make(tmp_path, noise(503)) as recording:
        before = sorted(tmp_path.iterdir())
        arguments = {
            "recording": recording,
            "bank": bank_of(),
            "destination": tmp_path / "out",
            argument: value,
        }
        with pytest.raises(error, match=message):
            split_recording(**arguments)
    assert sorted(tmp_path.iterdir()) == before


def test_recordings_that_do_not_fit(tmp_path):
    def refused(recording, bank, message, **settings):
        with pytest.raises(ValueError, match=message):
            split(recording, bank, tmp_path / "out", **settings)

    with make(tmp_path, noise(503)) as recording:
        prototype = window_prototype(12, 5, "hamming")
        real = AnalysisBank(ChannelPlan(96e3, 12, 9, real=True), prototype)
        refused(recording, real, r"holds complex samples \(cf32_le\).*real=False")
        other = AnalysisBank(ChannelPlan(48e3, 12, 9), prototype)
        refused(recording, other, "one sample rate; got 96000 Hz and a plan for 48000 Hz")
        away = AnalysisBank(ChannelPlan(96e3, 12, 9, center_frequency=2e6), prototype)
        refused(recording, away, "one centre frequency; got 1000000 Hz and a plan at 2000000 Hz")
        refused(recording, bank_of(phase="frame"), "phase='absolute'")
        refused(recording, bank_of(select=[1, 2]), r"own channels; got \[3\]", select=[2, 3])
        refused(recording, bank_of(), "exclude each other", select=[1], frequencies=[1e6])
    refused(recording, bank_of(), "is closed")
    np.zeros(9, np.complex64).tofile(tmp_path / "raw")
    with open_recording(tmp_path / "raw", datatype="cf32_le") as recording:
        refused(recording, bank_of(), "must state its sample rate")
    assert not (tmp_path / "out").exists()
