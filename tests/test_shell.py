"""The shell's commands: the library's own results, exit codes for scripts, errors in one line."""

import json
import re
import shlex
import subprocess
import sys

import numpy as np
import pytest

import chanbank.__main__ as shell
from chanbank.analysis.bank import AnalysisBank
from chanbank.metrics.formula import bank_report
from chanbank.metrics.report import BankReport
from chanbank.plan import ChannelPlan
from chanbank.prototype.boxcar import boxcar_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.recordings import SigMFWriter, open_recording
from chanbank.splitting import split_recording

RATE, CENTER = 400e3, 156.8e6
FAST = ["--rejection", "60"]


@pytest.fixture
def quay(tmp_path):
    """A recording of noise in two segments, with a strong carrier on 156.850 MHz in the first."""
    rng = np.random.default_rng(4)
    samples = 0.01 * (rng.normal(size=40_000) + 1j * rng.normal(size=40_000))
    samples[:30_000] += 0.4 * np.exp(2j * np.pi * 50e3 / RATE * np.arange(30_000))
    path = tmp_path / "quay"
    with SigMFWriter(path, "ci16_le", sample_rate=RATE, center_frequency=CENTER) as writer:
        writer.write(samples[:30_000])
        writer.annotate(100, 200, label="tug")
        writer.capture(center_frequency=CENTER, global_index=50_000)
        writer.write(samples[30_000:])
    return str(path)


@pytest.fixture
def noise(tmp_path):
    """White noise as a raw file."""
    rng = np.random.default_rng(9)
    path = tmp_path / "noise.bin"
    (0.1 * rng.normal(size=2 * 60_000)).astype("<f4").tofile(path)
    return str(path), ["--datatype", "cf32_le", "--sample-rate", "400k"]


def run(capsys, *words):
    """(exit code, standard output, standard error) of one command."""
    try:
        code = shell.main([str(word) for word in words])
    except SystemExit as stop:
        code = stop.code
    out, err = capsys.readouterr()
    return code, out, err


def run_json(capsys, *words):
    code, out, err = run(capsys, *words, "--json")
    assert err == ""
    return code, json.loads(out)


def test_describe_says_what_the_recording_holds(capsys, quay):
    code, data = run_json(capsys, "describe", quay, "--spacing", "25k")
    assert code == 0
    with open_recording(quay) as recording:
        samples = recording.read(as_float="double")
    assert data["samples"] == 40_000 and data["sample_rate_hz"] == RATE
    assert [part["length"] for part in data["segments"]] == [30_000, 10_000]
    assert data["annotations"] == [{"start": 100, "length": 200, "label": "tug"}]
    assert data["plan"]["channels"] == 16 and data["plan"]["hop"] == 10
    levels = data["levels"]
    # Two summations of 40000 doubles differ by rounding only.
    assert levels["rms_dbfs"] == pytest.approx(
        10 * np.log10(np.mean(np.abs(samples) ** 2)), abs=1e-9
    )
    peak = np.maximum(np.abs(samples.real), np.abs(samples.imag)).max()
    assert levels["peak_dbfs"] == pytest.approx(20 * np.log10(peak), abs=1e-9)
    assert levels["full_scale_share"] == 0.0

    text = run(capsys, "describe", quay)[1]
    assert "40,000 samples at 400 kS/s" in text and "annotation tug" in text


def test_describe_counts_samples_at_full_scale_and_not_finite(capsys, tmp_path):
    path = tmp_path / "hot.bin"
    np.array([32767, 0, -32768, 5, 0, 0, 7, 7], "<i2").tofile(path)
    levels = run_json(capsys, "describe", path, "--datatype", "ci16_le")[1]["levels"]
    assert levels["full_scale_share"] == 0.5 and levels["peak_dbfs"] == 0.0
    np.array([1, np.nan, 0, 0], "<f4").tofile(path)
    levels = run_json(capsys, "describe", path, "--datatype", "cf32_le")[1]["levels"]
    assert levels["not_finite"] == 1 and levels["rms_dbfs"] is None


def test_propose_finds_a_design_that_meets_its_limits(capsys, tmp_path):
    words = ["propose", "--sample-rate", "200k", "--spacing", "25k", "--neighbour-rejection", "50"]
    code, data = run_json(capsys, *words, "--oversampling", "2", "--save", tmp_path / "h.npz")
    assert code == 0
    best = data["designs"][0]
    assert best["channels"] == 8 and best["hop"] <= 4 and best["check"]["passed"]
    plan = ChannelPlan(200e3, 8, best["hop"])
    report = bank_report(plan, Prototype.load(tmp_path / "h.npz"))
    assert report["adjacent_leakage_ratio"].worst >= 50
    assert f"--hop {best['hop']} --prototype" in data["use"]

    code, out, _ = run(capsys, *words, "--oversampling", "2", "--latency", "1e-6")
    assert code == 1 and "latency" in out and "must give" in out


def test_split_is_the_library_call(capsys, quay, tmp_path):
    """Bit for bit what split_recording writes with the prototype that it stored."""
    words = ["split", quay, tmp_path / "shell", "--spacing", "25k", *FAST, "--output-datatype"]
    code, data = run_json(capsys, *words, "ci16_le", "--frequency", "156.85M", "--start", "0.01")
    assert code == 0 and len(data["channels"]) == 1
    plan = ChannelPlan(RATE, 16, 10, center_frequency=CENTER)
    prototype = Prototype.load(tmp_path / "shell" / "prototype.npz")
    with open_recording(quay) as recording:
        result = split_recording(
            recording,
            AnalysisBank(plan, prototype),
            tmp_path / "library",
            frequencies=[156.85e6],
            start=0.01,
            unit="seconds",
            datatype="ci16_le",
            progress=False,
        )
    with (
        open_recording(data["channels"][0]["path"]) as one,
        open_recording(result.channels[0].path) as two,
    ):
        assert one.samples == two.samples > 0
        assert np.array_equal(one.read(), two.read())
        assert one.center_frequency == 156.85e6


def test_pictures_are_drawn_and_not_replaced(capsys, quay, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    raster = ["--spacing", "25k", "--bare"]
    samples = ["--sample-rate", "400k", "--spacing", "25k"]
    search = [*samples, "--neighbour-rejection", "40", "--oversampling", "4"]
    for words in (
        ["split", "quay", "out", *raster, "--index", "1", "--picture", "activity.png"],
        ["report", *samples, "--bare", "--sheet", "sheet.pdf"],
        ["propose", *search, "--picture", "tradeoff.pdf"],
    ):
        assert run(capsys, *words)[0] == 0
        kept = (tmp_path / words[-1]).read_bytes()
        assert kept.startswith(b"%PDF" if words[-1].endswith("pdf") else b"\x89PNG")
        code, out, err = run(capsys, *words)
        assert code == 2 and out == "" and "exists" in err and "--overwrite" in err
        assert (tmp_path / words[-1]).read_bytes() == kept


def test_split_prototype_keeps_neighbours_apart(capsys, quay, tmp_path):
    run(capsys, "split", quay, tmp_path / "out", "--spacing", "25k", *FAST, "--index", "0")
    prototype = Prototype.load(tmp_path / "out" / "prototype.npz")
    report = bank_report(ChannelPlan(RATE, 16, 10), prototype)
    # The report finds extremes over frequency to within 0.001 dB.
    assert report["adjacent_tone"].worst < -60 + 1e-3
    assert report["passband_ripple"].worst < 0.1 + 1e-3


def test_split_active_channels_and_exit_code(capsys, quay, tmp_path):
    words = ["--spacing", "25k", *FAST, "--active"]
    code, data = run_json(capsys, "split", quay, tmp_path / "one", *words)
    assert code == 0 and [c["frequency"] for c in data["channels"]] == [156.85e6]
    code, out, _ = run(capsys, "split", quay, tmp_path / "two", *words, "--threshold-db", "90")
    assert code == 1 and "nothing written" in out and not (tmp_path / "two").exists()


def test_report_is_the_library_report(capsys):
    words = ["report", "--sample-rate", "400k", "--spacing", "25k", "--bare"]
    code, data = run_json(capsys, *words, "--limit", "adjacent_leakage_ratio=10")
    plan = ChannelPlan(400e3, 16, 10)
    expected = bank_report(plan, boxcar_prototype(16))
    assert code == 0 and data["limits"]["passed"]
    assert BankReport.from_dict(data["report"]).table() == expected.table()
    code, out, _ = run(capsys, *words, "--limit", "adjacent_leakage_ratio=40")
    assert code == 1 and "FAIL  adjacent leakage ratio" in out


def test_report_measured_agrees_and_saves(capsys, tmp_path):
    words = ["report", "--sample-rate", "200k", "--spacing", "25k", *FAST, "--measured"]
    code, data = run_json(capsys, *words, "--save", tmp_path / "h.npz")
    assert code == 0 and data["agreed"] and data["report"]["method"] == "measured"
    assert Prototype.load(tmp_path / "h.npz").channels == 8


def test_report_of_a_pair(capsys):
    words = [
        "report",
        "--sample-rate",
        "400k",
        "--spacing",
        "25k",
        "--hop",
        "8",
        "--pair",
        "6",
        "6",
    ]
    code, data = run_json(capsys, *words, "--limit", "reconstruction_error=-60")
    assert code == 0
    error = BankReport.from_dict(data["report"])["reconstruction_error"].worst
    assert -200 < error < -60


def test_rebuild_measures_what_the_coefficients_say(capsys, noise, tmp_path):
    path, words = noise
    words = ["rebuild", path, *words, "--spacing", "25k", "--hop", "10", "--pair", "6", "6"]
    code, data = run_json(capsys, *words, "--error-db", "-40", "--output", tmp_path / "again")
    assert code == 0
    plan_words = ["report", "--sample-rate", "400k", "--spacing", "25k", "--hop", "10"]
    report = run_json(capsys, *plan_words, "--pair", "6", "6")[1]["report"]
    expected = BankReport.from_dict(report)["reconstruction_error"].worst
    # 60000 samples of white noise: the error power is known to about 1/sqrt(60000), 0.02 dB; the
    # two ends, where a few hundred samples lack neighbours, may shift it by as much again.
    assert data["error_db"] == pytest.approx(expected, abs=0.1)
    with open_recording(path, datatype="cf32_le", sample_rate=400e3) as one:
        x = one.read()
    with open_recording(tmp_path / "again") as two:
        z = two.read()
    error = np.mean(np.abs(z - x) ** 2) / np.mean(np.abs(x) ** 2)
    assert data["error_db"] == pytest.approx(10 * np.log10(error), abs=1e-3)
    assert run(capsys, *words, "--error-db", "-400")[0] == 1


def test_rebuild_mutes_and_keeps_the_rest(capsys, quay, tmp_path):
    words = ["rebuild", quay, "--spacing", "25k", "--hop", "8", "--pair", "6", "6"]
    code, data = run_json(capsys, *words, "--mute", "156.850M", "--output", tmp_path / "hole")
    assert code == 0 and data["muted"][0]["channel"] == 2
    assert data["error_db"] < -60 and data["muted"][0]["left_db"] < -40
    with open_recording(tmp_path / "hole") as rebuilt, open_recording(quay) as original:
        assert [(s.start, s.length, s.center_frequency) for s in rebuilt.segments] == [
            (s.start, s.length, s.center_frequency) for s in original.segments
        ]
        z, x = rebuilt.read(2000, 20_000), original.read(2000, 20_000, as_float="double")
    tone = np.exp(-2j * np.pi * 50e3 / RATE * np.arange(20_000)) / 20_000
    # One spacing away the responses of this pair multiply to -100 dB, so the neighbours pass
    # nothing of the carrier; the int16 file keeps 1e-5 of it, and noise is muted along with it.
    assert abs(x @ tone) > 0.39 and abs(z @ tone) < 0.4 * 10 ** (-80 / 20)


@pytest.mark.parametrize(
    "words, text",
    [
        (["describe", "nowhere.sigmf-meta"], "nowhere.sigmf-meta: no such file"),
        (["describe", "."], "is a directory"),
        (["describe", "CAP"], "--datatype must be given"),
        (["describe", "CAP", "--datatype", "ci16"], "--datatype must be a SigMF datatype"),
        (["describe", "CAP", "--datatype", "ci16_le"], "--allow-truncated reads the whole samples"),
        (["describe", "QUAY", "--sample-rate", "1M"], "--sample-rate 1000000.0 contradicts"),
        (["describe", "QUAY", "--spacing", "30k"], "nearest sample rates that fit"),
        (["describe", "QUAY", "--spacing", "25q"], "no number of hertz such as 25k"),
        (["split", "QUAY", "out"], "--spacing must be given"),
        (["split", "CAP", "out", "--datatype", "ri8", "--spacing", "25k"], "--sample-rate must be"),
        (["split", "QUAY", "out", "--spacing", "25k", "--hop", "17"], "--hop must satisfy"),
        (["split", "QUAY", "out", "--spacing", "25k", "--bare", "--index", "99"], "from 0 to 15"),
        (["split", "QUAY", "out", "--spacing", "25k", "--bare", "--frequency", "1G"], "band"),
        (["split", "QUAY", "out", "--spacing", "25k", "--bare", "--start", "9"], "samples"),
        (["split", "QUAY", "out", "--spacing", "25k", "--prototype", "no.npz"], "no such file"),
        (["split", "QUAY", "out", "--spacing", "25k", "--occupied-bandwidth", "26k"], "below the"),
        (["split", "QUAY", "out", "--active", "--index", "3", "--spacing", "1k"], "not allowed"),
        (["report", "--spacing", "25k"], "--sample-rate must be given"),
        (["propose", "--sample-rate", "1M"], "--spacing must be given"),
        (["propose", "--sample-rate", "1M", "--spacing", "30k"], "nearest sample rates that fit"),
        (
            ["propose", "--sample-rate", "1M", "--spacing", "25k", "--passband-ripple", "-1"],
            "--passband-ripple must be a finite number of dB above 0",
        ),
        (["report", "--sample-rate", "4M", "--spacing", "25k", "--limit", "enbw"], "FIGURE=VALUE"),
        (["report", "--sample-rate", "4M", "--spacing", "25k", "--limit", "foo=3"], "the figures"),
        (["rebuild", "QUAY", "--spacing", "25k", "--oversampling", "1"], "critical sampling"),
        (["rebuild", "QUAY", "--spacing", "25k", "--synthesis", "g.npz"], "--prototype must be"),
        (["frobnicate"], "invalid choice"),
        (["split"], "required: file, destination"),
    ],
)
def test_errors_are_one_line_and_exit_2(capsys, quay, tmp_path, monkeypatch, words, text):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "cap.bin").write_bytes(bytes(4001))
    words = [{"CAP": "cap.bin", "QUAY": "quay"}.get(word, word) for word in words]
    before = sorted(path.name for path in tmp_path.iterdir())
    code, out, err = run(capsys, *words)
    assert code == 2 and out == ""
    assert text in err and err.startswith("chanbank: ") and err.count("\n") == 1
    assert sorted(path.name for path in tmp_path.iterdir()) == before


def test_what_exists_is_not_replaced(capsys, quay, tmp_path):
    words = ["split", quay, tmp_path / "out", "--spacing", "25k", "--bare", "--index", "1"]
    assert run(capsys, *words)[0] == 0
    code, _, err = run(capsys, *words)
    assert code == 2 and "exists" in err and "--overwrite" in err
    assert run(capsys, *words, "--overwrite")[0] == 0


@pytest.mark.parametrize(
    "text, value",
    [("25k", 25000), ("25000/3", "25000/3"), ("4.8M", 4800000), ("156.8e6Hz", 156800000)]
    + [("8.33 kHz", 8330), ("1G", 10**9), ("-12.5k", -12500)],
)
def test_numbers_of_hertz_are_exact(text, value):
    assert shell._frequency(text) == shell.Fraction(value)


def test_help_teaches_with_examples_that_parse(capsys):
    assert run(capsys, "--help")[0] == 0
    assert run(capsys)[0] == 2
    parser = shell._build_parser()
    commands = parser._subparsers._group_actions[0].choices
    for name in commands:
        code, out, _ = run(capsys, name, "--help")
        assert code == 0 and "examples:" in out
        lines = re.sub(r"\\\n\s*", "", out.split("examples:")[1]).splitlines()
        lines = [line.strip() for line in lines if "python -m chanbank" in line]
        assert lines
        for line in lines:
            words = shlex.split(line)
            assert words[:4] == ["python", "-m", "chanbank", name]
            parser.parse_args(words[3:])


def test_runs_as_a_module_and_into_a_closed_pipe():
    command = f"{shlex.quote(sys.executable)} -m chanbank"
    done = subprocess.run([*shlex.split(command), "--help"], capture_output=True, text=True)
    assert done.returncode == 0 and "describe" in done.stdout
    done = subprocess.run(
        ["bash", "-c", f"set -o pipefail; {command} report --help | head -n 1"],
        capture_output=True,
        text=True,
    )
    assert "Traceback" not in done.stderr
