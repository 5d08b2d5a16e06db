"""Recordings: readers and writers, one file per container."""

from chanbank.recordings.errors import RecordingError
from chanbank.recordings.npy import NpyWriter
from chanbank.recordings.open import open_recording
from chanbank.recordings.recording import Recording
from chanbank.recordings.segment import Annotation, Segment
from chanbank.recordings.sigmf_write import write_sigmf
from chanbank.recordings.sigmf_writer import SigMFWriter

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
