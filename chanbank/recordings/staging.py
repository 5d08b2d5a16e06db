"""A set of files that is made out of sight and then put in place.

A folder inside the destination takes everything that is being made. Nothing has its final name
before all is complete, an error removes the folder, and what a crash leaves behind is cleared by
the next call. While finished files move to their places, a list of them lies in the folder: if a
crash comes just then, the next call knows that the files on the list are its own.
"""

import contextlib
import json
import os
import shutil

from chanbank._files import refuse_existing

__all__ = ["Staging"]

_FOLDER = ".unfinished"
_LIST = "moving.json"


class Staging:
    """Make files in `folder`, then `publish` them into `destination`; a context manager.

    Raises FileExistsError on construction where one of `names` is taken in the destination,
    unless `overwrite` or an interrupted earlier call had begun to put them there.
    """

    def __init__(self, destination, names, overwrite):
        destination = os.path.abspath(destination)
        self.destination = destination
        self._publishing = False
        self.folder = os.path.join(destination, _FOLDER)
        self._names = list(names)
        if os.path.exists(destination) and not os.path.isdir(destination):
            raise NotADirectoryError(f"destination {destination!r} is a file, not a folder")
        moved = self._interrupted()
        for name in self._names:
            refuse_existing(os.path.join(destination, name), overwrite or name in moved)

    def _interrupted(self):
        """Names that an earlier call put in place before it was cut short."""
        try:
            with open(os.path.join(self.folder, _LIST), encoding="utf-8") as file:
                return set(json.load(file)) - set(os.listdir(self.folder))
        except FileNotFoundError:
            return set()

    def __enter__(self):
        self._made = _make_folders(self.destination)
        try:
            moved = self._interrupted()
            for name in moved & set(self._names):
                with contextlib.suppress(FileNotFoundError):
                    os.remove(os.path.join(self.destination, name))
            shutil.rmtree(self.folder, ignore_errors=True)
            os.mkdir(self.folder)
        except BaseException:
            self._remove_made()
            raise
        return self

    def publish(self):
        """Move every file in the folder to its place."""
        # In this order metadata follow their data: a recording is there once its metadata are.
        names = sorted(os.listdir(self.folder))
        part = os.path.join(self.folder, _LIST + ".part")
        with open(part, "w", encoding="utf-8") as file:
            json.dump(names, file)
            file.flush()
            os.fsync(file.fileno())
        os.replace(part, os.path.join(self.folder, _LIST))
        self._publishing = True
        for name in names:
            os.replace(os.path.join(self.folder, name), os.path.join(self.destination, name))

    def __exit__(self, kind, error, trace):
        if kind is None or not self._publishing:
            shutil.rmtree(self.folder, ignore_errors=True)
        if kind is not None:
            self._remove_made()

    def _remove_made(self):
        for folder in reversed(self._made):
            with contextlib.suppress(OSError):
                os.rmdir(folder)


def _make_folders(path):
    """Create `path` and what is missing above it; the folders made, outermost first."""
    missing = []
    while path and not os.path.isdir(path):
        missing.append(path)
        path = os.path.dirname(path)
    for folder in reversed(missing):
        os.mkdir(folder)
    return missing[::-1]
