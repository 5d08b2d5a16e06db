"""Many growing files at once, none of them held open."""

import os

__all__ = ["PieceFiles"]


class PieceFiles:
    """One file for each of many channels, grown piece by piece.

    Each append opens its file, writes and closes it: thousands of channels need no thousands of
    open files, and no second copy of everything to be sorted by channel afterwards. Pieces should
    be large (many kilobytes) for the opening not to count.
    """

    def __init__(self, folder, datatype, streams):
        self._folder = folder
        self._datatype = datatype
        self._streams = streams

    def path(self, index):
        return os.path.join(self._folder, f"{index}.pieces")

    def append(self, index, samples):
        """Append samples of shape (streams, samples) to file number `index`."""
        samples = samples[0] if self._streams == 1 else samples
        stored, _ = self._datatype.encode(samples, self._streams)
        view = memoryview(stored.reshape(-1).view("u1"))
        with open(self.path(index), "ab", buffering=0) as file:
            while len(view):
                view = view[file.write(view) :]
