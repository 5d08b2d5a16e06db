"""How much to do at a time: blocks that fit the caches, slots of the DFT plans, workers' shares."""

__all__ = ["STREAM_BYTES", "WORKER_SAMPLES", "block_frames", "slot_frames"]

# Samples per execution of the DFT plan, where frames are short: enough for its full speed, and
# no more than a small push completes.
_SLOT_SAMPLES = 1 << 12
_SLOT_FRAMES = 32

# Results of this many bytes are written past the caches; smaller ones may still be in them when
# they are read.
STREAM_BYTES = 1 << 25


# Samples that are worth waking another worker for.
WORKER_SAMPLES = 1 << 16


def slot_frames(channels):
    """Frames per execution of the DFT plan."""
    return max(1, min(_SLOT_SAMPLES // channels, _SLOT_FRAMES))


def block_frames(row_bytes, cycle):
    """Frames to fold at a time.

    A quarter of the second-level cache if that holds eight frames of every residue, which a row
    of samples then serves at once. Long frames get more room, since rows that come from the third
    level must serve several frames: eight of each residue within 2 MiB, four beyond, two at worst.
    """
    small, large, limit = (size // row_bytes for size in (1 << 18, 1 << 21, 1 << 22))
    if 2 * cycle > limit:
        return max(1, small)
    wanted = min(8 * cycle, max(4 * cycle, large), limit)
    return max(1, small, wanted)
