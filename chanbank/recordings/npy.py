""".npy files: the header parsed, the samples read block by block."""

import os

import numpy as np

from chanbank._checks import (
    Boolean,
    Choice,
    Integer,
    OwnCheck,
    PathLike,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank.recordings.datatype import Datatype
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.partfile import PartFile, refuse_place
from chanbank.recordings.recording import Contents, Recording
from chanbank.recordings.source import Extent, SampleSource

__all__ = ["NpyWriter", "open_npy"]

_HEADERS = {
    (1, 0): np.lib.format.read_array_header_1_0,
    (2, 0): np.lib.format.read_array_header_2_0,
}
_DTYPES = (
    "complex64", "complex128", "float32", "float64", "int8", "uint8", "int16", "uint16", "int32",
    "uint32",
)  # fmt: skip


def open_npy(path, request):
    """The recording in a .npy file of shape (samples,) or (streams, samples)."""
    shape, fortran, dtype, position = _header(path)
    datatype = _datatype(path, dtype)
    if request.datatype is not None and request.datatype.name != datatype.name:
        pairs = Datatype(True, datatype.kind, datatype.bits, datatype.big_endian)
        if not (datatype.integer and request.datatype.name == pairs.name):
            raise RecordingError(
                f"{path}: datatype {request.datatype.name} contradicts the file: found dtype "
                f"{dtype.str}, which is {datatype.name}"
            )
        datatype = pairs  # interleaved I/Q along the last axis, as the analysis bank takes it
    if len(shape) not in (1, 2):
        raise RecordingError(
            f"{path}: found shape {shape}, expected (samples,) or (streams, samples)"
        )
    streams = 1 if len(shape) == 1 else shape[0]
    if streams < 1:
        raise RecordingError(f"{path}: found shape {shape}, expected at least one stream")
    if request.streams not in (None, streams):
        raise RecordingError(
            f"{path}: streams={request.streams} contradicts the file: found shape {shape}"
        )
    values = shape[-1]
    if values % 2 and datatype.integer and datatype.complex:
        raise RecordingError(
            f"{path}: half a sample at the end: found {values} integers along the last axis, "
            "expected whole I/Q pairs"
        )
    if fortran and datatype.integer and datatype.complex and streams > 1:
        raise RecordingError(
            f"{path}: found interleaved I/Q in Fortran order, expected C order (I and Q of one "
            "sample side by side)"
        )
    count = values // 2 if datatype.integer and datatype.complex else values
    size, frame_bytes = os.path.getsize(path), datatype.sample_bytes * streams
    found, expected = size - position, count * frame_bytes
    truncated = found < expected
    if found != expected and not (truncated and request.allow_truncated):
        hint = "; allow_truncated=True reads the whole samples" if truncated else ""
        raise RecordingError(
            f"{path}: found {found} bytes of sample data, expected {expected} for shape {shape} "
            f"and dtype {dtype.str}{hint}"
        )
    planar = not fortran and streams > 1
    if truncated:
        if planar:
            raise RecordingError(
                f"{path}: truncated in C order: found {found} of {expected} bytes; the "
                f"{streams} streams lie one after the other, so whole streams are missing"
            )
        count = found // frame_bytes
    source = SampleSource(path, datatype, streams, [Extent(0, count, position)], planar=planar)
    return Recording(
        Contents(
            source,
            "npy",
            sample_rate=request.sample_rate,
            center_frequency=request.center_frequency,
            metadata={"shape": shape, "fortran_order": fortran, "descr": dtype.str},
            truncated=truncated,
        )
    )


def _header(path):
    with open(path, "rb") as file:
        try:
            version = np.lib.format.read_magic(file)
            if version not in _HEADERS:
                raise RecordingError(
                    f"{path}: found .npy version {version[0]}.{version[1]}, expected 1.0 or 2.0"
                )
            shape, fortran, dtype = _HEADERS[version](file)
        except RecordingError:
            raise
        except ValueError as error:
            raise RecordingError(f"{path}: not a readable .npy header: {error}") from None
        return shape, fortran, dtype, file.tell()


def _datatype(path, dtype):
    if dtype.newbyteorder("=").name not in _DTYPES or dtype.subdtype is not None:
        raise RecordingError(f"{path}: found dtype {dtype}, expected one of {', '.join(_DTYPES)}")
    complex_samples = dtype.kind == "c"
    bits = dtype.itemsize * 8 // (2 if complex_samples else 1)
    # dtype.str spells native order out: "<" or ">" ("|" for single bytes).
    kind = "f" if complex_samples else dtype.kind
    return Datatype(complex_samples, kind, bits, dtype.str[0] == ">")


class NpyWriter:
    """Write a .npy file piece by piece, without knowing its length beforehand.

    The array in the file has shape (samples,), or (streams, samples) in Fortran order, in which
    the streams are interleaved sample by sample. `numpy.load` reads it, and `open_recording`.

    Parameters
    ----------
    path : str or os.PathLike
        The file to make. It appears when the writer is closed without an error; until then the
        data are in ``path + ".part"``.
    dtype : str
        One of complex64, complex128, float32, float64, int8, uint8, int16, uint16, int32, uint32.
        Little-endian in the file.
    streams : int, default 1
        Number of rows.
    overwrite : bool, default False
        Whether a file of that name may be replaced.

    Raises
    ------
    FileExistsError, FileNotFoundError, PermissionError
        If the path is taken, or its folder missing or not writable.

    References
    ----------
    NumPy enhancement proposal 1, "A simple file format for NumPy arrays".

    Examples
    --------
    >>> import numpy as np, os, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "capture.npy")
    ...     with NpyWriter(path, "complex64", streams=2) as writer:
    ...         writer.write(np.ones((2, 3), np.complex64))
    ...         writer.write(np.zeros((2, 1), np.complex64))
    ...     print(np.load(path).shape)
    (2, 4)
    """

    @checked(path=PathLike(), dtype=Choice(*_DTYPES), streams=Integer(1), overwrite=Boolean())
    def __init__(self, path, dtype, *, streams=1, overwrite=False):
        refuse_place(path, overwrite)
        self.path = path
        self._overwrite = overwrite
        self.streams = streams
        self.samples = 0
        self._dtype = np.dtype(dtype).newbyteorder("<")
        # The header is written again at the end; room for 20 digits keeps its size.
        self._header_bytes = len(self._header(10**19))
        self._file = PartFile(path)
        self._open = True
        self._guarded(self._file.write, bytes(self._header_bytes))

    @checked(
        call=False,
        samples=OwnCheck("an array of the writer's dtype", ("samples", TypeError)),
    )
    def write(self, samples):
        """Append samples.

        Parameters
        ----------
        samples : array_like
            Of the writer's dtype; shape (samples,), with several streams (streams, samples).

        Raises
        ------
        TypeError, ValueError
            If the dtype or shape is another one, or the writer is closed.
        OSError
            If the disk is full; the part written so far is removed.

        Examples
        --------
        See the class.
        """
        if not self._open:
            raise ValueError(f"the writer of {self.path} is closed")
        samples = np.asarray(samples)
        if samples.dtype != self._dtype.newbyteorder("="):
            raise wrong_type("samples", f"an array of dtype {self._dtype.name}", samples)
        if samples.ndim != min(self.streams, 2) or (
            self.streams > 1 and samples.shape[0] != self.streams
        ):
            wanted = f"({self.streams}, samples)" if self.streams > 1 else "(samples,)"
            raise wrong_value("samples", f"an array of shape {wanted}", samples)
        data = np.ascontiguousarray(samples.T, dtype=self._dtype)
        self._guarded(self._file.write, data.reshape(-1).view("u1"))
        self.samples += samples.shape[-1]

    def close(self):
        """Finish the header and put the file in place.

        Examples
        --------
        See the class, where the end of the ``with`` block closes it.
        """
        if self._open:
            self._guarded(self._finish, self._header(self.samples))
            self._open = False

    def discard(self):
        """Remove what was written; no file appears.

        Examples
        --------
        See the class: an exception in the ``with`` block discards.
        """
        if self._open:
            self._open = False
            self._file.discard()

    def _finish(self, header):
        refuse_place(self.path, self._overwrite)
        self._file.rewrite(0, header)
        self._file.publish()

    def _guarded(self, action, *arguments):
        try:
            action(*arguments)
        except BaseException:
            self.discard()
            raise

    def _header(self, samples):
        shape = (samples,) if self.streams == 1 else (self.streams, samples)
        text = repr({"descr": self._dtype.str, "fortran_order": self.streams > 1, "shape": shape})
        room = getattr(self, "_header_bytes", -(-(len(text) + 11) // 64) * 64)
        body = text.ljust(room - 11) + "\n"
        return b"\x93NUMPY\x01\x00" + len(body).to_bytes(2, "little") + body.encode("latin1")

    def __enter__(self):
        return self

    def __exit__(self, kind, error, trace):
        if kind is None:
            self.close()
        else:
            self.discard()
