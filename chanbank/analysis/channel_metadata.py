"""What the recording of one channel says about itself: captures, annotations, the design."""

import hashlib
import importlib.metadata
import os
from fractions import Fraction

import numpy as np

from chanbank.analysis.runs import plan_at
from chanbank.recordings.timestamp import format_instant, parse_instant

__all__ = ["ChannelMetadata"]

_KEPT = ("core:author", "core:license", "core:hw", "core:geolocation", "core:data_doi")
_REPLACED = (
    "core:sample_start",
    "core:sample_count",
    "core:frequency",
    "core:datetime",
    "core:global_index",
    "core:header_bytes",
    "core:freq_lower_edge",
    "core:freq_upper_edge",
    "core:label",
    "core:comment",
)


class ChannelMetadata:
    """Metadata of the channels that a bank makes of the runs of a recording.

    Frame n of a run describes the instant

        T + (n * hop - delay - origin) / sample_rate

    T being the instant of the run's first sample, number `origin`; an annotation of samples
    a..b-1 covers the frames whose instants lie in it, at least one.
    """

    def __init__(self, recording, bank, runs, *, transients, prototype_file):
        self._recording, self._bank, self._runs = recording, bank, runs
        plan = bank.plan
        self._plans = [plan_at(plan, run.segment.center_frequency) for run in runs]
        self._frequencies = [at.frequencies for at in self._plans]
        source = recording.metadata if recording.container == "sigmf" else {}
        self._top = source.get("global", {})
        declared = self._top.get("core:extensions", [])
        self._namespaces = {"core"} | {entry["name"].split(":")[0] for entry in declared}
        self.extensions = [
            (entry["name"], entry["version"], entry["optional"])
            for entry in declared
            if entry["name"] != "chanbank"
        ] + [("chanbank", _version(), True)]
        self._notes = [note for position, _ in enumerate(runs) for note in self._notes_of(position)]
        self._design = self._design_fields(transients, prototype_file)

    def frequency(self, channel):
        """Centre of a channel in the first run, in hertz."""
        return float(self._frequencies[0][channel])

    def captures(self, channel):
        """(number of frames, keywords for `SigMFWriter.capture`) for each run."""
        plan, delay = self._bank.plan, Fraction(self._bank.delay)
        for run, frequencies in zip(self._runs, self._frequencies, strict=True):
            segment, instant = run.segment, None
            if segment.datetime is not None:
                later = run.start - segment.start + run.first_frame * plan.hop - delay - run.origin
                instant = parse_instant(segment.datetime) + later / plan.exact_sample_rate
            yield (
                run.frame_count,
                {
                    "center_frequency": float(frequencies[channel]),
                    "datetime": None if instant is None else format_instant(instant),
                    "global_index": run.first_frame,
                    "fields": {
                        **self._copied(segment.fields),
                        "chanbank:source_start": run.start,
                        "chanbank:source_length": run.length,
                    },
                },
            )

    def annotations(self, channel):
        """Keywords for `SigMFWriter.annotate` for every annotation that touches the channel."""
        plan = self._bank.plan
        half = plan.spacing / 2
        turns = (0,) if plan.real else (-plan.sample_rate, 0, plan.sample_rate)
        for position, lower, upper, keywords in self._notes:
            center = self._frequencies[position][channel]
            # The band of a complex recording closes to a circle.
            if lower is None or any(
                _overlap(lower, upper, center + turn - half, center + turn + half) for turn in turns
            ):
                yield keywords

    def fields(self, channel):
        """Entries of the global object: what made this channel."""
        kept = {key: self._top[key] for key in _KEPT if key in self._top}
        return {**kept, **self._design, "chanbank:channel": int(channel)}

    def _notes_of(self, position):
        """(run, lower, upper, keywords) for the annotations on one run, edges absolute."""
        run, plan = self._runs[position], self._bank.plan
        delay, hop = Fraction(self._bank.delay), plan.hop
        before = sum(earlier.frame_count for earlier in self._runs[:position])
        unknown = run.segment.center_frequency is None
        shift = plan.center_frequency if unknown else 0.0
        for note in self._recording.annotations:
            low = max(note.start, run.start)
            high = min(note.start + note.length, run.start + run.length)
            if low >= high:
                continue
            first, stop = (
                -int(-(run.origin + at - run.start + delay) // hop) for at in (low, high)
            )
            stop = max(stop, first + 1)
            first, stop = max(first, run.first_frame), min(stop, run.first_frame + run.frame_count)
            if first >= stop:
                continue
            edges = [
                None if edge is None else edge + shift
                for edge in (note.lower_edge, note.upper_edge)
            ]
            keywords = {
                "start": before + first - run.first_frame,
                "length": stop - first,
                "lower_edge": edges[0],
                "upper_edge": edges[1],
                "label": note.label,
                "comment": note.comment,
                "fields": self._copied(note.fields),
            }
            yield position, *edges, keywords

    def _copied(self, fields):
        return {
            key: value
            for key, value in fields.items()
            if key not in _REPLACED and key.split(":")[0] in self._namespaces
        }

    def _design_fields(self, transients, prototype_file):
        plan, prototype, recording = self._bank.plan, self._bank.prototype, self._recording
        taps = np.ascontiguousarray(prototype.taps, "<f8")
        energy, gain = float(np.sum(taps**2)), float(np.sum(taps))
        enbw = plan.sample_rate * energy / gain**2 if gain else None
        first, last = self._runs[0], self._runs[-1]
        return {
            "chanbank:channels": plan.channels,
            "chanbank:hop": plan.hop,
            "chanbank:offset": str(plan.exact_offset),
            "chanbank:spacing": plan.spacing,
            "chanbank:real": plan.real,
            "chanbank:delay": self._bank.delay,
            "chanbank:enbw": enbw,
            "chanbank:arithmetic": self._bank.dtype.name,
            "chanbank:transients": transients,
            "chanbank:prototype": {
                "file": prototype_file,
                "length": prototype.length,
                "label": prototype.label,
                "design": prototype.design,
                "sha256": hashlib.sha256(taps.tobytes()).hexdigest(),
            },
            "chanbank:source": {
                "name": os.path.basename(recording.path),
                "datatype": recording.datatype,
                "sample_rate": recording.sample_rate,
                "start": first.start,
                "length": last.start + last.length - first.start,
            },
        }


def _overlap(lower, upper, low, high):
    if lower == upper:
        return low <= lower < high
    return lower < high and upper > low


def _version():
    try:
        return importlib.metadata.version("chanbank")
    except importlib.metadata.PackageNotFoundError:
        return "0.0.0"
