"""Files whole or not at all, calls that can be repeated, memory and open files that stay few."""

import json
import os
import subprocess
import sys

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
from chanbank.recordings import SigMFWriter, open_recording, write_sigmf
from chanbank.splitting import split_recording


def make(folder, count=4000):
    generator = np.random.default_rng(3)
    samples = generator.standard_normal(count) + 1j * generator.standard_normal(count)
    write_sigmf(folder / "quay", samples.astype(np.complex64), sample_rate=64e3, overwrite=True)
    return folder / "quay"


def split(path, destination, **settings):
    bank = AnalysisBank(ChannelPlan(64e3, 16, 12), boxcar_prototype(16))
    with open_recording(path) as recording:
        return split_recording(recording, bank, destination, progress=False, **settings)


def listing(folder):
    return {path.name: path.read_bytes() for path in folder.iterdir()}


def test_nothing_is_overwritten_unless_asked(tmp_path):
    path, out = make(tmp_path), tmp_path / "out"
    split(path, out, select=[3])
    before = listing(out)
    assert len(before) == 3
    with pytest.raises(FileExistsError, match="overwrite=True"):
        split(path, out, select=[3])
    with pytest.raises(FileExistsError, match=r"prototype\.npz"):
        split(path, out, select=[5])
    assert listing(out) == before
    (out / "notes.txt").write_text("mine")
    split(path, out, select=[3, 5], overwrite=True)
    assert len(listing(out)) == 6
    assert (out / "notes.txt").read_text() == "mine"


def test_destinations_that_cannot_be(tmp_path):
    path = make(tmp_path)
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(NotADirectoryError, match="is a file, not a folder"):
        split(path, tmp_path / "file")
    with pytest.raises(NotADirectoryError):
        split(path, tmp_path / "file" / "deeper")
    split(path, tmp_path / "new" / "deeper" / "", select=[1])
    assert len(listing(tmp_path / "new" / "deeper")) == 3


def test_a_folder_without_permission(unprivileged):
    path = make(unprivileged.folder)
    before = listing(unprivileged.folder)
    unprivileged.enter()
    with pytest.raises(PermissionError):
        split(path, unprivileged.folder)
    assert listing(unprivileged.folder) == before


def test_a_disk_known_to_be_too_small_is_refused_at_once(tmp_path, monkeypatch):
    from shutil import disk_usage

    path = make(tmp_path)
    usage = disk_usage(tmp_path)
    monkeypatch.setattr("shutil.disk_usage", lambda folder: usage._replace(free=1000))
    # 16 channels of ceil((4000 + 15) / 12) = 335 samples of 8 bytes.
    with pytest.raises(OSError, match="the channels need 42880 bytes and 1000 are free"):
        split(path, tmp_path / "out")
    assert not (tmp_path / "out").exists()


@pytest.mark.parametrize("existing", [False, True])
@pytest.mark.parametrize("length", [4000, 1000])
def test_a_disk_that_fills_leaves_nothing(tmp_path, length, existing):
    # The kernel's limit of 1000 bytes for a file stands for the full disk: 4000 samples give
    # pieces of 2680 bytes, which fail; 1000 give 680, which fit, and then the metadata fail.
    path, out = make(tmp_path), tmp_path / "out"
    if existing:
        out.mkdir()
        (out / "notes.txt").write_text("mine")
    code = f"""
import resource, signal, sys
sys.path.insert(0, {os.path.dirname(__file__)!r})
from test_split_files import split
signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
resource.setrlimit(resource.RLIMIT_FSIZE, (1000, 1000))
try:
    split({str(path)!r}, {str(out)!r}, select=[3, 5], length={length})
except OSError as error:
    print(error.errno)
"""
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert run.stdout.strip() == "27", run.stderr
    assert (listing(out) == {"notes.txt": b"mine"}) if existing else not out.exists()
    assert len(split(path, out, select=[3, 5])) == 2


def crash(path, out, count, **settings):
    """Split in a process of its own that dies before the `count`-th file gets its name."""
    child = os.fork()
    if child == 0:
        calls, real = [], os.replace

        def dying(*arguments):
            calls.append(1)
            if len(calls) == count:
                os._exit(9)
            real(*arguments)

        os.replace = dying
        split(path, out, **settings)
        os._exit(0)
    return os.waitstatus_to_exitcode(os.waitpid(child, 0)[1])


@pytest.mark.parametrize("overwrite", [False, True])
def test_after_a_crash_the_same_call_can_be_repeated(tmp_path, overwrite):
    path, clean = make(tmp_path), tmp_path / "clean"
    split(path, clean, select=[3, 5])
    wanted = listing(clean)
    crashes = 0
    # Two channels: three renames each while they are made, one for the prototype, one for the
    # list, and five while the files move to their places.
    for count in range(1, 20):
        out = tmp_path / f"out{count}"
        if overwrite:
            split(path, out, select=[3, 5], length=1000)
        code = crash(path, out, count, select=[3, 5], overwrite=overwrite)
        if code == 0:
            break
        assert code == 9
        crashes += 1
        for name, data in listing_of_files(out).items():
            # Whatever is there under its own name is whole: the new file, or the old one.
            assert overwrite or data == wanted[name]
            if name.endswith("-meta"):
                assert (out / name.replace("-meta", "-data")).exists()
        split(path, out, select=[3, 5], overwrite=overwrite)
        assert listing(out) == wanted
    assert crashes >= 10


def listing_of_files(folder):
    if not folder.exists():
        return {}
    return {path.name: path.read_bytes() for path in folder.iterdir() if path.is_file()}


def test_after_an_error_while_files_move_the_call_can_be_repeated(tmp_path, monkeypatch):
    path, out, real = make(tmp_path), tmp_path / "out", os.replace

    def failing(source, place):
        if os.path.dirname(place) == str(out) and place.endswith("-meta"):
            raise OSError(5, "Input/output error")
        real(source, place)

    with monkeypatch.context() as patch:
        patch.setattr("os.replace", failing)
        with pytest.raises(OSError, match="Input/output"):
            split(path, out, select=[3, 5])
    assert len(split(path, out, select=[3, 5])) == 2
    assert len(listing(out)) == 5


def test_files_of_others_are_safe_from_what_a_crash_left(tmp_path):
    # A list of moved files counts only for those that are no longer waiting in the folder.
    path, out = make(tmp_path), tmp_path / "out"
    (out / ".unfinished").mkdir(parents=True)
    (out / ".unfinished" / "moving.json").write_text(json.dumps(["prototype.npz"]))
    (out / ".unfinished" / "prototype.npz").write_bytes(b"waiting")
    (out / "prototype.npz").write_bytes(b"theirs")
    with pytest.raises(FileExistsError):
        split(path, out, select=[3])
    assert (out / "prototype.npz").read_bytes() == b"theirs"


def test_an_error_while_reading_leaves_nothing(tmp_path, monkeypatch):
    path, out = make(tmp_path), tmp_path / "out"
    monkeypatch.setattr("chanbank.analysis.runs._BLOCK_BYTES", 4096)
    data = tmp_path / "quay.sigmf-data"
    bank = AnalysisBank(ChannelPlan(64e3, 16, 12), boxcar_prototype(16))
    with open_recording(path) as recording:
        os.truncate(data, 8 * 3000)
        with pytest.raises(ValueError, match="truncated while reading"):
            split_recording(recording, bank, out, progress=False)
    assert not out.exists()


def test_progress_goes_to_the_error_stream_on_request(tmp_path, capsys):
    path = make(tmp_path)
    split(path, tmp_path / "a", select=[3])
    assert capsys.readouterr().err == ""
    bank = AnalysisBank(ChannelPlan(64e3, 16, 12), boxcar_prototype(16))
    with open_recording(path) as recording:
        split_recording(recording, bank, tmp_path / "b", select=[3])
    shown = capsys.readouterr()
    assert "4.00k/4.00k" in shown.err and shown.out == ""


def test_thousands_of_channels_need_few_open_files(tmp_path):
    count = 2048
    write_sigmf(tmp_path / "quay", np.ones(5 * count, np.complex64), sample_rate=1e6)
    code = f"""
import os, resource
resource.setrlimit(resource.RLIMIT_NOFILE, (48, 48))
os.fsync = lambda descriptor: None
from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype
from chanbank.recordings import open_recording
from chanbank.splitting import split_recording
bank = AnalysisBank(ChannelPlan(1e6, {count}, {count}), boxcar_prototype({count}))
with open_recording({str(tmp_path / "quay")!r}) as recording:
    print(len(split_recording(recording, bank, {str(tmp_path / "out")!r}, progress=False)))
"""
    run = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert run.stdout.split() == [str(count)], run.stderr
    assert len(list((tmp_path / "out").iterdir())) == 2 * count + 1


@pytest.mark.skipif(not os.path.exists("/proc/self/status"), reason="needs Linux's own account")
def test_memory_does_not_grow_with_the_recording(tmp_path):
    # 192 channels of int16 recordings of 32 and 128 MiB: resident memory, mapped pages included,
    # as the operating system counts it at its highest (getrusage would begin with what the
    # parent process held).
    peaks = []
    block = np.random.default_rng(4).integers(-3000, 3000, 1 << 22).astype(np.int16)
    for mebibytes in (32, 128):
        path = tmp_path / f"quay{mebibytes}"
        with SigMFWriter(path, "ci16_le", sample_rate=4.8e6) as writer:
            for _ in range(mebibytes // 8):
                writer.write(block)
        code = f"""
from chanbank import AnalysisBank, ChannelPlan
from chanbank.prototype.window import window_prototype
from chanbank.recordings import open_recording
from chanbank.splitting import split_recording
bank = AnalysisBank(ChannelPlan(4.8e6, 192, 128), window_prototype(192, 12, ("kaiser", 8.0)))
with open_recording({str(path)!r}) as recording:
    split_recording(recording, bank, {str(tmp_path / "out")!r}, progress=False, overwrite=True)
with open("/proc/self/status") as status:
    print(next(int(line.split()[1]) / 1024 for line in status if line.startswith("VmHWM")))
"""
        run = subprocess.run(
            [sys.executable, "-c", code], capture_output=True, text=True, check=True
        )
        peaks.append(float(run.stdout))
    assert max(peaks) < 350
    # What grows is the record of block powers, 16 MiB and as much for the peaks at most.
    assert peaks[1] - peaks[0] < 40
