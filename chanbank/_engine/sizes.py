"""How much to do at a time: blocks that fit the caches, slots of the DFT plans, workers' shares."""

__all__ = ["STREAM_BYTES", "WORKER_SAMPLES", "block_frames", "slot_frames"]

# Samples per execution of the DFT plan, where frames are short: the stores of one slot drain while
# the next is computed, and a small push completes whole slots.
_SLOT_SAMPLES = 1 << 10

# Results of this many bytes are written past the caches; smaller ones may still be in them when
# they are read.
STREAM_BYTES = 1 << 25

# Samples that are worth waking another worker for.
WORKER_SAMPLES = 1 << 16


def slot_frames(channels):
    """Frames per execution of the DFT plan."""
    return max(1, min(_SLOT_SAMPLES // channels, 32))


def block_frames(row_bytes, cycle, channel_major):
    """Frames to fold at a time.

    Small blocks, so that the samples fetched for the next one still fit beside them in the
    second-level cache; but eight frames of every residue where they fit in 2 MiB, since up to
    eight frames share a loaded row, and four within 4 MiB where rows come from the third level.
    Channel-major results ask for more frames, since so many go side by side.
    """
    least = 1 << 18 if channel_major else 1 << 16
    small, large, limit = (size // row_bytes for size in (least, 1 << 21, 1 << 22))
    if 2 * cycle > limit:
        return max(1, small)
    return max(1, small, min(8 * cycle, max(4 * cycle, large), limit))
