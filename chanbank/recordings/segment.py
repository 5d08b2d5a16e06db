"""What is known about stretches of samples: segments and annotations."""

from dataclasses import dataclass, field
from types import MappingProxyType

__all__ = ["Annotation", "Segment"]


@dataclass(frozen=True)
class Segment:
    """A stretch of samples without a retune or a gap.

    Attributes
    ----------
    start, length : int
        First sample, as `Recording.read` counts, and number of samples.
    sample_rate, center_frequency : float or None
        In hertz; None where nothing is known.
    datetime : str or None
        UTC instant of the first sample, with every digit the file gives.
    global_index : int
        Index of the first sample in the stream that was recorded: samples lost before this
        segment are counted.
    fields : mapping
        The capture's entries as they stand in the metadata.

    Examples
    --------
    See `Recording.segments`.
    """

    start: int
    length: int
    sample_rate: float | None = None
    center_frequency: float | None = None
    datetime: str | None = None
    global_index: int = 0
    fields: MappingProxyType = field(default_factory=lambda: MappingProxyType({}), repr=False)


@dataclass(frozen=True)
class Annotation:
    """A remark on a stretch of samples, and on a band where edges are given.

    Attributes
    ----------
    start, length : int
        First sample, as `Recording.read` counts, and number of samples.
    lower_edge, upper_edge : float or None
        In hertz: absolute where the centre frequency is known, else relative to the centre.
    label, comment : str or None
        The texts.
    fields : mapping
        The annotation's entries as they stand in the metadata.

    Examples
    --------
    See `Recording.annotations`.
    """

    start: int
    length: int
    lower_edge: float | None = None
    upper_edge: float | None = None
    label: str | None = None
    comment: str | None = None
    fields: MappingProxyType = field(default_factory=lambda: MappingProxyType({}), repr=False)
