"""Recordings: readers and writers, one file per container."""

from .errors import RecordingError
from .npy import NpyWriter
from .open import open_recording
from .recording import Recording
from .segment import Annotation, Segment
from .sigmf_write import write_sigmf
from .sigmf_writer import SigMFWriter

__all__ = [
    "Annotation",
    "NpyWriter",
    "Recording",
    "RecordingError",
    "Segment",
    "SigMFWriter",
    "open_recording",
    "write_sigmf",
]
