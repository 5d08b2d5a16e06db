"""What a bank costs: arithmetic per input sample, delay and memory, counted from its structure."""

import math
from dataclasses import dataclass

import numpy as np

__all__ = ["Cost", "bank_cost", "converter_cost", "dft_cost"]


@dataclass(frozen=True)
class Cost:
    """Real multiplications and additions per input sample.

    Attributes
    ----------
    multiplications, additions : float
        Per input sample.
    """

    multiplications: float
    additions: float

    def __add__(self, other):
        return Cost(self.multiplications + other.multiplications, self.additions + other.additions)


def dft_cost(size):
    """Real multiplications and additions of one complex DFT, as a pair.

    Powers of two: split radix, N log2 N - 3 N + 4 and 3 N log2 N - 3 N + 4. Other sizes: the
    customary 5 N log2 N, two to three, which is an estimate.

    References
    ----------
    P. Duhamel and H. Hollmann, "Split radix FFT algorithm", Electronics Letters 20(1), 1984;
    H. V. Sorensen, M. T. Heideman and C. S. Burrus, IEEE Trans. ASSP 34(1), 1986.

    Examples
    --------
    >>> from chanbank.metrics.cost import dft_cost
    >>> dft_cost(64), sum(dft_cost(1024))
    ((196, 964), 34824)
    """
    if size == 1:
        return 0, 0
    if size & (size - 1) == 0:
        order = size.bit_length() - 1
        return size * order - 3 * size + 4, 3 * size * order - 3 * size + 4
    log = math.log2(size)
    return 2 * size * log, 3 * size * log


def bank_cost(plan, length):
    """One polyphase bank, analysis or synthesis, per input sample of the wideband signal.

    Each frame costs 2 L multiplications and 2 (L - M) additions for the branches of complex
    samples (half for real ones) and one DFT of M points (half of one for real samples at an
    offset that is a whole number). Any other offset costs a mixer, 4 multiplications and 2
    additions a sample (2 and 0 for real samples).

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.
    """
    channels, hop = plan.channels, plan.hop
    mixed = plan.exact_offset.denominator != 1
    real = plan.real and not mixed
    share = 1 if real else 2
    multiplications, additions = dft_cost(channels)
    if real:
        multiplications, additions = multiplications / 2, additions / 2
    fold = Cost(share * length / hop, share * max(0, length - channels) / hop)
    mixer = Cost(0, 0)
    if mixed:
        mixer = Cost(2, 0) if plan.real else Cost(4, 2)
    return fold + Cost(multiplications / hop, additions / hop) + mixer


def converter_cost(plan, length):
    """One down-converter per channel: a mixer at the input rate and a decimating FIR each.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7.
    """
    count = plan.output_channels
    mixer = Cost(2, 0) if plan.real else Cost(4, 2)
    return Cost(
        count * (mixer.multiplications + 2 * length / plan.hop),
        count * (mixer.additions + 2 * (length - 1) / plan.hop),
    )


def state_bytes(plan, length, synthesis_length, dtype):
    """History of the L - 1 last samples and the taps; for synthesis the overlap and its taps."""
    itemsize = np.dtype(dtype).itemsize
    sample = itemsize // 2 if plan.real else itemsize
    tap = itemsize // 2
    total = (length - 1) * sample + length * tap
    if synthesis_length is not None:
        total += max(0, synthesis_length - plan.hop) * sample + synthesis_length * tap
    return total
