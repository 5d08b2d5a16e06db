"""SigMF pairs and archives: layouts, segments, annotations, and what contradicts them.

References: SigMF specification 1.2.6 and its schema; the `sigmf` package reads and writes the
same files independently.
"""

import hashlib
import io
import json
import tarfile
import warnings

import numpy as np
import pytest
import sigmf
from sigmf.archive import SigMFArchive

from chanbank.recordings import RecordingError, open_recording


def make(folder, data=b"", *, captures=None, annotations=(), name="quay", shipped=True, **fields):
    """A pair as a recorder might leave it; `fields` are core entries of the global object."""
    top = {"core:datatype": "ri8", "core:version": "1.2.5", "core:sample_rate": 1000}
    top |= {f"core:{key}": value for key, value in fields.items()}
    metadata = {
        "global": {key: value for key, value in top.items() if value is not None},
        "captures": [{"core:sample_start": 0}] if captures is None else captures,
        "annotations": list(annotations),
    }
    (folder / f"{name}.sigmf-meta").write_text(json.dumps(metadata), encoding="utf-8")
    if shipped:
        (folder / fields.get("dataset", f"{name}.sigmf-data")).write_bytes(data)
    return folder / f"{name}.sigmf-meta"


def capture(start, **fields):
    return {"core:sample_start": start, **{f"core:{key}": value for key, value in fields.items()}}


COUNT = bytes(range(100))


# --- layouts -------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["quay.sigmf-meta", "quay.sigmf-data", "quay"])
def test_a_pair_by_any_of_its_names(tmp_path, name):
    make(tmp_path, COUNT, captures=[capture(0, frequency=156.8e6, datetime="2031-05-04T09:30:00Z")])
    with open_recording(tmp_path / name) as recording:
        assert recording.container == "sigmf"
        assert recording.read().tolist() == list(range(100))
        assert recording.sample_rate == 1000.0
        assert recording.center_frequency == 156.8e6
        (segment,) = recording.segments
        assert segment.datetime == "2031-05-04T09:30:00Z"
        assert (segment.start, segment.length, segment.global_index) == (0, 100, 0)
        assert recording.metadata["global"]["core:version"] == "1.2.5"
        recording.metadata["global"].clear()
        assert recording.metadata["global"]["core:version"] == "1.2.5"


def test_headers_between_segments_as_the_specification_works_them_out(tmp_path):
    # The standard's own example: cu8, segments at 0 and 500, 4-byte headers: data at byte 4 and
    # at byte 1008.
    file = bytearray(b"\xee" * (1008 + 600))
    first = np.arange(1000, dtype=np.uint16).astype(np.uint8)
    second = np.arange(600, dtype=np.uint16)[::-1].astype(np.uint8)
    file[4:1004] = first.tobytes()
    file[1008:] = second.tobytes()
    path = make(
        tmp_path,
        bytes(file),
        datatype="cu8",
        dataset="radio.dat",
        captures=[
            capture(0, header_bytes=4, frequency=1e6),
            capture(500, header_bytes=4, frequency=2e6),
        ],
    )
    with open_recording(path) as recording:
        assert recording.shape == (800,)
        assert [(s.start, s.length) for s in recording.segments] == [(0, 500), (500, 300)]
        np.testing.assert_array_equal(recording.read(), np.concatenate([first, second]))
        np.testing.assert_array_equal(
            recording.read(490, 20), np.concatenate([first[980:], second[:20]])
        )
        sizes = [len(block) // 2 for block in recording.blocks(400)]
        assert sizes == [400, 100, 300]  # no block crosses the retune


def test_trailing_bytes_and_header_of_the_only_segment(tmp_path):
    path = make(
        tmp_path,
        b"HEADER" + COUNT + b"END",
        dataset="radio.dat",
        trailing_bytes=3,
        captures=[capture(0, header_bytes=6)],
    )
    with open_recording(path) as recording:
        assert recording.read().tobytes() == COUNT


def test_offset_moves_all_indices(tmp_path):
    path = make(
        tmp_path,
        COUNT,
        offset=1000,
        captures=[capture(1000, frequency=1e6), capture(1040, frequency=2e6)],
        annotations=[{"core:sample_start": 1010, "core:sample_count": 5, "core:label": "call"}],
    )
    with open_recording(path) as recording:
        assert recording.first_sample == 1000
        assert recording.read(40, 2).tolist() == [40, 41]
        assert [(s.start, s.length, s.global_index) for s in recording.segments] == [
            (0, 40, 1000),
            (40, 60, 1040),
        ]
        (annotation,) = recording.annotations
        assert (annotation.start, annotation.length, annotation.label) == (10, 5, "call")


def test_several_channels_are_streams(tmp_path):
    path = make(tmp_path, COUNT, num_channels=4)
    with open_recording(path) as recording:
        assert recording.shape == (4, 25)
        np.testing.assert_array_equal(recording.read(), np.arange(100).reshape(25, 4).T)


def test_missing_rate_and_frequency_come_from_the_caller(tmp_path):
    path = make(tmp_path, COUNT, sample_rate=None)
    with open_recording(path) as recording:
        assert recording.sample_rate is None and recording.center_frequency is None
        assert recording.duration is None
        assert "unknown rate" in repr(recording)
    with open_recording(path, sample_rate=10, center_frequency=5e6) as recording:
        assert recording.sample_rate == 10.0 and recording.center_frequency == 5e6
        assert recording.segments[0].center_frequency == 5e6


def test_unknown_entries_are_left_alone(tmp_path):
    path = make(tmp_path, COUNT)
    metadata = json.loads(path.read_text())
    metadata["buoy"] = {"a": 1}
    metadata["global"]["buoy:colour"] = "red"
    path.write_text(json.dumps(metadata))
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        with open_recording(path) as recording:
            assert recording.samples == 100


# --- segments ------------------------------------------------------------------------------------

T0, T40 = "2031-05-04T09:30:00Z", "2031-05-04T09:30:00.040Z"


@pytest.mark.parametrize(
    ("captures", "expected"),
    [
        ([], [(0, 100)]),
        ([capture(0), capture(40)], [(0, 100)]),
        ([capture(0, frequency=1e6), capture(40, frequency=1e6)], [(0, 100)]),
        ([capture(0, frequency=1e6), capture(40, frequency=2e6)], [(0, 40), (40, 60)]),
        ([capture(0, frequency=1e6), capture(40)], [(0, 40), (40, 60)]),  # nothing carries over
        ([capture(0, global_index=7), capture(40, global_index=47)], [(0, 100)]),
        ([capture(0, global_index=7), capture(40, global_index=48)], [(0, 40), (40, 60)]),
        ([capture(0), capture(40, global_index=50)], [(0, 40), (40, 60)]),
        ([capture(0, datetime=T0), capture(40, datetime=T40)], [(0, 100)]),
        (  # the clock agrees to the digits it is given in, and one sample
            [capture(0, datetime=T0), capture(40, datetime="2031-05-04T09:30:01.04Z")],
            [(0, 100)],
        ),
        (
            [
                capture(0, datetime=T0.replace("Z", ".000Z")),
                capture(40, datetime=T0[:-1] + ".043Z"),
            ],
            [(0, 100)],
        ),
        (
            [
                capture(0, datetime=T0.replace("Z", ".000Z")),
                capture(40, datetime=T0[:-1] + ".044Z"),
            ],
            [(0, 40), (40, 60)],
        ),
        ([capture(20, frequency=1e6)], [(0, 20), (20, 80)]),
        ([capture(0, frequency=1e6), capture(0, frequency=2e6)], [(0, 100)]),
        (
            [capture(0), capture(30, frequency=1.0), capture(60, frequency=1.0), capture(80)],
            [(0, 30), (30, 50), (80, 20)],
        ),
    ],
)
def test_retunes_and_gaps_start_segments(tmp_path, captures, expected):
    with open_recording(make(tmp_path, COUNT, captures=captures)) as recording:
        assert [(s.start, s.length) for s in recording.segments] == expected
        assert recording.read().tobytes() == COUNT


def test_a_capture_without_samples_gives_way_to_the_next(tmp_path):
    captures = [capture(0, frequency=1e6), capture(0, frequency=2e6)]
    with open_recording(make(tmp_path, COUNT, captures=captures)) as recording:
        assert recording.center_frequency == 2e6


def test_captures_beyond_the_end_are_ignored_aloud(tmp_path):
    captures = [capture(0), capture(50, frequency=1e6), capture(150, frequency=2e6)]
    path = make(tmp_path, COUNT, captures=captures)
    with pytest.warns(UserWarning, match="capture 2 starts at sample 150, found 100 samples"):
        recording = open_recording(path)
    with recording:
        assert [(s.start, s.length) for s in recording.segments] == [(0, 50), (50, 50)]


def test_a_cut_through_a_later_header(tmp_path):
    captures = [capture(0, header_bytes=4), capture(50, header_bytes=8, frequency=1e6)]
    path = make(tmp_path, b"HEAD" + bytes(50) + b"CUT", dataset="radio.dat", captures=captures)
    with pytest.warns(UserWarning, match="capture 1 starts at sample 50, found 50 samples"):
        recording = open_recording(path)
    with recording:
        assert recording.samples == 50


# --- annotations ---------------------------------------------------------------------------------


def test_annotations(tmp_path):
    path = make(
        tmp_path,
        COUNT,
        captures=[capture(0, frequency=1e6), capture(60, frequency=2e6)],
        annotations=[
            {
                "core:sample_start": 10,
                "core:sample_count": 5,
                "core:freq_lower_edge": 1e6 - 100,
                "core:freq_upper_edge": 1e6 + 100,
                "core:label": "call",
                "core:comment": "from the pilot boat",
            },
            {"core:sample_start": 20},
            {"core:sample_start": 70},
        ],
    )
    with open_recording(path) as recording:
        call, first, second = recording.annotations
        assert (call.start, call.length) == (10, 5)
        assert (call.lower_edge, call.upper_edge) == (1e6 - 100, 1e6 + 100)
        assert (call.label, call.comment) == ("call", "from the pilot boat")
        assert call.fields["core:label"] == "call"
        # Without a count: to the end of the capture.
        assert (first.start, first.length) == (20, 40)
        assert (second.start, second.length) == (70, 30)


def test_annotations_beyond_the_end_are_clipped_aloud(tmp_path):
    annotations = [
        {"core:sample_start": 90, "core:sample_count": 50},
        {"core:sample_start": 100, "core:sample_count": 5},
        {"core:sample_start": 300},
    ]
    path = make(tmp_path, COUNT, annotations=annotations)
    with pytest.warns(UserWarning, match=r"3 annotation\(s\) reach beyond the 100 samples"):
        recording = open_recording(path)
    with recording:
        assert [(a.start, a.length) for a in recording.annotations] == [(90, 10)]


# --- archives ------------------------------------------------------------------------------------


def archive(path, members):
    with tarfile.open(path, "w:", format=tarfile.PAX_FORMAT) as tar:
        for name, data in members:
            info = tarfile.TarInfo(name)
            info.size = len(data)
            tar.addfile(info, io.BytesIO(data))


@pytest.mark.parametrize("folder", ["", "quay/", "./quay/"])
def test_an_archive(tmp_path, folder):
    meta = make(tmp_path, COUNT).read_bytes()
    path = tmp_path / "quay.sigmf"
    members = [
        ("readme.txt", b"hello"),
        (f"{folder}quay.sigmf-data", COUNT),
        (f"{folder}quay.sigmf-meta", meta),
    ]
    archive(path, members)
    with open_recording(path) as recording:
        assert recording.read().tobytes() == COUNT
        assert recording.read(98).tolist() == [98, 99]
        assert recording.path == str(path)


def test_an_archive_made_by_the_sigmf_package(tmp_path):
    meta = make(tmp_path, COUNT, captures=[capture(0, frequency=1e6)])
    handle = sigmf.fromfile(str(meta))
    SigMFArchive(handle, name=str(tmp_path / "other.sigmf"))
    with open_recording(tmp_path / "other.sigmf", verify=True) as recording:
        assert recording.read().tobytes() == COUNT
        assert recording.center_frequency == 1e6


def test_an_archive_of_several_recordings(tmp_path):
    meta = make(tmp_path, COUNT).read_bytes()
    path = tmp_path / "both.sigmf"
    archive(
        path,
        [
            ("a/a.sigmf-meta", meta),
            ("a/a.sigmf-data", COUNT),
            ("b/b.sigmf-meta", meta),
            ("b/b.sigmf-data", COUNT[::-1]),
        ],
    )
    with pytest.raises(
        RecordingError, match="found 2 recordings; choose one with member=: a/a, b/b"
    ):
        open_recording(path)
    with pytest.raises(RecordingError, match="no recording 'c', expected one of a/a, b/b"):
        open_recording(path, member="c")
    for member in ("b/b", "b/b.sigmf-meta"):
        with open_recording(path, member=member) as recording:
            assert recording.read().tobytes() == COUNT[::-1]


def test_damaged_archives(tmp_path):
    meta = make(tmp_path, COUNT).read_bytes()
    path = tmp_path / "quay.sigmf"
    data = bytes(4000)
    archive(path, [("quay.sigmf-meta", meta), ("quay.sigmf-data", data)])
    whole = path.read_bytes()
    start = whole.index(b"quay.sigmf-data", 1024) + 512
    path.write_bytes(whole[: start + 1000])
    with pytest.raises(RecordingError, match="truncated: found 1000 bytes, expected 4000"):
        open_recording(path)
    with open_recording(path, allow_truncated=True) as recording:
        assert recording.samples == 1000 and recording.truncated
    archive(path, [("quay.sigmf-meta", meta)])
    with pytest.raises(RecordingError, match=r"no dataset 'quay.sigmf-data' beside"):
        open_recording(path)
    archive(path, [("quay.sigmf-data", data)])
    with pytest.raises(RecordingError, match=r"no \.sigmf-meta file in the archive"):
        open_recording(path)
    path.write_bytes(b"not a tar file at all")
    with pytest.raises(RecordingError, match="no readable tar archive"):
        open_recording(path)
    with tarfile.open(path, "w:gz") as tar:
        tar.add(tmp_path / "quay.sigmf-meta", "quay.sigmf-meta")
    with pytest.raises(RecordingError, match="expected an uncompressed one"):
        open_recording(path)


# --- contradictions ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ({"datatype": "ci8"}, "datatype='ci8' contradicts the metadata: found 'ri8'"),
        ({"streams": 2}, "streams=2 contradicts the metadata: found 1"),
        ({"sample_rate": 5.0}, "sample_rate=5.0 contradicts the metadata: found 1000"),
        (
            {"center_frequency": 2e6},
            "center_frequency=2000000.0 contradicts the capture at sample 0",
        ),
    ],
)
def test_arguments_that_contradict(tmp_path, given, message):
    path = make(tmp_path, COUNT, captures=[capture(0, frequency=1000000)])
    with pytest.raises(RecordingError, match=message):
        open_recording(path, **given)
    agreeing = {"datatype": "ri8", "streams": 1, "sample_rate": 1e3, "center_frequency": 1e6}
    open_recording(path, **agreeing).close()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"datatype": "cf16_le"}, "unknown datatype: found 'cf16_le', expected a SigMF datatype"),
        ({"datatype": "ci16"}, "unknown datatype: found 'ci16'"),
        ({"datatype": 7}, "not valid SigMF .* at global.core:datatype"),
        ({"datatype": None}, "'core:datatype' is a required property"),
        ({"version": None}, "'core:version' is a required property"),
        ({"sample_rate": -1}, "at global.core:sample_rate"),
        ({"num_channels": 0}, "at global.core:num_channels"),
        ({"captures": [{}]}, r"at captures\.0: 'core:sample_start' is a required"),
        ({"captures": [capture(5), capture(3)]}, r"captures\[1\] starts at sample 3, expected 5"),
        ({"captures": [capture(0, datetime="2031-13-04T09:30:00Z")]}, "core:datetime"),
        ({"captures": [capture(0, datetime="2031-05-04T09:30:00+02:00")]}, "core:datetime must be"),
        ({"captures": [capture(4)], "offset": 5}, "capture 0 starts at sample 4, expected 5"),
        (
            {"annotations": [{"core:sample_start": 0, "core:freq_lower_edge": 1}]},
            "one frequency edge",
        ),
        ({"trailing_bytes": 200}, "found 100 bytes, expected at least the 200"),
        ({"captures": [capture(0, header_bytes=200)]}, "expected at least a header of 200"),
        ({"datatype": "ci16_le", "num_channels": 3}, r"half a sample.*multiple of 12.*3 channels"),
        ({"dataset": "../quay.dat"}, "core:dataset is '../quay.dat', expected the name"),
    ],
)
def test_metadata_that_are_wrong(tmp_path, change, message):
    (tmp_path / "deep").mkdir()
    path = make(tmp_path / "deep", COUNT, **change)
    with pytest.raises(RecordingError, match=message):
        open_recording(path)


def test_metadata_that_are_no_metadata(tmp_path):
    path = make(tmp_path, COUNT)
    good = path.read_text()
    for text, message in [
        ("{", "no JSON text"),
        ("[]", "found a JSON list, expected one object"),
        (good.replace("1000", "NaN"), "NaN is not a JSON number"),
        ('{"global": 3}', "not valid SigMF"),
        ("{}", "'global' is a required property"),
    ]:
        path.write_text(text)
        with pytest.raises(RecordingError, match=message):
            open_recording(path)
    path.write_bytes(b'\xff\xfe{"')
    with pytest.raises(RecordingError, match="UTF-8"):
        open_recording(path)


def test_missing_datasets(tmp_path):
    with pytest.raises(FileNotFoundError, match=r"describes .*quay\.sigmf-data"):
        open_recording(make(tmp_path, shipped=False))
    with pytest.raises(RecordingError, match="no dataset is shipped"):
        open_recording(make(tmp_path, shipped=False, metadata_only=True))
    (tmp_path / "x.sigmf-data").write_bytes(COUNT)
    with pytest.raises(FileNotFoundError, match=r"x\.sigmf-meta"):
        open_recording(tmp_path / "x.sigmf-data")
    (tmp_path / "all.sigmf-collection").write_text("{}")
    with pytest.raises(RecordingError, match="collection"):
        open_recording(tmp_path / "all.sigmf-collection")


def test_extensions_that_are_not_optional(tmp_path):
    extensions = [
        {"name": "buoy", "version": "1.0.0", "optional": True},
        {"name": "antenna", "version": "1.0.0", "optional": False},
    ]
    path = make(tmp_path, COUNT, extensions=extensions)
    with pytest.raises(RecordingError, match="needs the extension 'antenna'"):
        open_recording(path)
    open_recording(path, extensions=["antenna"]).close()


def test_checksums(tmp_path):
    good = hashlib.sha512(COUNT).hexdigest()
    with open_recording(make(tmp_path, COUNT, sha512=good.upper()), verify=True) as recording:
        recording.verify()
    path = make(tmp_path, COUNT[:-1] + b"\x00", sha512=good)
    with open_recording(path) as recording, pytest.raises(RecordingError, match="data changed"):
        recording.verify()
    with pytest.raises(RecordingError, match=f"expected {good[:16]}"):
        open_recording(path, verify=True)
    with pytest.raises(RecordingError, match="no SHA-512"):
        open_recording(make(tmp_path, COUNT), verify=True)


def test_integers_up_to_63_bits(tmp_path):
    last = 2**63 - 1
    path = make(tmp_path, COUNT, captures=[capture(0, global_index=last)])
    with open_recording(path) as recording:
        assert recording.segments[0].global_index == last
