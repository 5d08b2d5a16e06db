"""Block powers of many channels, gathered while their frames go by."""

import numpy as np

__all__ = ["BlockPower"]


class BlockPower:
    """Mean power of blocks of frames, and the strongest burst inside each block.

    A burst is a short stretch of `burst_frames` frames; a block is `bursts_per_block` of them.
    Blocks and bursts start anew with each run. Frames that are not finite count nothing and are
    counted by themselves. State: two float64 values for each channel and block.
    """

    def __init__(self, channels, run_frames, burst_frames, bursts_per_block):
        per_block = burst_frames * bursts_per_block
        blocks = sum(-(-frames // per_block) for frames in run_frames)
        self.power = np.zeros((blocks, channels))
        self.peak = np.zeros((blocks, channels))
        self.frames = np.zeros(blocks, np.int64)
        self.total = np.zeros(channels)
        self.counted = np.zeros(channels)
        self.nonfinite = np.zeros(channels, np.int64)
        self._burst, self._per_block = burst_frames, bursts_per_block
        self._next = 0
        self._clear_block()
        self._clear_burst()

    def _clear_block(self):
        channels = self.power.shape[1]
        self._sum, self._count = np.zeros(channels), np.zeros(channels)
        self._strongest, self._bursts, self._block_frames = np.zeros(channels), 0, 0

    def _clear_burst(self):
        channels = self.power.shape[1]
        self._burst_sum, self._burst_count = np.zeros(channels), np.zeros(channels)
        self._fill = 0

    def add(self, frames):
        """Take frames of shape (streams, channels, frames)."""
        at, count = 0, frames.shape[-1]
        while at < count:
            blocks = 0
            if not self._fill and not self._bursts:
                blocks = (count - at) // (self._burst * self._per_block)
            if blocks:
                step = blocks * self._burst * self._per_block
                self._take_blocks(frames[..., at : at + step], blocks)
            elif self._fill or count - at < self._burst:
                step = min(self._burst - self._fill, count - at)
                sums, counts = self._sums(frames[..., at : at + step], 1)
                self._burst_sum += sums[:, 0]
                self._burst_count += counts[:, 0]
                self._fill += step
                if self._fill == self._burst:
                    self._close_burst()
            else:
                # Whole bursts, to the end of the block at most.
                bursts = min((count - at) // self._burst, self._per_block - self._bursts)
                step = bursts * self._burst
                sums, counts = self._sums(frames[..., at : at + step], bursts)
                self._take_bursts(sums, counts, step)
            at += step

    def count_nonfinite(self, frames):
        """Count the frames that are not finite among frames that shall not be measured."""
        if not np.isfinite(frames.sum()):
            self.nonfinite += np.count_nonzero(~np.isfinite(frames), axis=(0, 2))

    def end_run(self):
        """Close the blocks of a run."""
        if self._fill:
            # A last burst of less than half its length says too little to be the strongest.
            self._close_burst(judge=2 * self._fill >= self._burst or not self._bursts)
        if self._bursts:
            self._close_block()

    def _close_burst(self, judge=True):
        sums, counts, fill = self._burst_sum[:, None], self._burst_count[:, None], self._fill
        self._clear_burst()
        self._take_bursts(sums, counts, fill, judge)

    def _take_bursts(self, sums, counts, frames, judge=True):
        self._sum += sums.sum(axis=1)
        self._count += counts.sum(axis=1)
        self._block_frames += frames
        self._bursts += sums.shape[1]
        if judge:
            means = sums / np.maximum(counts, 1)
            np.maximum(self._strongest, means.max(axis=1), out=self._strongest)
        if self._bursts == self._per_block:
            self._close_block()

    def _take_blocks(self, frames, blocks):
        """Whole blocks in one go."""
        channels = frames.shape[1]
        sums, counts = self._sums(frames, blocks * self._per_block)
        means = sums / np.maximum(counts, 1)
        sums = sums.reshape(channels, blocks, -1).sum(axis=2)
        counts = counts.reshape(channels, blocks, -1).sum(axis=2)
        rows = slice(self._next, self._next + blocks)
        self.power[rows] = (sums / np.maximum(counts, 1)).T
        self.peak[rows] = means.reshape(channels, blocks, -1).max(axis=2).T
        self.frames[rows] = self._burst * self._per_block
        self.total += sums.sum(axis=1)
        self.counted += counts.sum(axis=1)
        self._next += blocks

    def _close_block(self):
        self.power[self._next] = self._sum / np.maximum(self._count, 1)
        self.peak[self._next] = self._strongest
        self.frames[self._next] = self._block_frames
        self.total += self._sum
        self.counted += self._count
        self._next += 1
        self._clear_block()

    def _sums(self, frames, bursts):
        """Sum of abs(y)^2 and number of finite values, (channels, bursts)."""
        streams, channels, count = frames.shape
        parts = frames.view(frames.real.dtype).reshape(streams, channels, bursts, -1)
        sums = np.einsum("skbf,skbf->kb", parts, parts).astype(np.float64)
        if np.isfinite(sums).all():
            return sums, np.full((channels, bursts), streams * count / bursts)
        values = frames.reshape(streams, channels, bursts, -1).astype(np.complex128)
        good = np.isfinite(values)
        values[~good] = 0
        self.nonfinite += np.count_nonzero(~good, axis=(0, 2, 3))
        with np.errstate(over="ignore"):
            sums = (values.real**2 + values.imag**2).sum(axis=(0, 3))
        return sums, good.sum(axis=(0, 3)).astype(np.float64)
