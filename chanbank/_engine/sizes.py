"""How much to do at a time: blocks that fit the caches, slots of the DFT plans, workers' shares."""

__all__ = [
    "STREAM_BYTES",
    "WORKER_SAMPLES",
    "block_frames",
    "frames_together",
    "gather_frames",
    "slot_frames",
    "split_radix",
    "tile_bytes",
]

# Samples per execution of the DFT plan, where frames are short: the stores of one slot drain while
# the next is computed, the two bursts around it fetch as many samples (see `fetch_lines`), and a
# small push completes whole slots.
_SLOT_SAMPLES = 1 << 9

# Results of this many bytes are written past the caches; smaller ones may still be in them when
# they are read.
STREAM_BYTES = 1 << 25

# DFTs on rows of this size gain by being split.
_SPLIT_BYTES = 1 << 16

# Bytes of rows that stay in any first-level cache, beside taps and sums, while eight or more frames
# are folded from them.
_NEAR_BYTES = 16 << 10

# Rows of long DFTs come from the third level or from memory, which deliver long runs best.
_LONG_TILE_BYTES = 1 << 13

# Samples that are worth waking another worker for.
WORKER_SAMPLES = 1 << 16


def slot_frames(channels):
    """Frames per execution of the DFT plan."""
    return max(1, min(_SLOT_SAMPLES // channels, 32))


def split_radix(channels, row_bytes):
    """Pieces to split a DFT into: 1 while a row and its result fit well into the caches."""
    if row_bytes < _SPLIT_BYTES:
        return 1
    radix = 8 if row_bytes < 8 * _SPLIT_BYTES else 16
    return radix if channels % (8 * radix) == 0 else 1  # pieces of whole vectors


def block_frames(row_bytes, cycle, rows):
    """Frames to fold at a time, each from `rows` rows.

    Small blocks, which stay in the second-level cache; but eight frames of every residue where
    they fit in 2 MiB, since up to eight frames share a loaded row, and half as many as rows (four
    at least) within 4 MiB, where rows come from the third level or from memory.
    """
    small, large, limit = (size // row_bytes for size in (1 << 16, 1 << 21, 1 << 22))
    if 2 * cycle > limit:
        return max(1, small)
    sharing = min(8, max(4, rows // 2))
    return max(1, small, min(8 * cycle, max(sharing * cycle, large), limit))


def tile_bytes(rows, step, radix):
    """Bytes of a row folded for all frames of a block before going on.

    `rows` go into one frame, and frames that share rows lie `step` of them apart.
    """
    if radix > 1:
        return _LONG_TILE_BYTES
    lines = _NEAR_BYTES // (rows + 7 * step) // 64
    return 64 * max(8, lines)


def frames_together(rows, step, part):
    """Frames of one residue folded before those of the next, in parts of rows of so many bytes."""
    return max(8, (_NEAR_BYTES // part - rows) // step // 8 * 8)


def gather_frames(row_bytes, block):
    """Frames that go side by side into channel-major results, in whole blocks.

    Long runs in every channel: memory that is written in short pieces far apart takes several
    times as long. At 64 frames a run is eight cache lines or more.
    """
    frames = max((1 << 18) // row_bytes, 64)
    return block * max(1, min(frames, (1 << 22) // row_bytes) // block)
