"""WAV files, and RF64 and BW64 files beyond 4 GiB.

The chunks are walked by their sizes, whatever their order. A size of 0xFFFFFFFF refers to the
``ds64`` chunk; where there is none the recorder never finished, and the rest of the file counts.
"""

import os
import struct
import warnings
from types import SimpleNamespace

from chanbank.recordings.datatype import Datatype
from chanbank.recordings.errors import RecordingError
from chanbank.recordings.recording import Contents, Recording
from chanbank.recordings.source import Extent, SampleSource, whole_samples

__all__ = ["is_wav", "open_wav"]

_UNKNOWN = 0xFFFFFFFF
_PCM, _FLOAT, _EXTENSIBLE = 1, 3, 0xFFFE
# The sub-format of WAVE_FORMAT_EXTENSIBLE: the format code in two bytes, then this.
_GUID_TAIL = bytes.fromhex("000000001000800000aa00389b71")


def is_wav(start):
    """Whether the first 12 bytes of a file are those of a WAV, RF64 or BW64 file."""
    return start[:4] in (b"RIFF", b"RF64", b"BW64") and start[8:12] == b"WAVE"


def open_wav(path, request):
    """The recording in a WAV, RF64 or BW64 file: two channels are I/Q, one is real."""
    chunks = _walk(path)
    if chunks.format is None:
        raise RecordingError(f"{path}: found no 'fmt ' chunk before the data, expected one")
    if chunks.position is None:
        raise RecordingError(f"{path}: found no 'data' chunk, expected one")
    component, channels, block_align = _component(path, chunks.format)
    datatype, streams = _streams(path, component, channels, request)
    rate = float(struct.unpack_from("<I", chunks.format, 4)[0])
    if request.sample_rate not in (None, rate):
        raise RecordingError(
            f"{path}: sample_rate={request.sample_rate:.12g} contradicts the file: "
            f"found {rate:.12g} Hz"
        )
    count, truncated = _count(path, chunks, block_align, datatype, request.allow_truncated)
    source = SampleSource(path, datatype, streams, [Extent(0, count, chunks.position)])
    return Recording(
        Contents(
            source,
            "wav",
            sample_rate=rate,
            center_frequency=request.center_frequency,
            metadata={"form": chunks.form, "chunks": chunks.seen, "channels": channels},
            truncated=truncated,
        )
    )


def _walk(path):
    found = SimpleNamespace(
        form=None, format=None, fact=None, position=None, data_bytes=None, ds64=None, seen=[]
    )
    size = os.path.getsize(path)
    with open(path, "rb") as file:
        start = file.read(12)
        found.form = start[:4].decode("latin1")
        outer = struct.unpack("<I", start[4:8])[0]
        while len(head := file.read(8)) == 8:
            name, length = head[:4], struct.unpack("<I", head[4:])[0]
            at = file.tell()
            found.seen.append(name.decode("latin1"))
            if name == b"ds64" and found.form != "RIFF":
                found.ds64 = _ds64(path, file.read(length))
            elif name == b"fmt ":
                found.format = file.read(length)
            elif name == b"fact" and length >= 4:
                found.fact = struct.unpack("<I", file.read(4))[0]
            elif name == b"data":
                found.position = at
                length = _data_length(path, found, length, outer, size - at)
                found.data_bytes = length
                if found.format is not None:
                    break
            elif found.ds64 is not None and length == _UNKNOWN:
                length = found.ds64["table"].get(name, length)
            file.seek(at + length + length % 2)
    if found.form != "RIFF" and found.ds64 is None:
        raise RecordingError(
            f"{path}: found no 'ds64' chunk in this {found.form} file, expected one"
        )
    return found


def _data_length(path, found, length, outer, rest):
    if length == _UNKNOWN and found.ds64 is not None:
        return found.ds64["data"]
    unfinished = length == _UNKNOWN or (length == 0 and outer in (0, _UNKNOWN))
    if unfinished and rest:
        warnings.warn(
            f"{path}: the size of the sample data was never filled in; the {rest} bytes to the "
            "end of the file are taken",
            stacklevel=5,
        )
        return rest
    return length


def _ds64(path, body):
    if len(body) < 28:
        raise RecordingError(f"{path}: found a 'ds64' chunk of {len(body)} bytes, expected 28")
    _, data, samples, entries = struct.unpack_from("<QQQI", body)
    table = {}
    for index in range(min(entries, (len(body) - 28) // 12)):
        name, length = struct.unpack_from("<4sQ", body, 28 + 12 * index)
        table[name] = length
    return {"data": data, "samples": samples, "table": table}


def _component(path, body):
    if len(body) < 16:
        raise RecordingError(f"{path}: found a 'fmt ' chunk of {len(body)} bytes, expected 16")
    code, channels, _, _, block_align, bits = struct.unpack_from("<HHIIHH", body)
    if code == _EXTENSIBLE:
        if len(body) < 40 or body[26:40] != _GUID_TAIL:
            raise RecordingError(
                f"{path}: found an extensible format without a PCM or float sub-format"
            )
        code = struct.unpack_from("<H", body, 24)[0]
    # Fewer valid bits (20 in a container of 24) sit at the top, so the container counts.
    kind = {(_PCM, 8): "u", (_PCM, 16): "i", (_PCM, 24): "i", (_PCM, 32): "i"}
    kind |= {(_FLOAT, 32): "f", (_FLOAT, 64): "f"}
    container = block_align * 8 // channels if channels else 0
    if (code, container) not in kind or not 0 < bits <= container:
        raise RecordingError(
            f"{path}: found format code {code} with {bits} bits in {block_align} bytes for "
            f"{channels} channels, expected PCM (1) of 8, 16, 24 or 32 bits or float (3) of 32 "
            "or 64"
        )
    if block_align != channels * (container // 8):
        raise RecordingError(
            f"{path}: found {block_align} bytes for each sample of {channels} channels, expected "
            f"{channels * (container // 8)}"
        )
    return Datatype(False, kind[code, container], container), channels, block_align


def _streams(path, component, channels, request):
    streams = request.streams
    pairs = channels == 2 * streams if streams is not None else channels == 2
    if not pairs and channels != (streams or 1):
        hint = "" if streams else "; pass streams= to say what they are"
        expected = f"{streams} (real) or {2 * streams} (I/Q)" if streams else "1 (real) or 2 (I/Q)"
        raise RecordingError(f"{path}: found {channels} channels, expected {expected}{hint}")
    datatype = Datatype(pairs, component.kind, component.bits)
    if request.datatype is not None and request.datatype.name != datatype.name:
        raise RecordingError(
            f"{path}: datatype {request.datatype.name} contradicts the file: found {datatype.name}"
        )
    return datatype, channels // datatype.components


def _count(path, chunks, block_align, datatype, allow_truncated):
    there = os.path.getsize(path) - chunks.position
    truncated = there < chunks.data_bytes
    if truncated and not allow_truncated:
        raise RecordingError(
            f"{path}: truncated: found {there} bytes of sample data, expected {chunks.data_bytes}; "
            "allow_truncated=True reads what is there"
        )
    available = min(there, chunks.data_bytes)
    count = whole_samples(path, available, block_align, datatype.name, allow_truncated)
    if truncated or count * block_align < available:
        return count, True
    # BW64 keeps a dummy in this place, and fact counts both frames and values are in use.
    stated = chunks.ds64["samples"] if chunks.ds64 and chunks.form == "RF64" else 0
    if stated and stated != count:
        raise RecordingError(
            f"{path}: found {count} samples in the data chunk, expected {stated} by its ds64 chunk"
        )
    channels = block_align // datatype.component_bytes
    if chunks.form == "RIFF" and chunks.fact not in (None, 0, _UNKNOWN, count, count * channels):
        raise RecordingError(
            f"{path}: found {count} samples in the data chunk, expected {chunks.fact} by its fact "
            "chunk"
        )
    return count, False
