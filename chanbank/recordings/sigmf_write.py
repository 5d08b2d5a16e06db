"""An array as a SigMF recording, in one call."""

import numpy as np

from chanbank._checks import (
    Boolean,
    Optional,
    OwnCheck,
    PathLike,
    Real,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank.recordings.datatype import Datatype, DatatypeRule
from chanbank.recordings.sigmf_writer import SigMFWriter
from chanbank.recordings.timestamp import InstantRule

__all__ = ["write_sigmf"]


@checked(
    path=PathLike(),
    samples=OwnCheck("an array of samples", ("samples", TypeError)),
    sample_rate=Optional(Real(above=0, high=1e12, unit="hertz")),
    center_frequency=Optional(Real(-1e12, 1e12, unit="hertz")),
    datatype=Optional(DatatypeRule()),
    datetime=Optional(InstantRule()),
    overwrite=Boolean(),
)
def write_sigmf(
    path,
    samples,
    *,
    sample_rate=None,
    center_frequency=None,
    datatype=None,
    datetime=None,
    overwrite=False,
):
    """Write an array as a SigMF recording in one call: `SigMFWriter` opened, fed and closed.

    Sample n of stream s is ``samples[s, n]``, or ``samples[n]`` for one stream.

    Parameters
    ----------
    path : str or os.PathLike
        Name of the recording.
    samples : array_like
        Shape (samples,) or (streams, samples).
    sample_rate, center_frequency : float, optional
        In hertz.
    datatype : str, optional
        By default that of the array's dtype, little-endian: complex64 is "cf32_le", int16
        "ri16_le" (pass "ci16_le" for interleaved I/Q).
    datetime : str or datetime.datetime, optional
        UTC instant of the first sample.
    overwrite : bool, default False
        Whether a recording of that name may be replaced.

    Raises
    ------
    TypeError, ValueError, RecordingError, OSError
        As `SigMFWriter` does.

    References
    ----------
    SigMF specification 1.2.6.

    Examples
    --------
    >>> import numpy as np, os, tempfile
    >>> from chanbank.recordings import open_recording
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = os.path.join(folder, "quay")
    ...     write_sigmf(path, np.ones(4, np.complex64), sample_rate=48e3)
    ...     with open_recording(path) as recording:
    ...         print(recording.datatype, recording.samples)
    cf32_le 4
    """
    samples = np.asarray(samples)
    if datatype is None:
        kind, size = samples.dtype.kind, samples.dtype.itemsize
        datatype = f"r{kind}{8 * size}" if kind != "c" else f"cf{4 * size}"
        datatype += "_le" if size > 1 else ""
        if Datatype.parse(datatype) is None:
            raise wrong_type("samples", "an array of a dtype that SigMF knows", samples)
    if samples.ndim not in (1, 2) or samples.shape[:-1] == (0,):
        raise wrong_value("samples", "an array of shape (samples,) or (streams, samples)", samples)
    streams = 1 if samples.ndim == 1 else len(samples)
    with SigMFWriter(
        path,
        datatype,
        sample_rate=sample_rate,
        center_frequency=center_frequency,
        streams=streams,
        datetime=datetime,
        overwrite=overwrite,
    ) as writer:
        writer.write(samples.reshape(-1) if streams == 1 else samples)
