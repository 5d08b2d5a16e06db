"""The recording: samples in blocks, with what is known about them."""

import copy
import hashlib
from dataclasses import dataclass, field

from chanbank._checks import Choice, Instance, Integer, Optional, checked, wrong_value
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.segment import Segment
from chanbank.recordings.source import SampleSource

__all__ = ["Contents", "Recording"]

_MILLION = 1 << 20


@dataclass(frozen=True)
class Contents:
    """What a container's reader found, for `Recording` to show."""

    source: SampleSource
    container: str
    path: str | None = None
    sample_rate: float | None = None
    center_frequency: float | None = None
    first_sample: int = 0
    segments: tuple = ()
    annotations: tuple = ()
    metadata: dict = field(default_factory=dict)
    checksum: tuple | None = None  # file, position, size, expected SHA-512
    truncated: bool = False


class Recording:
    """Samples of a file, read in blocks; made by `open_recording`.

    A component c of an integer sample stands for

        (c - zero_level) / 2^(bits - 1)

    with zero level 0 for two's complement and 2^(bits - 1) for unsigned integers: full scale is
    1.0. What `read` returns is what an analysis bank takes without a full-size copy:

    ==========================  =========================================================
    stored as                   returned as
    ==========================  =========================================================
    f32, f64                    complex64, complex128; real: float32, float64
    i8, u8, i16                 int8, uint8, int16, native byte order, unscaled; complex
                                samples interleaved I/Q: a last axis of 2 * samples
    u16, i24                    complex64 or float32, full scale 1.0, every value exact
    i32, u32                    complex128 or float64, full scale 1.0, every value exact
    ==========================  =========================================================

    Parameters
    ----------
    contents : object
        What `open_recording` found in the file.

    Attributes
    ----------
    path, container : str
        The file, and "raw", "sigmf", "wav" or "npy".
    datatype : str
        The encoding, for instance "ci16_le".
    complex : bool
        Whether the samples are complex.
    streams, samples : int
        Interleaved streams (antennas, polarisations), and samples in each of them.
    shape : tuple
        (samples,) or, with several streams, (streams, samples).
    sample_rate, center_frequency : float or None
        In hertz, of the first segment; None where nothing is known.
    duration : float or None
        In seconds.
    first_sample : int
        The index that the metadata gives the first sample of this file (SigMF ``core:offset``);
        `read` counts from the file's first sample, number 0, all the same.
    segments : tuple of Segment
        Stretches without a retune or a gap, in order, without overlap.
    annotations : tuple of Annotation
        Clipped to the samples that exist.
    metadata : dict
        A copy of all that the container says, in its own words.
    truncated : bool
        Whether an incomplete end was accepted.
    closed : bool
        Whether it is closed.

    Examples
    --------
    See `open_recording`.
    """

    @checked(contents=Instance(Contents))
    def __init__(self, contents):
        source = contents.source
        self._source = source
        self._checksum = contents.checksum
        self._metadata = contents.metadata
        self.path = contents.path or source.path
        self.container = contents.container
        self.datatype = source.datatype.name
        self.complex = source.datatype.complex
        self.streams = source.streams
        self.samples = source.samples
        self.sample_rate = contents.sample_rate
        self.first_sample = contents.first_sample
        whole = Segment(0, self.samples, contents.sample_rate, contents.center_frequency)
        self.segments = contents.segments or (whole,)
        self.annotations = contents.annotations
        self.truncated = contents.truncated

    @property
    def shape(self):
        return (self.samples,) if self.streams == 1 else (self.streams, self.samples)

    @property
    def center_frequency(self):
        return self.segments[0].center_frequency

    @property
    def duration(self):
        return None if self.sample_rate is None else self.samples / self.sample_rate

    @property
    def metadata(self):
        return copy.deepcopy(self._metadata)

    @property
    def closed(self):
        return self._source.closed

    @checked(
        start=Integer(0), count=Optional(Integer(0)), as_float=Optional(Choice("single", "double"))
    )
    def read(self, start=0, count=None, *, as_float=None):
        """Samples start, start + 1, ..., start + count - 1 of every stream.

        Parameters
        ----------
        start : int, default 0
            First sample, 0 for the first of the file.
        count : int, optional
            Number of samples; None reads to the end.
        as_float : {"single", "double"}, optional
            Return floats (complex64 or float32, complex128 or float64), integers scaled to
            full scale 1.0. By default small integers come unscaled (see `Recording`).

        Returns
        -------
        numpy.ndarray
            Shape (samples,), or (streams, samples) with several streams; unscaled complex
            integers have 2 * samples along the last axis, I before Q. A fresh array.

        Raises
        ------
        ValueError
            If the stretch reaches beyond the end, or the recording is closed.
        RecordingError
            If the file ends early.

        Notes
        -----
        Segments are not looked at: a stretch may run across a retune.

        References
        ----------
        SigMF specification 1.2, "Dataset format", for the order of streams and components. The
        zero level of unsigned integers is common practice; the standard states none.

        Examples
        --------
        >>> import numpy as np, os, tempfile
        >>> from chanbank.recordings import open_recording
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = os.path.join(folder, "capture.bin")
        ...     np.array([16384, -16384, 0, 32767], "<i2").tofile(path)
        ...     with open_recording(path, datatype="ci16_le") as recording:
        ...         print(recording.shape, recording.read())
        ...         print(recording.read(0, 1, as_float="single"))
        (2,) [ 16384 -16384      0  32767]
        [0.5-0.5j]
        """
        count = self._stretch(start, count)
        return self._source.read(start, count, as_float)

    @checked(
        size=Integer(1),
        start=Integer(0),
        count=Optional(Integer(0)),
        as_float=Optional(Choice("single", "double")),
    )
    def blocks(self, size=_MILLION, *, start=0, count=None, as_float=None):
        """Consecutive blocks of at most `size` samples.

        A block never reaches from one segment into the next, so that no block holds a retune or
        a gap; the blocks of one segment come from ``blocks(size, start=segment.start,
        count=segment.length)``.

        Parameters
        ----------
        size : int, default 2^20
            Samples in a block, for each stream.
        start, count : int, optional
            The stretch to read, by default all.
        as_float : {"single", "double"}, optional
            As in `read`.

        Yields
        ------
        numpy.ndarray
            As `read` returns them.

        Raises
        ------
        ValueError
            If the stretch reaches beyond the end, or the recording is closed.
        RecordingError
            If the file ends early.

        References
        ----------
        SigMF specification 1.2, "Captures": a segment's parameters hold until the next one.

        Examples
        --------
        >>> import numpy as np, os, tempfile
        >>> from chanbank.recordings import open_recording
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = os.path.join(folder, "capture.npy")
        ...     np.save(path, np.arange(5, dtype=np.int8))
        ...     with open_recording(path) as recording:
        ...         print([block.tolist() for block in recording.blocks(2)])
        [[0, 1], [2, 3], [4]]
        """
        count = self._stretch(start, count)
        return self._blocks(size, start, start + count, as_float)

    def _blocks(self, size, start, stop, as_float):
        for segment in self.segments:
            at = max(start, segment.start)
            end = min(stop, segment.start + segment.length)
            while at < end:
                step = min(size, end - at)
                yield self._source.read(at, step, as_float)
                at += step

    def _stretch(self, start, count):
        if self.closed:
            raise ValueError(f"{self.path} is closed; open_recording opens it again")
        if start > self.samples:
            raise wrong_value("start", f"an integer from 0 to {self.samples}", start)
        if count is None:
            return self.samples - start
        if start + count > self.samples:
            raise ValueError(
                f"start + count <= samples must hold: {start} + {count} <= {self.samples} does not"
            )
        return count

    @checked()
    def verify(self):
        """Compare the SHA-512 of the sample data with the one that the metadata states.

        Raises
        ------
        RecordingError
            If they differ, or the metadata state none.

        References
        ----------
        SigMF specification 1.2, ``core:sha512``; FIPS 180-4.

        Examples
        --------
        >>> import numpy as np, os, tempfile
        >>> from chanbank.recordings import open_recording, write_sigmf
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     path = os.path.join(folder, "quay")
        ...     write_sigmf(path, np.arange(5, dtype=np.int8))
        ...     with open_recording(path) as recording:
        ...         recording.verify()
        """
        if self._checksum is None:
            raise RecordingError(f"{self.path}: no SHA-512 to verify the samples against")
        path, position, size, expected = self._checksum
        digest = hashlib.sha512()
        with open(path, "rb", buffering=0) as file:
            file.seek(position)
            while size and (piece := file.read(min(size, _MILLION))):
                digest.update(piece)
                size -= len(piece)
        if digest.hexdigest() != expected.lower():
            raise RecordingError(
                f"{self.path}: the sample data changed: found SHA-512 "
                f"{digest.hexdigest()[:16]}..., expected {expected[:16].lower()}..."
            )

    def close(self):
        """Close the file; reading afterwards is an error, closing again is not.

        Examples
        --------
        See `open_recording`, which closes it at the end of a ``with`` block.
        """
        self._source.close()

    def __enter__(self):
        return self

    def __exit__(self, *exception):
        self.close()

    def __repr__(self):
        rate = "unknown rate" if self.sample_rate is None else f"{self.sample_rate:.12g} Hz"
        center = self.center_frequency
        place = "" if center is None else f" at {center:.12g} Hz"
        streams = "" if self.streams == 1 else f"{self.streams} streams of "
        return (
            f"<Recording {self.path!r}: {streams}{self.samples} {self.datatype} samples, "
            f"{rate}{place}, {len(self.segments)} segment{'s' * (len(self.segments) != 1)}>"
        )
