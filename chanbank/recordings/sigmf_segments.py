"""Captures and annotations of SigMF as byte extents, segments and remarks."""

import warnings
from dataclasses import dataclass
from fractions import Fraction
from itertools import accumulate
from types import MappingProxyType

from chanbank.recordings.errors import RecordingError
from chanbank.recordings.segment import Annotation, Segment
from chanbank.recordings.source import Extent, whole_samples
from chanbank.recordings.timestamp import parse_instant, resolution

__all__ = ["annotations_of", "layout_of", "segments_of"]


@dataclass(frozen=True)
class _Layout:
    extents: list
    samples: int
    truncated: bool


def _captures(where, metadata):
    """(first sample as this file counts, fields) for each capture, the first at sample 0."""
    offset = metadata["global"].get("core:offset", 0)
    captures = []
    for index, fields in enumerate(metadata["captures"]):
        start = fields["core:sample_start"] - offset
        if start < 0:
            raise RecordingError(
                f"{where}: capture {index} starts at sample {fields['core:sample_start']}, "
                f"expected {offset} (core:offset) or more"
            )
        captures.append((start, fields))
    if not captures or captures[0][0] > 0:
        # Samples before the first capture exist, with nothing known about them.
        captures.insert(0, (0, {}))
    return captures


def layout_of(where, metadata, dataset, datatype, streams, allow_truncated):
    """Where the samples of each capture lie, headers between them left out."""
    sample_bytes = datatype.sample_bytes * streams
    trailing = metadata["global"].get("core:trailing_bytes", 0)
    end = dataset.found - trailing
    if end < 0:
        raise RecordingError(
            f"{dataset.shown}: found {dataset.found} bytes, expected at least the {trailing} of "
            "core:trailing_bytes"
        )
    captures = _captures(where, metadata)
    starts = [start for start, _ in captures]
    headers = list(accumulate(fields.get("core:header_bytes", 0) for _, fields in captures))
    begins = [start * sample_bytes + head for start, head in zip(starts, headers, strict=True)]
    if begins[0] > end:
        raise RecordingError(
            f"{dataset.shown}: found {end} bytes, expected at least a header of {begins[0]}"
        )
    last = sum(begin < end for begin in begins[1:])  # captures beyond the end do not exist
    stop = end
    if last + 1 < len(captures):
        stop = min(end, begins[last] + (starts[last + 1] - starts[last]) * sample_bytes)
    rest = stop - begins[last]
    described = f"{datatype.name}, {streams} channel{'s' * (streams != 1)}"
    count = whole_samples(dataset.shown, rest, sample_bytes, described, allow_truncated)
    samples = starts[last] + count
    if last + 1 < len(captures):
        warnings.warn(
            f"{where}: capture {last + 1 - (len(captures) - len(metadata['captures']))} starts at "
            f"sample {starts[last + 1]}, found {samples} samples; it and later ones are ignored",
            stacklevel=6,
        )
    stops = starts[1 : last + 1] + [samples]
    extents = [
        Extent(first, until - first, dataset.position + begin)
        for first, until, begin in zip(starts, stops, begins, strict=False)
    ]
    return _Layout(extents, samples, rest % sample_bytes != 0)


def segments_of(where, metadata, samples, sample_rate, center_frequency):
    """Captures as segments; consecutive ones without a retune or a gap between them are one."""
    offset = metadata["global"].get("core:offset", 0)
    starts, previous = [], None
    for start, fields in _captures(where, metadata):
        if start and start >= samples:
            break
        _check_fields(where, start, fields, center_frequency)
        if starts and start == starts[-1][0]:
            starts.pop()  # a capture without samples
            previous = None
        if previous is None or not _continues(*previous, start, fields, offset, sample_rate):
            starts.append((start, fields))
        previous = start, fields
    stops = [start for start, _ in starts[1:]] + [samples]
    segments = []
    for (start, fields), stop in zip(starts, stops, strict=True):
        frequency = fields.get("core:frequency", center_frequency)
        segments.append(
            Segment(
                start,
                stop - start,
                sample_rate,
                None if frequency is None else float(frequency),
                fields.get("core:datetime"),
                _global_index(start, fields, offset),
                MappingProxyType(fields),
            )
        )
    return segments


def _check_fields(where, start, fields, center_frequency):
    if "core:datetime" in fields:
        try:
            parse_instant(fields["core:datetime"], "core:datetime")
        except ValueError as error:
            raise RecordingError(f"{where}: capture at sample {start}: {error}") from None
    frequency = fields.get("core:frequency")
    if None not in (frequency, center_frequency) and frequency != center_frequency:
        raise RecordingError(
            f"{where}: center_frequency={center_frequency!r} contradicts the capture at sample "
            f"{start}: found {frequency!r}"
        )


def _global_index(start, fields, offset):
    return fields.get("core:global_index", start + offset)


def _continues(start, fields, next_start, following, offset, sample_rate):
    """Whether the samples run on, at the same frequency, from one capture into the next."""
    if fields.get("core:frequency") != following.get("core:frequency"):
        return False
    if "core:global_index" in fields or "core:global_index" in following:
        indices = _global_index(start, fields, offset), _global_index(next_start, following, offset)
        return indices[1] - indices[0] == next_start - start
    if sample_rate is None or not {"core:datetime"} <= fields.keys() & following.keys():
        return True
    # Without a sample count the clock decides, as finely as it was written down.
    texts = fields["core:datetime"], following["core:datetime"]
    first, second = (parse_instant(text) for text in texts)
    expected = first + Fraction(next_start - start) / Fraction(sample_rate)
    tolerance = sum(resolution(text) for text in texts) + 1 / Fraction(sample_rate)
    return abs(second - expected) <= tolerance


def annotations_of(where, metadata, segments, samples):
    """Annotations that touch the samples found, clipped to them."""
    offset = metadata["global"].get("core:offset", 0)
    kept, beyond = [], 0
    for fields in metadata["annotations"]:
        start = fields["core:sample_start"] - offset
        length = fields.get("core:sample_count")
        if length is None:
            # Without a count it reaches to the end of its capture.
            stop = next((s.start + s.length for s in segments if start < s.start + s.length), start)
        else:
            stop = start + length
        beyond += stop > samples or (start >= samples and start > 0)
        start, stop = max(start, 0), min(stop, samples)
        if start >= samples or stop < start:
            continue
        kept.append(
            Annotation(
                start,
                stop - start,
                fields.get("core:freq_lower_edge"),
                fields.get("core:freq_upper_edge"),
                fields.get("core:label"),
                fields.get("core:comment"),
                MappingProxyType(fields),
            )
        )
    if beyond:
        warnings.warn(
            f"{where}: {beyond} annotation(s) reach beyond the {samples} samples found; clipped",
            stacklevel=5,
        )
    return kept
