"""Writing SigMF: read back here and by the `sigmf` package; whole files or none."""

import errno
import json
import os
import subprocess
import sys
import warnings
from datetime import UTC, datetime

import numpy as np
import pytest
import sigmf

from chanbank.recordings import RecordingError, SigMFWriter, open_recording, write_sigmf
from chanbank.recordings.partfile import PartFile

FLOATS = ["cf32_le", "cf32_be", "cf64_le", "cf64_be", "rf32_le", "rf32_be", "rf64_le", "rf64_be"]
INTEGERS = [
    f"{p}{c}{o}"
    for p in "cr"
    for c, orders in {
        "i32": "lb",
        "i16": "lb",
        "i8": " ",
        "u32": "lb",
        "u16": "lb",
        "u8": " ",
    }.items()
    for o in ["" if order == " " else f"_{order}e" for order in orders]
]


def names(folder):
    return sorted(path.name for path in folder.iterdir())


def signal(datatype, streams, count=40):
    generator = np.random.default_rng(9)
    shape = (streams, count) if streams > 1 else (count,)
    samples = generator.uniform(-0.99, 0.99, shape) + 1j * generator.uniform(-0.99, 0.99, shape)
    samples = samples if datatype[0] == "c" else samples.real
    return (
        samples
        if "f64" in datatype or "32" in datatype[2:]
        else samples.astype(np.complex64 if datatype[0] == "c" else np.float32)
    )


@pytest.mark.parametrize("streams", [1, 2])
@pytest.mark.parametrize("datatype", FLOATS + INTEGERS)
def test_round_trip_of_every_datatype(tmp_path, datatype, streams):
    samples = signal(datatype, streams)
    path = tmp_path / "quay"
    with SigMFWriter(path, datatype, sample_rate=1e6, streams=streams) as writer:
        for start, stop in [(0, 7), (7, 7), (7, 40)]:
            writer.write(samples[..., start:stop])
    assert writer.samples == 40 and writer.clipped == 0
    with open_recording(path, verify=True) as recording:
        assert recording.datatype == datatype and recording.shape == samples.shape
        back = recording.read(as_float="double")
        raw = recording.read()
    if "f" in datatype:
        expected = samples.astype(np.complex64 if "cf32" in datatype else samples.dtype)
        if "rf32" in datatype:
            expected = samples.astype(np.float32)
        np.testing.assert_array_equal(back, expected)
    else:
        # Rounding to the nearest step: half of 2^-(bits-1) for each component.
        step = 2.0 ** -(int("".join(filter(str.isdigit, datatype))) - 1)
        error = np.asarray(back - samples)
        assert max(abs(error.real).max(), abs(error.imag).max()) <= step / 2 * (1 + 1e-6)
        if raw.dtype.kind in "iu":
            # What read returns can be written again, and comes out the same.
            with SigMFWriter(tmp_path / "again", datatype, streams=streams) as writer:
                writer.write(raw)
            assert (tmp_path / "again.sigmf-data").read_bytes() == (
                tmp_path / "quay.sigmf-data"
            ).read_bytes()


@pytest.mark.parametrize("datatype", ["cf32_le", "ci16_le", "cu8", "ri8", "rf64_be", "ci32_be"])
def test_the_sigmf_package_reads_it(tmp_path, datatype):
    samples = signal(datatype, 1)
    path = tmp_path / "quay"
    with SigMFWriter(
        path,
        datatype,
        sample_rate=4.8e6,
        center_frequency=156.8e6,
        datetime="2031-05-04T09:30:00.25Z",
        description="the harbour at dawn",
        author="pilot",
        recorder="receiver",
        fields={"core:license": "https://example.org/licence", "buoy:colour": "red"},
        extensions=[("buoy", "1.0.0", True)],
    ) as writer:
        writer.write(samples)
        writer.annotate(5, 10, lower_edge=156.79e6, upper_edge=156.81e6, label="call")
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        handle = sigmf.fromfile(f"{path}.sigmf-meta")  # checks the SHA-512
        handle.validate()
    theirs = handle.read_samples()
    with open_recording(path) as recording:
        ours = recording.read(as_float="double")
    # The package scales integers to full scale 1.0 too; in single precision.
    np.testing.assert_allclose(theirs, ours, rtol=0, atol=2e-7)
    assert handle.get_global_field("core:sample_rate") == 4800000
    assert handle.get_capture_info(0)["core:frequency"] == 156800000
    assert handle.get_annotations()[0]["core:label"] == "call"


def test_captures_and_annotations_come_back(tmp_path):
    path = tmp_path / "quay.sigmf-meta"
    with SigMFWriter(path, "ri8", sample_rate=10) as writer:
        writer.capture(
            center_frequency=1e6, datetime=datetime(2031, 5, 4, tzinfo=UTC), global_index=7
        )
        writer.write(np.arange(5, dtype=np.int8))
        writer.capture(center_frequency=1.5, fields={"receiver:gain": 12})
        writer.write(np.arange(5, dtype=np.int8))
        writer.annotate(6, label="second")
        writer.annotate(1, 2, label="first", comment="at once", fields={"buoy:seen": True})
    assert names(tmp_path) == ["quay.sigmf-data", "quay.sigmf-meta"]
    with open_recording(path) as recording:
        one, two = recording.segments
        assert (one.center_frequency, one.datetime, one.global_index) == (
            1e6,
            "2031-05-04T00:00:00Z",
            7,
        )
        assert (two.start, two.length, two.center_frequency) == (5, 5, 1.5)
        assert two.fields["receiver:gain"] == 12
        assert [(a.start, a.length, a.label) for a in recording.annotations] == [
            (1, 2, "first"),
            (6, 4, "second"),
        ]
        assert recording.annotations[0].fields["buoy:seen"] is True
    text = json.loads(path.read_text())
    assert text["captures"][0]["core:frequency"] == 1000000
    assert isinstance(text["captures"][0]["core:frequency"], int)


def test_clipping_is_counted(tmp_path):
    with SigMFWriter(tmp_path / "quay", "ci8") as writer:
        writer.write(np.array([1.0 + 0.5j, -1.0 - 2.0j, 0.992 + 0j]))
    assert writer.clipped == 2  # +1.0 and -2.0; 0.992 is 126.976 steps
    with open_recording(tmp_path / "quay") as recording:
        assert recording.read().tolist() == [127, 64, -128, -128, 127, 0]


def test_one_call(tmp_path):
    for samples, datatype in [
        (np.ones((2, 3), np.complex64), "cf32_le"),
        (np.ones(3, np.complex128), "cf64_le"),
        (np.ones(3, np.int16), "ri16_le"),
        (np.ones(4, ">i2"), "ri16_le"),
        (np.ones(3, np.uint8), "ru8"),
        ([0.5, 0.25], "rf64_le"),
        (np.ones((1, 3), np.float32), "rf32_le"),
    ]:
        write_sigmf(tmp_path / "quay", samples, sample_rate=5, overwrite=True)
        with open_recording(tmp_path / "quay") as recording:
            assert recording.datatype == datatype
            np.testing.assert_array_equal(
                recording.read().reshape(np.shape(samples)), np.asarray(samples)
            )
    write_sigmf(tmp_path / "quay", np.arange(4, dtype=np.int16), datatype="ci16_le", overwrite=True)
    with open_recording(tmp_path / "quay") as recording:
        assert recording.samples == 2
    for bad in (np.zeros(3, bool), np.zeros(3, np.int64), ["a"]):
        with pytest.raises(TypeError, match="samples"):
            write_sigmf(tmp_path / "other", bad)
    for bad in (np.zeros((2, 2, 2), np.float32), np.zeros((0, 2), np.float32), np.float32(1)):
        with pytest.raises(ValueError, match="samples"):
            write_sigmf(tmp_path / "other", bad)
    assert names(tmp_path) == ["quay.sigmf-data", "quay.sigmf-meta"]


@pytest.mark.parametrize(
    ("datatype", "streams", "samples", "error", "message"),
    [
        ("cf32_le", 1, np.zeros(3), TypeError, "complex floats for cf32_le"),
        ("rf32_le", 1, np.zeros(3, complex), TypeError, "real floats for rf32_le"),
        ("rf32_le", 1, np.zeros(3, int), TypeError, "real floats"),
        ("ci16_le", 1, np.zeros(4, np.int8), TypeError, "int16 interleaved I/Q for ci16_le"),
        ("ci16_le", 1, np.zeros(3, np.int16), ValueError, "whole I/Q pairs"),
        ("ci16_le", 1, np.array([1, np.nan + 0j]), ValueError, "element 1 is .*nan"),
        ("ri8", 1, np.array([np.inf]), ValueError, "finite to become ri8; element 0 is inf"),
        ("cf32_le", 1, np.array([1e300 + 0j]), ValueError, r"fit into cf32_le; .* 1e\+300"),
        ("cf32_le", 1, np.zeros((2, 3), complex), ValueError, r"shape \(samples,\)"),
        ("cf32_le", 2, np.zeros(3, complex), ValueError, r"shape \(2, samples\)"),
        ("cf32_le", 2, np.zeros((3, 3), complex), ValueError, r"shape \(2, samples\)"),
    ],
)
def test_samples_that_do_not_fit(tmp_path, datatype, streams, samples, error, message):
    writer = SigMFWriter(tmp_path / "quay", datatype, streams=streams)
    with pytest.raises(error, match=message):
        writer.write(samples)
    assert writer.samples == 0  # refused, not half taken
    writer.discard()
    assert names(tmp_path) == []


@pytest.mark.parametrize(
    ("argument", "value", "error"),
    [
        ("path", 3, TypeError),
        ("datatype", "cf16", ValueError),
        ("sample_rate", -1.0, ValueError),
        ("sample_rate", 1e13, ValueError),
        ("center_frequency", float("nan"), ValueError),
        ("streams", 0, ValueError),
        ("datetime", "noon", ValueError),
        ("datetime", 3, TypeError),
        ("description", 3, TypeError),
        ("fields", {"licence": 1}, ValueError),
        ("fields", [1], TypeError),
        ("extensions", [("a", 1, True)], TypeError),
        ("extensions", 3, TypeError),
        ("overwrite", 1, TypeError),
    ],
)
def test_bad_arguments_name_themselves(tmp_path, argument, value, error):
    arguments = {"path": tmp_path / "quay", "datatype": "cf32_le", argument: value}
    with pytest.raises(error, match=argument):
        SigMFWriter(**arguments)
    assert names(tmp_path) == []


def test_bad_metadata(tmp_path):
    with pytest.raises(RecordingError, match="not valid SigMF"):
        SigMFWriter(tmp_path / "quay", "ri8", fields={"core:num_channels": "two"})
    with SigMFWriter(tmp_path / "quay", "ri8") as writer:
        with pytest.raises(ValueError, match="come together"):
            writer.annotate(0, lower_edge=1.0)
        with pytest.raises(ValueError, match=r"2\.0 <= 1\.0 does not"):
            writer.annotate(0, lower_edge=2.0, upper_edge=1.0)
        with pytest.raises(ValueError, match="start"):
            writer.annotate(-1)
        with pytest.raises(ValueError, match="global_index"):
            writer.capture(global_index=-1)
    for action in (writer.capture, lambda: writer.annotate(0), lambda: writer.write(np.zeros(1))):
        with pytest.raises(ValueError, match="is closed"):
            action()
    writer.close()
    writer.discard()
    assert names(tmp_path) == ["quay.sigmf-data", "quay.sigmf-meta"]


# --- whole or not at all -------------------------------------------------------------------------


def test_nothing_is_overwritten_unless_asked(tmp_path):
    write_sigmf(tmp_path / "quay", np.zeros(3))
    before = {name: (tmp_path / name).read_bytes() for name in names(tmp_path)}
    with pytest.raises(FileExistsError, match="overwrite=True"):
        write_sigmf(tmp_path / "quay", np.ones(3))
    assert {name: (tmp_path / name).read_bytes() for name in names(tmp_path)} == before
    write_sigmf(tmp_path / "quay", np.ones(3), overwrite=True)
    with open_recording(tmp_path / "quay", verify=True) as recording:
        assert recording.read().tolist() == [1, 1, 1]
    os.remove(tmp_path / "quay.sigmf-meta")
    with pytest.raises(FileExistsError, match=r"quay\.sigmf-data. exists"):
        write_sigmf(tmp_path / "quay", np.ones(3))


def test_a_recording_that_appears_meanwhile_is_kept(tmp_path):
    writer = SigMFWriter(tmp_path / "quay", "rf64_le")
    (tmp_path / "quay.sigmf-meta").write_text("theirs")
    with pytest.raises(FileExistsError):
        writer.close()
    assert names(tmp_path) == ["quay.sigmf-meta"]


def test_an_old_recording_survives_a_failed_overwrite(tmp_path):
    write_sigmf(tmp_path / "quay", np.zeros(3))
    with (
        pytest.raises(KeyError),
        SigMFWriter(tmp_path / "quay", "rf64_le", overwrite=True) as writer,
    ):
        writer.write(np.ones(3))
        raise KeyError
    with open_recording(tmp_path / "quay", verify=True) as recording:
        assert recording.read().tolist() == [0, 0, 0]
    assert names(tmp_path) == ["quay.sigmf-data", "quay.sigmf-meta"]


@pytest.mark.parametrize("step", ["write", "complete", "publish"])
def test_errors_of_the_disk_leave_nothing(tmp_path, monkeypatch, step):
    def full(self, *arguments):
        raise OSError(28, "No space left on device")

    writer = SigMFWriter(tmp_path / "quay", "rf64_le")
    if step != "write":
        writer.write(np.ones(3))
    monkeypatch.setattr(PartFile, step, full)
    with pytest.raises(OSError, match="No space left"):
        writer.write(np.ones(3)) if step == "write" else writer.close()
    assert names(tmp_path) == []
    with pytest.raises(ValueError, match="is closed"):
        writer.write(np.ones(3))


def test_a_disk_that_fills(tmp_path):
    # A limit on the file size stands for the full disk: the write fails half way, in the kernel.
    code = f"""
import resource, signal, numpy as np
from chanbank.recordings import NpyWriter, SigMFWriter
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, 100_000))
path = {str(tmp_path / "quay")!r}
for writer in SigMFWriter(path, "cf32_le"), NpyWriter(path + ".npy", "complex64"):
    try:
        with writer:
            for _ in range(100):
                writer.write(np.ones(1000, np.complex64))
    except OSError as error:
        print(error.errno, writer.samples)
"""
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    # Blocks of 8000 bytes: the thirteenth runs into the limit.
    assert run.stdout.split() == [str(errno.EFBIG), "12000"] * 2
    assert names(tmp_path) == []


def test_what_a_crash_leaves_is_no_obstacle(tmp_path):
    # Killed while writing: only the part is there.
    (tmp_path / "quay.sigmf-data.part").write_bytes(b"half written, and longer than what follows")
    write_sigmf(tmp_path / "quay", np.zeros(3))
    with open_recording(tmp_path / "quay", verify=True) as recording:
        assert recording.samples == 3
    # Killed between the two files: data in place, metadata still a part.
    os.replace(tmp_path / "quay.sigmf-meta", tmp_path / "quay.sigmf-meta.part")
    write_sigmf(tmp_path / "quay", np.ones(4))
    with open_recording(tmp_path / "quay", verify=True) as recording:
        assert recording.samples == 4
    assert names(tmp_path) == ["quay.sigmf-data", "quay.sigmf-meta"]


def test_folders_without_permission(unprivileged):
    unprivileged.enter()
    with pytest.raises(PermissionError, match="not writable"):
        SigMFWriter(unprivileged.folder / "quay", "ri8")


def test_a_folder_in_the_way(tmp_path):
    (tmp_path / "quay.sigmf-data").mkdir()
    with pytest.raises(IsADirectoryError, match=r"quay\.sigmf-data. is a folder"):
        SigMFWriter(tmp_path / "quay", "ri8", overwrite=True)
