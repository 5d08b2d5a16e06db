"""Fixtures that several rooms share."""

import os
import pathlib
import shutil
import tempfile

import pytest

_NOBODY = 65534


@pytest.fixture
def unprivileged():
    """A folder that cannot be written after `enter`, which turns the superuser into nobody."""
    folder = pathlib.Path(tempfile.mkdtemp(prefix="unprivileged-"))
    guard = _Guard(folder)
    yield guard
    guard.leave()
    folder.chmod(0o755)
    shutil.rmtree(folder)


class _Guard:
    def __init__(self, folder):
        self.folder = folder
        self._root = os.geteuid() == 0

    def enter(self):
        self.folder.chmod(0o555)
        if self._root:
            os.setresuid(_NOBODY, _NOBODY, 0)

    def leave(self):
        if self._root:
            os.setresuid(0, 0, 0)
