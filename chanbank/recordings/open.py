"""Which container a path holds, and the recording in it."""

import os
from types import SimpleNamespace

from chanbank._checks import (
    Boolean,
    Integer,
    Optional,
    OwnCheck,
    PathLike,
    Real,
    Text,
    checked,
    wrong_type,
)
from chanbank.recordings.datatype import Datatype, DatatypeRule
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.npy import open_npy
from chanbank.recordings.raw import open_raw
from chanbank.recordings.sigmf_reader import is_archive, open_archive, open_pair
from chanbank.recordings.wav import is_wav, open_wav

__all__ = ["open_recording"]


@checked(
    path=PathLike(),
    datatype=Optional(DatatypeRule()),
    sample_rate=Optional(Real(above=0, unit="hertz")),
    center_frequency=Optional(Real(unit="hertz")),
    streams=Optional(Integer(1)),
    header_bytes=Integer(0),
    member=Optional(Text()),
    extensions=OwnCheck("a sequence of extension names", (3, TypeError), ("x", TypeError)),
    allow_truncated=Boolean(),
    verify=Boolean(),
)
def open_recording(
    path,
    *,
    datatype=None,
    sample_rate=None,
    center_frequency=None,
    streams=None,
    header_bytes=0,
    member=None,
    extensions=(),
    allow_truncated=False,
    verify=False,
):
    """Open a recording to read it in blocks.

    Sample n of stream s lies in a raw or SigMF file at byte

        header + (n * streams + s) * (bytes per sample)

    with bytes per sample 2 * bits / 8 for complex and bits / 8 for real samples. Containers are
    told apart by the file's name, then by its first bytes:

    ============================  ==========================================================
    container                     what it holds
    ============================  ==========================================================
    ``.sigmf-meta, .sigmf-data``  a SigMF pair (either name, or the name without suffix);
                                  header and trailing bytes, several captures, annotations
    ``.sigmf`` (tar)              a SigMF archive
    ``.wav``, RF64, BW64          two channels are I/Q, one is real; PCM of 8 (unsigned), 16,
                                  24 and 32 bits, float of 32 and 64
    ``.npy``                      shape (samples,) or (streams, samples)
    anything else                 raw samples; `datatype` is needed
    ============================  ==========================================================

    Parameters
    ----------
    path : str or os.PathLike
        The file.
    datatype : str, optional
        Encoding of raw samples in the grammar of SigMF, for instance "ci16_le". For an integer
        .npy file the complex name of its dtype says that I and Q are interleaved. Elsewhere it
        must agree with what the file says.
    sample_rate, center_frequency : float, optional
        In hertz, where the file does not say; otherwise they must agree with it.
    streams : int, optional
        Interleaved streams (antennas, polarisations) of a raw file, default 1; for WAV files of
        other than one or two channels it says how to group them.
    header_bytes : int, default 0
        Bytes to skip at the start of a raw file.
    member : str, optional
        Which recording of an archive that holds several.
    extensions : sequence of str, optional
        SigMF extensions that the caller takes care of; others that are declared as not optional
        are an error.
    allow_truncated : bool, default False
        Accept an end that is cut off, and read the whole samples that are there.
    verify : bool, default False
        Compare the SHA-512 of the data with the metadata at once (`Recording.verify`).

    Returns
    -------
    Recording
        Open; a context manager.

    Raises
    ------
    FileNotFoundError
        If a file is missing.
    RecordingError
        A ValueError: the recording is truncated, has half a sample at its end, contradicts its
        metadata or the arguments, names an unknown datatype, or is not valid by the schema.
    TypeError, ValueError
        If an argument is not what is accepted.

    Notes
    -----
    Captures of SigMF that follow each other at one frequency, without a jump of
    ``core:global_index`` (or, where none is given, of ``core:datetime``), are one segment.
    Captures and annotations beyond the samples found are left out with a warning, as the
    standard asks.

    References
    ----------
    SigMF specification 1.2.6. EBU Tech 3306 (RF64) and Recommendation ITU-R BS.2088 (BW64) for
    the 64-bit sizes. NumPy enhancement proposal 1 for .npy.

    Examples
    --------
    >>> import numpy as np, os, tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "capture.bin")
    ...     np.zeros(8, np.complex64).tofile(path)
    ...     with open_recording(path, datatype="cf32_le", sample_rate=48e3) as recording:
    ...         print(recording.shape, recording.read(2, 3).dtype, recording.duration)
    (8,) complex64 0.00016666666666666666
    """
    if isinstance(extensions, str) or not isinstance(extensions, (list, tuple, set, frozenset)):
        raise wrong_type("extensions", "a sequence of extension names", extensions)
    request = SimpleNamespace(
        datatype=None if datatype is None else Datatype.parse(datatype),
        sample_rate=sample_rate,
        center_frequency=center_frequency,
        streams=streams,
        header_bytes=header_bytes,
        member=member,
        extensions=tuple(extensions),
        allow_truncated=allow_truncated,
    )
    container, opener = _container(path, request)
    for name, unused, home in (
        ("header_bytes", header_bytes == 0, "raw"),
        ("member", member is None, "archive"),
    ):
        if not unused and container != home:
            raise ValueError(f"{name} is for {home} files; {path} is opened as {container}")
    recording = opener(path, request)
    if verify:
        try:
            recording.verify()
        except BaseException:
            recording.close()
            raise
    return recording


def _container(path, request):
    suffix = os.path.splitext(path)[1].lower()
    if suffix in (".sigmf-meta", ".sigmf-data"):
        return "pair", open_pair
    if suffix == ".sigmf-collection":
        raise RecordingError(f"{path} is a collection; open one of the recordings it names")
    if not os.path.exists(path) and os.path.isfile(path + ".sigmf-meta"):
        return "pair", open_pair
    if suffix == ".sigmf" or (suffix == ".tar" and is_archive(path)):
        return "archive", open_archive
    with open(path, "rb") as file:
        start = file.read(12)
    if suffix in (".wav", ".wave", ".rf64", ".bw64") or request.datatype is None:
        if is_wav(start):
            return "wav", open_wav
        if suffix in (".wav", ".wave", ".rf64", ".bw64"):
            raise RecordingError(
                f"{path}: found {start[:4]!r} at the start, expected RIFF, RF64 or BW64 and WAVE"
            )
    if suffix == ".npy" or (request.datatype is None and start.startswith(b"\x93NUMPY")):
        return "npy", open_npy
    if request.datatype is None:
        raise ValueError(
            f"datatype must be given for {path}, which is no SigMF, WAV or .npy file: "
            + DatatypeRule.accepted
        )
    return "raw", open_raw
