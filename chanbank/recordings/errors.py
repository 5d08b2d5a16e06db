"""The error of a recording that is not what it should be."""

__all__ = ["RecordingError"]


class RecordingError(ValueError):
    """A recording is damaged, contradicts its own metadata or has no layout known here.

    The message names the file, what was found there and what was expected. A missing file is a
    `FileNotFoundError`, as everywhere else, and a wrong argument a `TypeError` or `ValueError`.

    Examples
    --------
    >>> issubclass(RecordingError, ValueError)
    True
    """
