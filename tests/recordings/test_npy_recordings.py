""".npy files, written and read by NumPy."""

import numpy as np
import pytest

from chanbank.recordings import NpyWriter, RecordingError, open_recording

DTYPES = ["c8", "c16", "f4", "f8", "i1", "u1", "i2", "u2", "i4", "u4"]


def values(dtype, shape):
    generator = np.random.default_rng(3)
    if np.dtype(dtype).kind in "cf":
        samples = generator.standard_normal(shape) + 1j * generator.standard_normal(shape)
        return (samples if np.dtype(dtype).kind == "c" else samples.real).astype(dtype)
    limits = np.iinfo(dtype)
    return generator.integers(limits.min, limits.max, shape, endpoint=True).astype(dtype)


@pytest.mark.parametrize("order", "CF")
@pytest.mark.parametrize("endian", "<>")
@pytest.mark.parametrize("shape", [(29,), (3, 29)])
@pytest.mark.parametrize("dtype", DTYPES)
def test_every_dtype_order_and_shape(tmp_path, dtype, shape, endian, order):
    path = tmp_path / "quay.npy"
    samples = values(dtype, shape)
    np.save(path, np.asarray(samples, dtype=endian + dtype, order=order))
    with open_recording(path, sample_rate=10) as recording:
        assert recording.shape == shape and recording.sample_rate == 10
        got = recording.read()
        middle = np.concatenate(list(recording.blocks(4, start=3, count=20)), axis=-1)
    if dtype in ("u2", "i4", "u4"):
        half = 2.0 ** (8 * np.dtype(dtype).itemsize - 1)
        samples = (samples.astype(float) - (half if dtype[0] == "u" else 0)) / half
        assert got.dtype == ("f4" if dtype == "u2" else "f8")
    else:
        assert got.dtype == dtype
    np.testing.assert_array_equal(got, samples)
    np.testing.assert_array_equal(middle, samples[..., 3:23])


def test_interleaved_integers(tmp_path):
    path = tmp_path / "quay.npy"
    np.save(path, np.arange(12, dtype=np.int16).reshape(2, 6))
    with open_recording(path, datatype="ci16_le") as recording:
        assert recording.complex and recording.shape == (2, 3)
        assert recording.read(1, 2).tolist() == [[2, 3, 4, 5], [8, 9, 10, 11]]
        assert recording.read(2, as_float="double").tolist() == [
            [(4 + 5j) / 2**15],
            [(10 + 11j) / 2**15],
        ]
    np.save(path, np.asfortranarray(np.arange(12, dtype=np.int16).reshape(2, 6)))
    with pytest.raises(RecordingError, match="Fortran order"):
        open_recording(path, datatype="ci16_le")
    np.save(path, np.arange(5, dtype=np.int16))
    with pytest.raises(RecordingError, match=r"half a sample .* found 5 integers"):
        open_recording(path, datatype="ci16_le")


@pytest.mark.parametrize(
    ("array", "message"),
    [
        (np.zeros(3, bool), "found dtype bool, expected one of complex64"),
        (np.zeros(3, np.int64), "found dtype int64"),
        (np.zeros(3, np.float16), "found dtype float16"),
        (np.zeros(3, "c16,f4"), "found dtype"),
        (np.array([{}], object), "found dtype object"),
        (np.zeros((2, 3, 4), np.float32), r"found shape \(2, 3, 4\), expected \(samples,\) or"),
        (np.float32(3), r"found shape \(\)"),
        (np.zeros((0, 4), np.float32), "expected at least one stream"),
    ],
)
def test_arrays_that_are_no_recording(tmp_path, array, message):
    path = tmp_path / "quay.npy"
    np.save(path, array)
    with pytest.raises(RecordingError, match=message):
        open_recording(path)


def test_damaged_files(tmp_path):
    path = tmp_path / "quay.npy"
    np.save(path, np.arange(10, dtype=np.float32))
    whole = path.read_bytes()
    path.write_bytes(whole[:-6])
    with pytest.raises(
        RecordingError, match=r"found 34 bytes of sample data, expected 40 for shape"
    ):
        open_recording(path)
    with open_recording(path, allow_truncated=True) as recording:
        assert recording.read().tolist() == list(range(8)) and recording.truncated
    path.write_bytes(whole + b"\x00")
    with pytest.raises(RecordingError, match="found 41 bytes of sample data, expected 40"):
        open_recording(path, allow_truncated=True)
    for data in (
        b"",
        whole[:30],
        whole[:6] + b"\x07\x00" + whole[8:],
        b"\x93NUMPY\x01\x00\x04\x00{}{}",
    ):
        path.write_bytes(data)
        with pytest.raises(RecordingError, match=r"\.npy"):
            open_recording(path)
    np.save(path, np.zeros((2, 10), np.float32))
    path.write_bytes(path.read_bytes()[:-8])
    with pytest.raises(RecordingError, match="whole streams are missing"):
        open_recording(path, allow_truncated=True)


def test_arguments_that_contradict(tmp_path):
    path = tmp_path / "quay.npy"
    np.save(path, np.zeros((2, 10), np.int16))
    with pytest.raises(RecordingError, match=r"datatype cf32_le contradicts .* which is ri16_le"):
        open_recording(path, datatype="cf32_le")
    with pytest.raises(RecordingError, match=r"streams=3 contradicts .* shape \(2, 10\)"):
        open_recording(path, streams=3)
    open_recording(path, datatype="ri16_le", streams=2).close()


# --- the writer ----------------------------------------------------------------------------------


@pytest.mark.parametrize("streams", [1, 3])
@pytest.mark.parametrize("dtype", DTYPES)
def test_what_is_written_is_what_numpy_loads(tmp_path, dtype, streams):
    path = tmp_path / "quay.npy"
    samples = values(dtype, (29,) if streams == 1 else (streams, 29))
    with NpyWriter(path, np.dtype(dtype).name, streams=streams) as writer:
        assert not path.exists()
        for start, stop in [(0, 5), (5, 5), (5, 28), (28, 29)]:
            writer.write(samples[..., start:stop])
        assert writer.samples == 29
    loaded = np.load(path)
    assert loaded.dtype == dtype
    np.testing.assert_array_equal(loaded, samples)
    assert [p.name for p in tmp_path.iterdir()] == ["quay.npy"]
    with open_recording(path) as recording:
        assert recording.shape == samples.shape


def test_the_header_has_room_for_any_length(tmp_path):
    path = tmp_path / "quay.npy"
    with NpyWriter(path, "float32"):
        pass
    assert np.load(path).shape == (0,)
    with open(path, "rb") as file:
        assert np.lib.format.read_magic(file) == (1, 0)
        np.lib.format.read_array_header_1_0(file)
        assert file.tell() % 64 == 0


def test_npy_writer_refuses(tmp_path):
    path = tmp_path / "quay.npy"
    path.write_text("mine")
    with pytest.raises(FileExistsError, match="overwrite=True"):
        NpyWriter(path, "float32")
    assert path.read_text() == "mine"
    with pytest.raises(FileNotFoundError, match="is not a folder"):
        NpyWriter(tmp_path / "no" / "quay.npy", "float32")
    with pytest.raises(ValueError, match="dtype must be one of"):
        NpyWriter(path, "int64")
    with pytest.raises(ValueError, match="streams"):
        NpyWriter(path, "float32", streams=0)
    with NpyWriter(path, "float32", streams=2, overwrite=True) as writer:
        with pytest.raises(TypeError, match=r"dtype float32; got .*float64"):
            writer.write(np.zeros((2, 3)))
        for shape in [(3,), (3, 3), (2, 3, 1)]:
            with pytest.raises(ValueError, match=r"shape \(2, samples\)"):
                writer.write(np.zeros(shape, np.float32))
        writer.write(np.ones((2, 3), np.float32))
    assert np.load(path).tolist() == [[1, 1, 1], [1, 1, 1]]
    with pytest.raises(ValueError, match="is closed"):
        writer.write(np.ones((2, 3), np.float32))
    assert np.load(path).shape == (2, 3)


def test_npy_writer_leaves_nothing_after_an_error(tmp_path):
    path = tmp_path / "quay.npy"
    with pytest.raises(KeyError), NpyWriter(path, "float32") as writer:
        writer.write(np.zeros(3, np.float32))
        raise KeyError
    assert list(tmp_path.iterdir()) == []
