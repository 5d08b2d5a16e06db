"""Files that appear whole or not at all."""

import contextlib
import os
import tempfile

__all__ = ["refuse_existing", "whole_file"]


def refuse_existing(path, overwrite):
    """Raise FileExistsError where `path` exists and may not be overwritten."""
    if not overwrite and os.path.lexists(path):
        raise FileExistsError(
            f"{os.fspath(path)!r} exists; give another path, or overwrite=True to replace it"
        )


@contextlib.contextmanager
def whole_file(path, *, overwrite=False):
    """A binary file to write that takes the name `path` only when the block ends without error.

    The bytes go to a temporary name in the same folder (so that the final rename cannot cross a
    file system) and are removed when anything fails, a full disk included.
    """
    refuse_existing(path, overwrite)
    folder = os.path.dirname(os.path.abspath(path))
    handle, temporary = tempfile.mkstemp(prefix=".", suffix=".part", dir=folder)
    try:
        with os.fdopen(handle, "wb") as file:
            yield file
            file.flush()
            os.fsync(file.fileno())
        # mkstemp makes the file private; a finished one follows the user's own mask.
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(temporary, 0o666 & ~mask)
        refuse_existing(path, overwrite)
        os.replace(temporary, path)
    except BaseException:
        with contextlib.suppress(FileNotFoundError):
            os.unlink(temporary)
        raise
