"""Samples in a file: where they lie, and how a stretch of them is read.

Blocks are read with `readinto` into fresh arrays. Files are never memory-mapped: pages of a
mapped file count as the process's own memory until the kernel takes them back.
"""

from dataclasses import dataclass

from chanbank.recordings.datatype import Datatype
from chanbank.recordings.errors import RecordingError

__all__ = ["Extent", "SampleSource", "whole_samples"]


@dataclass(frozen=True)
class Extent:
    """`count` samples of the recording, from sample `first` on, that lie at byte `position`."""

    first: int
    count: int
    position: int


def whole_samples(path, found_bytes, sample_bytes, described, allow_truncated):
    """How many samples `found_bytes` hold; half a sample at the end is an error."""
    count, rest = divmod(found_bytes, sample_bytes)
    if rest and not allow_truncated:
        raise RecordingError(
            f"{path}: half a sample at the end: found {found_bytes} bytes of sample data, "
            f"expected a multiple of {sample_bytes} ({described}), {rest} left over; "
            "allow_truncated=True reads the whole samples"
        )
    return count


class SampleSource:
    """The sample data of one open file.

    `extents` follow each other without a gap in sample numbers. Streams are interleaved sample
    by sample, or `planar`: one whole stream after the other in a single extent.
    """

    def __init__(self, path, datatype: Datatype, streams, extents, *, planar=False):
        self.path = path
        self.datatype = datatype
        self.streams = streams
        self.extents = tuple(extents)
        self.planar = planar and streams > 1
        self.samples = sum(extent.count for extent in self.extents)
        # Unbuffered: blocks are large, and a second copy in Python's buffer helps nobody.
        self._file = open(path, "rb", buffering=0)  # noqa: SIM115 (closed by close)

    @property
    def closed(self):
        return self._file.closed

    def close(self):
        self._file.close()

    def read(self, start, count, as_float=None):
        """Samples start..start+count-1, all of which exist."""
        if self.planar:
            stored = self.datatype.buffer(count * self.streams, 1)
            stored = stored.reshape(self.streams, count, self.datatype.components)
            (extent,) = self.extents
            for stream in range(self.streams):
                index = stream * extent.count + start
                self._fill(stored[stream], extent.position + index * self.datatype.sample_bytes)
            # Seen as one long stream, the planes come out in order.
            decoded = self.datatype.decode(
                stored.reshape(-1, 1, self.datatype.components), as_float
            )
            return decoded.reshape(self.streams, -1)
        stored = self.datatype.buffer(count, self.streams)
        frame_bytes = self.datatype.sample_bytes * self.streams
        for extent in self.extents:
            low = max(start, extent.first)
            high = min(start + count, extent.first + extent.count)
            if low < high:
                place = extent.position + (low - extent.first) * frame_bytes
                self._fill(stored[low - start : high - start], place)
        return self.datatype.decode(stored, as_float)

    def _fill(self, array, position):
        if array.size == 0:
            return
        view = memoryview(array.reshape(-1).view("u1"))
        self._file.seek(position)
        done = 0
        while done < len(view):
            got = self._file.readinto(view[done:])
            if not got:
                raise RecordingError(
                    f"{self.path}: truncated while reading: found {position + done} bytes, "
                    f"expected at least {position + len(view)}"
                )
            done += got
