"""Raw files of every SigMF datatype, against values spelled out with `struct`."""

import itertools
import struct

import numpy as np
import pytest

from chanbank.recordings import RecordingError, open_recording

CODES = {
    "f32": "f",
    "f64": "d",
    "i32": "i",
    "i16": "h",
    "i8": "b",
    "u32": "I",
    "u16": "H",
    "u8": "B",
}
NAMES = [
    f"{prefix}{component}{order}"
    for prefix, component in itertools.product("cr", CODES)
    for order in ([""] if component.endswith("8") else ["_le", "_be"])
]
assert len(NAMES) == 28


def components(component, count, seed):
    """Values of one component over its whole range, both ends included."""
    generator = np.random.default_rng(seed)
    if component[0] == "f":
        return [float(np.float32(v)) for v in generator.standard_normal(count)]
    bits = int(component[1:])
    low, high = (
        (-(2 ** (bits - 1)), 2 ** (bits - 1) - 1) if component[0] == "i" else (0, 2**bits - 1)
    )
    values = generator.integers(low, high, count, endpoint=True).tolist()
    values[0], values[-1] = low, high
    return values


def scaled(component, value):
    """The documented meaning of a component, in exact double arithmetic."""
    if component[0] == "f":
        return value
    half = 2 ** (int(component[1:]) - 1)
    return (value - (half if component[0] == "u" else 0)) / half


def write_raw(path, name, values):
    order = ">" if name.endswith("_be") else "<"
    path.write_bytes(struct.pack(f"{order}{len(values)}{CODES[name[1:].split('_')[0]]}", *values))


@pytest.mark.parametrize("streams", [1, 3])
@pytest.mark.parametrize("name", NAMES)
def test_every_datatype(tmp_path, name, streams):
    component = name[1:].split("_")[0]
    parts = 2 if name[0] == "c" else 1
    count = 37
    values = components(component, count * streams * parts, seed=5)
    path = tmp_path / "capture.bin"
    write_raw(path, name, values)
    # Sample by sample, stream by stream, I before Q: spelled out with loops.
    expected = np.empty((streams, count), complex)
    stored = np.empty((streams, count * parts))
    position = iter(values)
    for n, s in itertools.product(range(count), range(streams)):
        parts_here = [next(position) for _ in range(parts)]
        meant = [scaled(component, value) for value in parts_here]
        expected[s, n] = complex(meant[0], meant[1] if parts == 2 else 0)
        stored[s, n * parts : (n + 1) * parts] = parts_here
    if streams == 1:
        expected, stored = expected[0], stored[0]
    if parts == 1:
        expected = expected.real
    streams_given = None if streams == 1 else streams
    with open_recording(path, datatype=name, streams=streams_given) as recording:
        assert recording.shape == ((count,) if streams == 1 else (streams, count))
        assert recording.datatype == name
        got = recording.read()
        double = recording.read(as_float="double")
        single = recording.read(as_float="single")
        pieces = list(recording.blocks(5, start=3, count=20))
        middle = recording.read(3, 20)
    if component in ("i8", "u8", "i16"):
        assert got.dtype == {"i8": np.int8, "u8": np.uint8, "i16": np.int16}[component]
        np.testing.assert_array_equal(got, stored)
    else:
        wide = component in ("f64", "i32", "u32")
        dtype = {(2, True): "c16", (2, False): "c8", (1, True): "f8", (1, False): "f4"}[parts, wide]
        assert got.dtype == np.dtype(dtype)
        # Every stored value is a binary fraction that the float holds exactly.
        np.testing.assert_array_equal(got, expected)
    assert double.dtype == (np.complex128 if parts == 2 else np.float64)
    np.testing.assert_array_equal(double, expected)
    assert single.dtype == (np.complex64 if parts == 2 else np.float32)
    np.testing.assert_array_equal(single, expected.astype(single.dtype))
    assert got.dtype.isnative and got.flags.c_contiguous
    per_sample = got.shape[-1] // count
    assert [piece.shape[-1] for piece in pieces] == [5 * per_sample] * 4
    np.testing.assert_array_equal(np.concatenate(pieces, axis=-1), middle)


def test_a_byte_order_on_single_bytes_is_tolerated(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(range(8)))
    with open_recording(path, datatype="cu8_le") as recording:
        assert recording.datatype == "cu8"
        assert recording.samples == 4


def test_header_is_skipped_and_rates_are_kept(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(b"HEAD" * 4 + np.arange(6, dtype="<i2").tobytes())
    with open_recording(
        path, datatype="ri16_le", header_bytes=16, sample_rate=3, center_frequency=156.8e6
    ) as recording:
        assert recording.read().tolist() == [0, 1, 2, 3, 4, 5]
        assert (recording.sample_rate, recording.center_frequency) == (3.0, 156.8e6)
        assert recording.duration == 2.0
        (segment,) = recording.segments
        assert (segment.start, segment.length, segment.datetime) == (0, 6, None)
    assert recording.closed


def test_blocks_have_the_size_asked_for(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(11))
    with open_recording(path, datatype="ri8") as recording:
        assert [len(block) for block in recording.blocks(4)] == [4, 4, 3]
        assert [len(block) for block in recording.blocks(4, start=9)] == [2]
        assert list(recording.blocks(4, start=11)) == []
        assert [len(block) for block in recording.blocks(100)] == [11]


def test_an_empty_file_is_an_empty_recording(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(b"")
    with open_recording(path, datatype="cf32_le", streams=2) as recording:
        assert recording.shape == (2, 0)
        assert recording.read().shape == (2, 0)
        assert list(recording.blocks()) == []


def test_arrays_are_fresh(tmp_path):
    path = tmp_path / "capture.bin"
    np.arange(4, dtype="<f4").tofile(path)
    with open_recording(path, datatype="rf32_le") as recording:
        first = recording.read()
        first[:] = -1
        assert recording.read().tolist() == [0, 1, 2, 3]


def test_nan_and_infinity_pass_through(tmp_path):
    path = tmp_path / "capture.bin"
    np.array([np.nan, np.inf, -np.inf, 1], ">f4").tofile(path)
    with open_recording(path, datatype="rf32_be") as recording:
        np.testing.assert_array_equal(recording.read(), [np.nan, np.inf, -np.inf, 1])


def test_half_a_sample_at_the_end(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(4 * 8 + 6))
    with pytest.raises(
        RecordingError, match=r"half a sample .*found 38 bytes.*multiple of 8.*6 left"
    ):
        open_recording(path, datatype="cf32_le")
    with pytest.raises(RecordingError, match=r"multiple of 16 \(cf32_le, 2 streams\)"):
        open_recording(path, datatype="cf32_le", streams=2)
    with open_recording(path, datatype="cf32_le", allow_truncated=True) as recording:
        assert recording.samples == 4
        assert recording.truncated


def test_header_longer_than_the_file(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(10))
    with pytest.raises(RecordingError, match="found 10 bytes, expected a header of 16"):
        open_recording(path, datatype="ri8", header_bytes=16)


def test_a_file_that_shrinks_while_it_is_read(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(100))
    with open_recording(path, datatype="ri8") as recording:
        with open(path, "r+b") as file:
            file.truncate(60)
        with pytest.raises(RecordingError, match="found 60 bytes, expected at least 100"):
            recording.read()


@pytest.mark.parametrize(
    "datatype", ["cf32", "ci24_le", "f32_le", "cf16_le", "CF32_LE", "xi8", "ci16_lex"]
)
def test_unknown_datatypes(tmp_path, datatype):
    with pytest.raises(ValueError, match=f"datatype must be .*SigMF datatype.*got '{datatype}'"):
        open_recording(tmp_path / "not looked at", datatype=datatype)


@pytest.mark.parametrize(
    ("argument", "value", "error"),
    [
        ("path", 3, TypeError),
        ("path", "", ValueError),
        ("datatype", 16, TypeError),
        ("sample_rate", 0, ValueError),
        ("sample_rate", float("nan"), ValueError),
        ("sample_rate", "fast", TypeError),
        ("center_frequency", float("inf"), ValueError),
        ("streams", 0, ValueError),
        ("streams", 1.5, TypeError),
        ("header_bytes", -1, ValueError),
        ("member", 3, TypeError),
        ("extensions", "antenna", TypeError),
        ("extensions", 3, TypeError),
        ("allow_truncated", 1, TypeError),
        ("verify", None, TypeError),
    ],
)
def test_bad_arguments_name_themselves(tmp_path, argument, value, error):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(4))
    arguments = {"path": path, "datatype": "ri8", argument: value}
    with pytest.raises(error, match=argument):
        open_recording(**arguments)


def test_bad_stretches(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(10))
    with open_recording(path, datatype="ri8") as recording:
        with pytest.raises(ValueError, match=r"6 \+ 5 <= 10 does not"):
            recording.read(6, 5)
        with pytest.raises(ValueError, match="start must be an integer from 0 to 10; got 11"):
            recording.read(11)
        for call in (recording.read, lambda **k: recording.blocks(2, **k)):
            with pytest.raises(ValueError, match="start"):
                call(start=-1)
            with pytest.raises(TypeError, match="count"):
                call(count=2.0)
            with pytest.raises(ValueError, match="as_float"):
                call(as_float="half")
        with pytest.raises(ValueError, match="size"):
            recording.blocks(0)
        with pytest.raises(RecordingError, match="no SHA-512"):
            recording.verify()
    with pytest.raises(ValueError, match="is closed"):
        recording.read()
    recording.close()


def test_containers_are_told_apart(tmp_path):
    path = tmp_path / "capture.bin"
    path.write_bytes(bytes(10))
    with pytest.raises(ValueError, match=r"datatype must be given .*capture\.bin"):
        open_recording(path)
    with pytest.raises(FileNotFoundError):
        open_recording(tmp_path / "missing.bin", datatype="ri8")
    with pytest.raises(ValueError, match="member is for archive files"):
        open_recording(path, datatype="ri8", member="a")
