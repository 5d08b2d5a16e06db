"""Files that grow over many calls, and appear whole or not at all."""

import contextlib
import os

from chanbank._files import refuse_existing

__all__ = ["PartFile", "part_name", "refuse_place"]


def part_name(path):
    """What the file is called until it is whole."""
    return path + ".part"


def refuse_place(path, overwrite):
    """Raise before any work where `path` is taken or cannot be written."""
    if os.path.isdir(path):
        raise IsADirectoryError(f"{path!r} is a folder; a file name is needed")
    refuse_existing(path, overwrite)
    folder = os.path.dirname(path) or "."
    if not os.path.isdir(folder):
        raise FileNotFoundError(f"{folder!r} is not a folder; create it before writing {path!r}")
    if not os.access(folder, os.W_OK | os.X_OK):
        raise PermissionError(f"{folder!r} is not writable; {path!r} cannot be created there")


class PartFile:
    """A file written beside its place under the name ``path + ".part"``.

    `publish` puts it in place in one step, `discard` removes it. A part that a crash left behind
    is overwritten by the next writer of the same path.
    """

    def __init__(self, path):
        self.path = path
        self.part = part_name(path)
        self._file = open(self.part, "wb", buffering=0)  # noqa: SIM115 (closed by publish/discard)

    def write(self, data):
        view = memoryview(data).cast("B")
        while len(view):
            view = view[self._file.write(view) :]

    def take(self, path):
        """Go on with the file `path`, which changes its name instead of being copied."""
        self._file.close()
        os.replace(path, self.part)
        self._file = open(self.part, "ab", buffering=0)  # noqa: SIM115 (closed as above)

    def rewrite(self, position, data):
        self._file.seek(position)
        self.write(data)
        self._file.seek(0, os.SEEK_END)

    def complete(self):
        """Bring everything to the disk: an error that comes late still comes before publishing."""
        if not self._file.closed:
            os.fsync(self._file.fileno())
            self._file.close()

    def publish(self):
        self.complete()
        os.replace(self.part, self.path)

    def discard(self):
        self._file.close()
        with contextlib.suppress(FileNotFoundError):
            os.remove(self.part)
