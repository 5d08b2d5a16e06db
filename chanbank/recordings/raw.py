"""Raw sample files: nothing but samples, after an optional header that is skipped."""

import os

from chanbank.recordings.errors import RecordingError
from chanbank.recordings.recording import Contents, Recording
from chanbank.recordings.source import Extent, SampleSource, whole_samples

__all__ = ["open_raw"]


def open_raw(path, request):
    """The recording in a raw file whose encoding the caller states."""
    streams = request.streams or 1
    size = os.path.getsize(path)
    if size < request.header_bytes:
        raise RecordingError(
            f"{path}: found {size} bytes, expected a header of {request.header_bytes} bytes"
        )
    count = whole_samples(
        path,
        size - request.header_bytes,
        request.datatype.sample_bytes * streams,
        f"{request.datatype.name}, {streams} stream{'s' * (streams != 1)}",
        request.allow_truncated,
    )
    used = request.header_bytes + count * request.datatype.sample_bytes * streams
    source = SampleSource(path, request.datatype, streams, [Extent(0, count, request.header_bytes)])
    return Recording(
        Contents(
            source,
            "raw",
            sample_rate=request.sample_rate,
            center_frequency=request.center_frequency,
            truncated=used < size,
        )
    )
