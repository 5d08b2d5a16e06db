"""SigMF recordings: pairs of files, archives, and datasets with headers of other formats."""

import contextlib
import os
import tarfile
from dataclasses import dataclass

from chanbank.recordings.datatype import Datatype
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.recording import Contents, Recording
from chanbank.recordings.sigmf_metadata import parse_metadata
from chanbank.recordings.sigmf_segments import annotations_of, layout_of, segments_of
from chanbank.recordings.source import SampleSource

__all__ = ["is_archive", "open_archive", "open_pair"]

_META, _DATA = ".sigmf-meta", ".sigmf-data"


@dataclass(frozen=True)
class _Dataset:
    """Where the bytes of a dataset lie: a whole file, or a member of an archive."""

    path: str
    position: int
    found: int
    expected: int
    shown: str


def open_pair(path, request):
    """The recording of ``name.sigmf-meta`` and its dataset."""
    stem = path
    for suffix in (_META, _DATA):
        stem = stem.removesuffix(suffix)
    with open(stem + _META, "rb") as file:
        metadata = parse_metadata(stem + _META, file.read(), request.extensions)
    named = metadata["global"].get("core:dataset")
    data = stem + _DATA
    if named is not None:
        _plain_name(stem + _META, named)
        data = os.path.join(os.path.dirname(stem), named)
    if not os.path.isfile(data):
        if metadata["global"].get("core:metadata_only"):
            raise RecordingError(f"{stem}{_META}: says that no dataset is shipped with it")
        raise FileNotFoundError(f"{stem}{_META} describes {data}, which does not exist")
    size = os.path.getsize(data)
    return _recording(
        stem + _META, stem + _META, metadata, _Dataset(data, 0, size, size, data), request
    )


def is_archive(path):
    """Whether the file is a tar file (plain or compressed)."""
    return os.path.isfile(path) and tarfile.is_tarfile(path)


def open_archive(path, request):
    """The recording in an archive, `request.member` choosing among several."""
    members = _members(path)
    stems = [name.removesuffix(_META) for name in members if name.endswith(_META)]
    if not stems:
        raise RecordingError(f"{path}: found no {_META} file in the archive, expected one")
    if request.member is None and len(stems) > 1:
        raise RecordingError(
            f"{path}: found {len(stems)} recordings; choose one with member=: {', '.join(stems)}"
        )
    stem = stems[0] if request.member is None else request.member.removesuffix(_META)
    if stem not in stems:
        raise RecordingError(
            f"{path}: found no recording {request.member!r}, expected one of {', '.join(stems)}"
        )
    meta = members[stem + _META]
    with open(path, "rb") as file:
        file.seek(meta.offset_data)
        metadata = parse_metadata(f"{path}:{meta.name}", file.read(meta.size), request.extensions)
    named = metadata["global"].get("core:dataset")
    name = stem + _DATA
    if named is not None:
        _plain_name(f"{path}:{meta.name}", named)
        name = os.path.join(os.path.dirname(stem), named)
    if name not in members:
        raise RecordingError(f"{path}: found no dataset {name!r} beside {meta.name!r}")
    data = members[name]
    if not data.isreg() or data.issparse():
        raise RecordingError(f"{path}: {name!r} is not stored as a plain file")
    found = min(data.size, max(0, os.path.getsize(path) - data.offset_data))
    shown = f"{path}:{name}"
    if found < data.size and not request.allow_truncated:
        raise RecordingError(
            f"{shown}: truncated: found {found} bytes, expected {data.size}; "
            "allow_truncated=True reads what is there"
        )
    dataset = _Dataset(path, data.offset_data, found, data.size, shown)
    return _recording(path, f"{path}:{meta.name}", metadata, dataset, request)


def _members(path):
    try:
        with tarfile.open(path, "r:") as archive:
            # The last member may be cut short; whether that matters depends on which one it is.
            with contextlib.suppress(tarfile.ReadError):
                archive.getmembers()
            return {os.path.normpath(member.name): member for member in archive.members}
    except tarfile.ReadError as error:
        raise RecordingError(
            f"{path}: found no readable tar archive ({error}), expected an uncompressed one"
        ) from None


def _plain_name(where, name):
    if os.path.basename(name) != name or name in ("", ".", ".."):
        raise RecordingError(
            f"{where}: core:dataset is {name!r}, expected the name of a file in the same folder"
        )


def _recording(path, where, metadata, dataset, request):
    top = metadata["global"]
    datatype = Datatype.parse(top["core:datatype"])
    streams = top.get("core:num_channels", 1)
    rate = top.get("core:sample_rate")
    _agree(where, "datatype", request.datatype and request.datatype.name, datatype.name)
    _agree(where, "streams", request.streams, streams)
    _agree(where, "sample_rate", request.sample_rate, rate)
    rate = request.sample_rate if rate is None else float(rate)
    layout = layout_of(where, metadata, dataset, datatype, streams, request.allow_truncated)
    segments = segments_of(where, metadata, layout.samples, rate, request.center_frequency)
    sha512 = top.get("core:sha512")
    source = SampleSource(dataset.path, datatype, streams, layout.extents)
    return Recording(
        Contents(
            source,
            "sigmf",
            path=path,
            sample_rate=rate,
            first_sample=top.get("core:offset", 0),
            segments=tuple(segments),
            annotations=tuple(annotations_of(where, metadata, segments, layout.samples)),
            metadata=metadata,
            checksum=sha512 and (dataset.path, dataset.position, dataset.found, sha512),
            truncated=layout.truncated or dataset.found < dataset.expected,
        )
    )


def _agree(where, name, asked, found):
    if asked is not None and found is not None and asked != found:
        raise RecordingError(f"{where}: {name}={asked!r} contradicts the metadata: found {found!r}")
