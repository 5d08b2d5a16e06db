"""Writing SigMF recordings, piece by piece, whole or not at all."""

import contextlib
import hashlib
import json
import os

from chanbank._checks import (
    Boolean,
    Instance,
    Integer,
    Optional,
    OwnCheck,
    PathLike,
    Real,
    Text,
    checked,
    wrong_value,
)
from chanbank.recordings.datatype import Datatype, DatatypeRule
from chanbank.recordings.partfile import PartFile, part_name, refuse_place
from chanbank.recordings.sigmf_metadata import (
    entries,
    extension_rows,
    plain,
    schema_version,
    validate_metadata,
)
from chanbank.recordings.source import whole_samples
from chanbank.recordings.timestamp import InstantRule

__all__ = ["SigMFWriter"]

_FIELDS = Optional(Instance(dict))


class SigMFWriter:
    """Write a SigMF recording: samples piece by piece, captures and annotations as they come.

    Floats given for an integer datatype become

        clip(round(x * 2^(bits - 1)), -2^(bits - 1), 2^(bits - 1) - 1) + zero_level

    so that `open_recording` reads them back to half a step; `clipped` counts the components that
    did not fit.

    Parameters
    ----------
    path : str or os.PathLike
        Name of the recording; ``.sigmf-meta`` and ``.sigmf-data`` are appended (a suffix of that
        kind is taken off first). Both files appear when the writer is closed without an error;
        until then they are called ``....part``, and an exception removes them.
    datatype : str
        A SigMF datatype, for instance "cf32_le".
    sample_rate, center_frequency : float, optional
        In hertz. The frequency is that of the first capture.
    streams : int, default 1
        Interleaved streams (``core:num_channels``).
    datetime : str or datetime.datetime, optional
        UTC instant of the first sample.
    description, author, recorder : str, optional
        Free text.
    fields : dict, optional
        Further entries of the global object, with their namespace ("core:license",
        "receiver:gain").
    extensions : sequence of (name, version, optional), optional
        Namespaces beside ``core`` that are used.
    checksum : bool, default True
        Whether to state the SHA-512 of the samples (``core:sha512``).
    overwrite : bool, default False
        Whether a recording of that name may be replaced.

    Attributes
    ----------
    samples, clipped : int
        Samples written so far in each stream; components clipped so far.
    path, meta_path, data_path : str
        The recording's name, and its two files.

    Raises
    ------
    FileExistsError, FileNotFoundError, PermissionError
        If the name is taken, or its folder missing or not writable.
    RecordingError
        If the metadata are not valid by the standard's schema.

    References
    ----------
    SigMF specification 1.2.6.

    Examples
    --------
    >>> import numpy as np, os, tempfile
    >>> from chanbank.recordings import open_recording
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "quay")
    ...     with SigMFWriter(path, "ci16_le", sample_rate=48e3, center_frequency=156e6) as writer:
    ...         writer.write(np.full(10, 0.5 + 0.25j))
    ...         writer.capture(center_frequency=157e6)
    ...         writer.write(np.zeros(5, complex))
    ...         writer.annotate(2, 4, label="call")
    ...     with open_recording(path) as recording:
    ...         print(recording.read(9, 2), [s.center_frequency for s in recording.segments])
    [16384  8192     0     0] [156000000.0, 157000000.0]
    """

    @checked(
        path=PathLike(),
        datatype=DatatypeRule(),
        sample_rate=Optional(Real(above=0, high=1e12, unit="hertz")),
        center_frequency=Optional(Real(-1e12, 1e12, unit="hertz")),
        streams=Integer(1),
        datetime=Optional(InstantRule()),
        description=Optional(Text()),
        author=Optional(Text()),
        recorder=Optional(Text()),
        fields=_FIELDS,
        extensions=OwnCheck(
            "pairs of name and version with a flag: (name, version, optional)", (3, TypeError)
        ),
        checksum=Boolean(),
        overwrite=Boolean(),
    )
    def __init__(
        self,
        path,
        datatype,
        *,
        sample_rate=None,
        center_frequency=None,
        streams=1,
        datetime=None,
        description=None,
        author=None,
        recorder=None,
        fields=None,
        extensions=(),
        checksum=True,
        overwrite=False,
    ):
        stem = path
        for suffix in (".sigmf-meta", ".sigmf-data"):
            stem = stem.removesuffix(suffix)
        self.path = stem
        self.streams = streams
        self.samples = 0
        self.clipped = 0
        self._datatype = Datatype.parse(datatype)
        self._global = {
            "core:datatype": self._datatype.name,
            "core:version": schema_version(),
            "core:sample_rate": plain(sample_rate),
            "core:num_channels": None if streams == 1 else streams,
            "core:description": description,
            "core:author": author,
            "core:recorder": recorder,
            "core:extensions": extension_rows(extensions),
            **entries("fields", fields),
        }
        self._global = {key: value for key, value in self._global.items() if value is not None}
        self._captures, self._annotations = [], []
        self._add_capture(0, center_frequency, datetime, None, None)
        validate_metadata(self.path, self._metadata())
        self._overwrite = overwrite
        self._refuse_existing()
        self._digest = hashlib.sha512() if checksum else None
        self._file = PartFile(self.data_path)
        self._open = True

    def _refuse_existing(self):
        refuse_place(self.meta_path, self._overwrite)
        # Data without metadata, but beside a part of them, are what a crash left.
        orphan = not os.path.exists(self.meta_path) and os.path.exists(part_name(self.meta_path))
        refuse_place(self.data_path, self._overwrite or orphan)

    @property
    def meta_path(self):
        return self.path + ".sigmf-meta"

    @property
    def data_path(self):
        return self.path + ".sigmf-data"

    @checked(call=False, samples=OwnCheck("an array of samples", ("samples", TypeError)))
    def write(self, samples):
        """Append samples.

        Parameters
        ----------
        samples : array_like
            Shape (samples,), with several streams (streams, samples).

        Notes
        -----
        Complex datatypes take complex floats, real ones real floats; integer datatypes also take
        integers of exactly their own type, unscaled, complex ones interleaved I/Q along the last
        axis (what `Recording.read` returns).

        Raises
        ------
        TypeError, ValueError
            If dtype or shape do not fit, floats for an integer datatype are not finite, or the
            writer is closed.
        OSError
            If the disk is full; what was written so far is removed.

        Examples
        --------
        See the class.
        """
        if not self._open:
            raise ValueError(f"the writer of {self.path} is closed")
        stored, clipped = self._datatype.encode(samples, self.streams)
        data = memoryview(stored.reshape(-1).view("u1"))
        try:
            self._file.write(data)
        except BaseException:
            self.discard()
            raise
        if self._digest is not None:
            self._digest.update(data)
        self.samples += len(stored)
        self.clipped += clipped

    @checked(path=PathLike())
    def adopt(self, path):
        """Make a raw file of samples in this datatype the recording's data, without copying.

        The file is renamed and belongs to the writer from then on; it must lie in the same file
        system. Nothing may have been written before.

        Parameters
        ----------
        path : str or os.PathLike
            File of interleaved samples, as this writer would have written them.

        Raises
        ------
        ValueError
            If samples were written already, or the writer is closed.
        RecordingError
            If the file ends in half a sample.
        OSError
            If the file is missing or cannot be renamed.

        Examples
        --------
        >>> import numpy as np, os, tempfile
        >>> from chanbank.recordings import open_recording
        >>> with tempfile.TemporaryDirectory() as folder:
        ...     raw = os.path.join(folder, "quay.bin")
        ...     np.arange(6, dtype="<i2").tofile(raw)
        ...     with SigMFWriter(os.path.join(folder, "quay"), "ci16_le") as writer:
        ...         writer.adopt(raw)
        ...     with open_recording(os.path.join(folder, "quay")) as recording:
        ...         print(recording.read(), sorted(os.listdir(folder)))
        [0 1 2 3 4 5] ['quay.sigmf-data', 'quay.sigmf-meta']
        """
        if not self._open:
            raise ValueError(f"the writer of {self.path} is closed")
        if self.samples:
            raise ValueError(
                f"path can be adopted before anything is written; {self.samples} samples were"
            )
        sample_bytes = self._datatype.sample_bytes * self.streams
        samples = whole_samples(
            path, os.path.getsize(path), sample_bytes, self._datatype.name, False
        )
        if self._digest is not None:
            with open(path, "rb", buffering=0) as file:
                while piece := file.read(1 << 20):
                    self._digest.update(piece)
        self._file.take(path)
        self.samples = samples

    @checked(
        start=Optional(Integer(0, 2**63 - 1)),
        center_frequency=Optional(Real(-1e12, 1e12, unit="hertz")),
        datetime=Optional(InstantRule()),
        global_index=Optional(Integer(0, 2**63 - 1)),
        fields=_FIELDS,
    )
    def capture(
        self, *, start=None, center_frequency=None, datetime=None, global_index=None, fields=None
    ):
        """Start a new capture segment; nothing carries over from the last.

        It takes the place of one that starts at the same sample, such as the first, which the
        constructor described.

        Parameters
        ----------
        start : int, optional
            First sample of the segment, not before that of the last one; by default the next
            sample to be written.
        center_frequency : float, optional
            In hertz.
        datetime : str or datetime.datetime, optional
            UTC instant of the next sample.
        global_index : int, optional
            Index of the next sample in the stream that was recorded, lost samples counted.
        fields : dict, optional
            Further entries, with their namespace.

        Raises
        ------
        TypeError, ValueError
            If an argument is not what is accepted, or the writer is closed.

        Examples
        --------
        See the class.
        """
        if not self._open:
            raise ValueError(f"the writer of {self.path} is closed")
        last = self._captures[-1]["core:sample_start"]
        start = self.samples if start is None else start
        if start < last:
            raise wrong_value("start", f"{last} (the last capture's) or more", start)
        self._add_capture(start, center_frequency, datetime, global_index, fields)

    def _add_capture(self, start, frequency, datetime, global_index, fields):
        capture = {
            "core:sample_start": start,
            "core:frequency": plain(frequency),
            "core:datetime": datetime,
            "core:global_index": global_index,
            **entries("fields", fields),
        }
        if self._captures and self._captures[-1]["core:sample_start"] == start:
            self._captures.pop()
        self._captures.append({key: value for key, value in capture.items() if value is not None})

    @checked(
        start=Integer(0, 2**63 - 1),
        length=Optional(Integer(0, 2**63 - 1)),
        lower_edge=Optional(Real(-1e12, 1e12, unit="hertz")),
        upper_edge=Optional(Real(-1e12, 1e12, unit="hertz")),
        label=Optional(Text()),
        comment=Optional(Text()),
        fields=_FIELDS,
    )
    def annotate(
        self,
        start,
        length=None,
        *,
        lower_edge=None,
        upper_edge=None,
        label=None,
        comment=None,
        fields=None,
    ):
        """Add a remark on samples start..start+length-1.

        Parameters
        ----------
        start : int
            First sample.
        length : int, optional
            Number of samples; None: to the end of the capture.
        lower_edge, upper_edge : float, optional
            The band in hertz: absolute where the centre frequency is known, else relative to it.
        label, comment : str, optional
            A short and a long text.
        fields : dict, optional
            Further entries, with their namespace.

        Raises
        ------
        TypeError, ValueError
            If an argument is not what is accepted, one edge comes without the other, they are in
            the wrong order, or the writer is closed.

        Examples
        --------
        See the class.
        """
        if not self._open:
            raise ValueError(f"the writer of {self.path} is closed")
        if (lower_edge is None) != (upper_edge is None):
            raise ValueError(
                f"lower_edge and upper_edge come together; got {lower_edge} and {upper_edge}"
            )
        if lower_edge is not None and lower_edge > upper_edge:
            raise ValueError(
                f"lower_edge <= upper_edge must hold: {lower_edge} <= {upper_edge} does not"
            )
        annotation = {
            "core:sample_start": start,
            "core:sample_count": length,
            "core:freq_lower_edge": plain(lower_edge),
            "core:freq_upper_edge": plain(upper_edge),
            "core:label": label,
            "core:comment": comment,
            **entries("fields", fields),
        }
        self._annotations.append({k: v for k, v in annotation.items() if v is not None})

    def _metadata(self):
        return {
            "global": self._global,
            "captures": self._captures,
            "annotations": sorted(self._annotations, key=lambda a: a["core:sample_start"]),
        }

    def close(self):
        """Write the metadata and put both files in place.

        Raises
        ------
        RecordingError
            If the metadata are not valid by the standard's schema; nothing remains then.
        OSError
            If the disk is full; nothing remains then either.

        Examples
        --------
        See the class, where the end of the ``with`` block closes it.
        """
        if not self._open:
            return
        self._open = False
        try:
            self._finish()
        except BaseException:
            self._file.discard()
            raise

    def _finish(self):
        if self._digest is not None:
            self._global["core:sha512"] = self._digest.hexdigest()
        metadata = self._metadata()
        validate_metadata(self.meta_path, metadata)
        self._refuse_existing()
        text = json.dumps(metadata, indent=2, ensure_ascii=False, allow_nan=False)
        meta = PartFile(self.meta_path)
        try:
            meta.write(text.encode("utf-8"))
            meta.complete()
            self._file.complete()
            # Without its metadata a dataset is not a recording: the old ones go before the old
            # samples do, and the new ones come last.
            with contextlib.suppress(FileNotFoundError):
                os.remove(self.meta_path)
            self._file.publish()
            meta.publish()
        except BaseException:
            meta.discard()
            raise

    def discard(self):
        """Remove what was written; nothing appears under the recording's name.

        Examples
        --------
        See the class: an exception in the ``with`` block discards.
        """
        if self._open:
            self._open = False
            self._file.discard()

    def __enter__(self):
        return self

    def __exit__(self, kind, error, trace):
        if kind is None:
            self.close()
        else:
            self.discard()
