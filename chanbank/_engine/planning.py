"""The one place that decides how hard FFTW plans, and keeps what it learned (its wisdom).

Plans are made when a bank is built, never in the middle of a stream. Up to 2**6 points FFTW tries
all it knows, up to 2**16 points it measures, within a time limit; the wisdom goes to the user's
cache folder, so that the next process plans at once and gets the same plans (and so the same bits).
Two environment variables change this: CHANBANK_CACHE names another folder, or "off";
CHANBANK_PLANNING=patient lets FFTW search as long as it likes: seconds, up to a minute for long
transforms that are not split (real samples, frame phase), which may become a fifth faster, in later
processes too.
"""

import contextlib
import json
import os
import sys
import tempfile
import threading
from pathlib import Path

import pyfftw

__all__ = ["effort", "planning"]

# Short transforms are searched for in a blink. Longer ones take many seconds to measure.
_PATIENT_LIMIT = 1 << 6
_MEASURE_LIMIT = 1 << 16

# Seconds that one plan may take; awkward lengths (large primes) would take far more.
_TIME_LIMIT = 3.0

_lock = threading.RLock()
_known = {}  # what the file held when it was last read or written


def effort(points):
    """How hard to plan a transform of that many points: FFTW's flag, and seconds or None."""
    if os.environ.get("CHANBANK_PLANNING", "") == "patient":
        return "FFTW_PATIENT", None
    if points <= _PATIENT_LIMIT:
        return "FFTW_PATIENT", _TIME_LIMIT
    return "FFTW_MEASURE" if points <= _MEASURE_LIMIT else "FFTW_ESTIMATE", _TIME_LIMIT


@contextlib.contextmanager
def planning():
    """Hold the planner: one plan at a time, with the wisdom read before and kept after."""
    with _lock:
        path = _wisdom_file()
        _read(path)
        yield
        _keep(path)


def _wisdom_file():
    chosen = os.environ.get("CHANBANK_CACHE", "")
    if chosen == "off":
        return None
    if chosen:
        folder = Path(chosen)
    elif sys.platform == "win32":
        folder = Path(os.environ.get("LOCALAPPDATA") or Path.home(), "chanbank")
    elif sys.platform == "darwin":
        folder = Path.home() / "Library" / "Caches" / "chanbank"
    else:
        folder = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache", "chanbank")
    return folder / f"fftw-wisdom-{pyfftw.__version__}.json"


def _read(path):
    """Import the file's wisdom if it is new to this process; a file FFTW refuses does no harm."""
    with contextlib.suppress(OSError, ValueError, TypeError, AttributeError):
        stamp = path.stat().st_mtime_ns
        if _known.get("stamp") != (path, stamp):
            _known["stamp"] = (path, stamp)
            double, single, extended = json.loads(path.read_text())
            pyfftw.import_wisdom((double.encode(), single.encode(), extended.encode()))
            _known["wisdom"] = pyfftw.export_wisdom()


def _keep(path):
    """Write the process's wisdom if it has grown; the file appears whole or not at all."""
    if path is None or pyfftw.export_wisdom() == _known.get("wisdom"):
        return
    with contextlib.suppress(OSError, ValueError):
        path.parent.mkdir(parents=True, exist_ok=True)
        _read(path)  # another process may have added to it
        wisdom = pyfftw.export_wisdom()
        handle, part = tempfile.mkstemp(dir=path.parent, prefix=path.name)
        try:
            with os.fdopen(handle, "w") as file:
                json.dump([text.decode() for text in wisdom], file)
            os.replace(part, path)
        except OSError:
            os.unlink(part)
            raise
        _known.update(stamp=(path, path.stat().st_mtime_ns), wisdom=wisdom)


# A child process must not inherit the lock in the hands of a thread it does not have.
if hasattr(os, "register_at_fork"):
    os.register_at_fork(
        before=_lock.acquire, after_in_parent=_lock.release, after_in_child=_lock.release
    )
