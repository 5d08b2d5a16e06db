"""WAV, RF64 and BW64, written by the standard library, by SciPy, and byte by byte.

References: EBU Tech 3306 (RF64), Recommendation ITU-R BS.2088 (BW64); the layout of the ds64
chunk beyond its first two fields is from memory.
"""

import struct
import wave

import numpy as np
import pytest
from scipy.io import wavfile

from chanbank.recordings import RecordingError, open_recording

PCM, FLOAT, EXTENSIBLE = 1, 3, 0xFFFE
GUID_TAIL = bytes.fromhex("000000001000800000aa00389b71")
FULL = 0xFFFFFFFF


def chunk(name, body, size=None):
    size = len(body) if size is None else size
    return name + struct.pack("<I", size) + body + b"\x00" * (len(body) % 2)


def fmt(code=PCM, channels=2, rate=48000, bits=16, container=None, extra=b""):
    container = container or bits
    align = channels * container // 8
    body = struct.pack("<HHIIHH", code, channels, rate, rate * align, align, bits)
    return chunk(b"fmt ", body + extra)


def riff(*chunks, form=b"RIFF", size=None):
    body = b"WAVE" + b"".join(chunks)
    return form + struct.pack("<I", len(body) if size is None else size) + body


def ds64(data, samples=0, table=()):
    rows = b"".join(name + struct.pack("<Q", size) for name, size in table)
    return chunk(b"ds64", struct.pack("<QQQI", data + 100, data, samples, len(table)) + rows)


@pytest.mark.parametrize("channels", [1, 2])
@pytest.mark.parametrize("width", [1, 2, 3, 4])
def test_pcm_from_the_standard_library(tmp_path, channels, width):
    path = tmp_path / "quay.wav"
    bits = 8 * width
    generator = np.random.default_rng(width)
    low, high = (0, 255) if width == 1 else (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1)
    values = generator.integers(low, high, (23, channels), endpoint=True)
    values[0], values[-1] = low, high
    data = b"".join(
        int(value).to_bytes(width, "little", signed=width > 1) for value in values.ravel()
    )
    with wave.open(str(path), "wb") as file:
        file.setparams((channels, width, 48000, 23, "NONE", ""))
        file.writeframes(data)
    meant = (values - (128 if width == 1 else 0)) / 2.0 ** (bits - 1)
    meant = meant[:, 0] if channels == 1 else meant[:, 0] + 1j * meant[:, 1]
    with open_recording(path, center_frequency=1e6) as recording:
        prefix = "r" if channels == 1 else "c"
        assert (
            recording.datatype == prefix + {1: "u8", 2: "i16_le", 3: "i24_le", 4: "i32_le"}[width]
        )
        assert recording.shape == (23,)
        assert (recording.sample_rate, recording.center_frequency) == (48000.0, 1e6)
        np.testing.assert_array_equal(recording.read(as_float="double"), meant)
        got = recording.read()
        if width <= 2:
            assert got.dtype == (np.uint8 if width == 1 else np.int16)
            np.testing.assert_array_equal(got, values.ravel())
        else:
            np.testing.assert_array_equal(got, meant)
        assert len(list(recording.blocks(10))) == 3


@pytest.mark.parametrize("dtype", ["<f4", "<f8"])
def test_float_from_scipy(tmp_path, dtype):
    path = tmp_path / "quay.wav"
    values = np.random.default_rng(1).standard_normal((50, 2)).astype(dtype)
    wavfile.write(path, 96000, values)
    with open_recording(path) as recording:
        got = recording.read()
    assert got.dtype == ("c8" if dtype == "<f4" else "c16")
    np.testing.assert_array_equal(got, values[:, 0] + 1j * values[:, 1])


def test_other_chunks_may_stand_anywhere(tmp_path):
    path = tmp_path / "quay.wav"
    data = np.arange(8, dtype="<i2").tobytes()
    path.write_bytes(
        riff(
            chunk(b"JUNK", bytes(28)),
            chunk(b"LIST", b"odd"),  # an odd size is followed by a zero byte
            fmt(),
            chunk(b"fact", struct.pack("<I", 4)),
            chunk(b"data", data),
            chunk(b"LIST", b"more"),
        )
    )
    with open_recording(path) as recording:
        assert recording.read().tolist() == list(range(8))
        assert recording.metadata["chunks"] == ["JUNK", "LIST", "fmt ", "fact", "data"]


@pytest.mark.parametrize(
    ("code", "bits", "container", "valid", "name"),
    [(PCM, 16, 16, 16, "ci16_le"), (PCM, 24, 24, 20, "ci24_le"), (FLOAT, 32, 32, 32, "cf32_le")],
)
def test_extensible_format(tmp_path, code, bits, container, valid, name):
    path = tmp_path / "quay.wav"
    extra = struct.pack("<HHIH", 22, valid, 3, code) + GUID_TAIL
    data = bytes(2 * container // 8 * 5)
    path.write_bytes(riff(fmt(EXTENSIBLE, bits=bits, extra=extra), chunk(b"data", data)))
    with open_recording(path) as recording:
        assert (recording.datatype, recording.samples) == (name, 5)
    path.write_bytes(
        riff(fmt(EXTENSIBLE, bits=bits, extra=extra[:-1] + b"\x00"), chunk(b"data", data))
    )
    with pytest.raises(RecordingError, match="sub-format"):
        open_recording(path)


def sparse(path, header, data_bytes, marks):
    """A file of `data_bytes` zeros after the header, with samples at a few places."""
    with open(path, "wb") as file:
        file.write(header)
        for position, data in marks:
            file.seek(len(header) + position)
            file.write(data)
        file.truncate(len(header) + data_bytes)


@pytest.mark.parametrize("form", [b"RF64", b"BW64"])
def test_beyond_4_gib(tmp_path, form):
    path = tmp_path / "quay.wav"
    samples = 2**30 + 1000  # 2 channels of 16 bits: 4 GiB are 2^30 samples
    data_bytes = 4 * samples
    header = riff(
        ds64(data_bytes, samples if form == b"RF64" else 12345),
        fmt(rate=10_000_000),
        chunk(b"data", b"", size=FULL),
        form=form,
        size=FULL,
    )
    last = np.array([1, -2, 3, -4], "<i2").tobytes()
    across = np.arange(1, 9, dtype="<i2").tobytes()
    sparse(path, header, data_bytes, [(2**32 - 8, across), (data_bytes - 8, last)])
    with open_recording(path) as recording:
        assert recording.samples == samples
        assert recording.duration == samples / 10e6
        assert recording.read(samples - 2).tolist() == [1, -2, 3, -4]
        assert recording.read(2**30 - 2, 4).tolist() == list(range(1, 9))
        assert not recording.read(5 * 10**8, 10).any()


def test_sizes_of_other_chunks_in_the_ds64_table(tmp_path):
    path = tmp_path / "quay.wav"
    data = np.arange(8, dtype="<i2").tobytes()
    path.write_bytes(
        riff(
            ds64(len(data), 4, [(b"huge", 6)]),
            fmt(),
            chunk(b"huge", b"sixsix", size=FULL),
            chunk(b"data", data, size=FULL),
            form=b"RF64",
            size=FULL,
        )
    )
    with open_recording(path) as recording:
        assert recording.read().tolist() == list(range(8))


def test_a_32_bit_size_stands_beside_ds64(tmp_path):
    path = tmp_path / "quay.wav"
    data = bytes(16)
    path.write_bytes(riff(ds64(999, 0), fmt(), chunk(b"data", data), form=b"RF64", size=FULL))
    with open_recording(path) as recording:
        assert recording.samples == 4


@pytest.mark.parametrize(("outer", "inner"), [(0, 0), (FULL, FULL), (FULL, 0)])
def test_a_recorder_that_never_finished(tmp_path, outer, inner):
    path = tmp_path / "quay.wav"
    path.write_bytes(riff(fmt(), chunk(b"data", bytes(20), size=inner), size=outer))
    with pytest.warns(UserWarning, match="never filled in; the 20 bytes"):
        recording = open_recording(path)
    with recording:
        assert recording.samples == 5


def test_streams_of_other_channel_counts(tmp_path):
    path = tmp_path / "quay.wav"
    values = np.arange(24, dtype="<i2")
    path.write_bytes(riff(fmt(channels=4), chunk(b"data", values.tobytes())))
    with pytest.raises(RecordingError, match=r"found 4 channels, expected 1 \(real\) or 2 \(I/Q\)"):
        open_recording(path)
    with open_recording(path, streams=2) as recording:
        assert recording.datatype == "ci16_le"
        assert recording.read().tolist() == [
            [0, 1, 4, 5, 8, 9, 12, 13, 16, 17, 20, 21],
            [2, 3, 6, 7, 10, 11, 14, 15, 18, 19, 22, 23],
        ]
    with open_recording(path, streams=4) as recording:
        assert recording.datatype == "ri16_le" and recording.shape == (4, 6)
    with pytest.raises(RecordingError, match=r"expected 3 \(real\) or 6 \(I/Q\)"):
        open_recording(path, streams=3)
    path.write_bytes(riff(fmt(channels=2), chunk(b"data", values.tobytes())))
    with open_recording(path, streams=2) as recording:
        assert recording.datatype == "ri16_le" and recording.shape == (2, 12)


GOOD = riff(fmt(), chunk(b"data", bytes(40)))


@pytest.mark.parametrize(
    ("data", "message"),
    [
        (GOOD[:-8], "truncated: found 32 bytes of sample data, expected 40"),
        (riff(fmt(), chunk(b"data", bytes(42))), "half a sample.*multiple of 4"),
        (riff(chunk(b"data", bytes(40))), "no 'fmt ' chunk"),
        (riff(fmt()), "no 'data' chunk"),
        (
            riff(chunk(b"fmt ", bytes(8)), chunk(b"data", b"")),
            "'fmt ' chunk of 8 bytes, expected 16",
        ),
        (riff(fmt(code=2, bits=4, container=8), chunk(b"data", b"")), "format code 2 with 4 bits"),
        (riff(fmt(channels=0), chunk(b"data", b"")), "for 0 channels, expected PCM"),
        (riff(fmt(), chunk(b"data", b""), form=b"RF64"), "no 'ds64' chunk in this RF64 file"),
        (riff(chunk(b"ds64", bytes(8)), form=b"RF64"), "'ds64' chunk of 8 bytes, expected 28"),
        (
            riff(
                ds64(40, 11), fmt(), chunk(b"data", bytes(40), size=FULL), form=b"RF64", size=FULL
            ),
            "found 10 samples in the data chunk, expected 11 by its ds64 chunk",
        ),
        (
            riff(fmt(), chunk(b"fact", struct.pack("<I", 11)), chunk(b"data", bytes(40))),
            "found 10 samples in the data chunk, expected 11 by its fact",
        ),
        (b"RIFX" + GOOD[4:], "found b'RIFX' at the start"),
        (b"", "found b'' at the start"),
    ],
)
def test_damaged_files(tmp_path, data, message):
    path = tmp_path / "quay.wav"
    path.write_bytes(data)
    with pytest.raises(RecordingError, match=message):
        open_recording(path)


def test_a_truncated_tail_on_request(tmp_path):
    path = tmp_path / "quay.wav"
    path.write_bytes(GOOD[:-6])
    with open_recording(path, allow_truncated=True) as recording:
        assert recording.samples == 8 and recording.truncated


def test_arguments_that_contradict(tmp_path):
    path = tmp_path / "quay.wav"
    path.write_bytes(GOOD)
    with pytest.raises(RecordingError, match=r"sample_rate=44100 contradicts .* found 48000 Hz"):
        open_recording(path, sample_rate=44100)
    with pytest.raises(RecordingError, match="datatype ci8 contradicts the file: found ci16_le"):
        open_recording(path, datatype="ci8")
    open_recording(path, datatype="ci16_le", sample_rate=48000, streams=1).close()
    # Under another name the file is told by its first bytes.
    other = tmp_path / "quay.iq"
    other.write_bytes(GOOD)
    with open_recording(other) as recording:
        assert recording.container == "wav"
