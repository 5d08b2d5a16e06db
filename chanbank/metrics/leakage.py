"""How much of every channel's signal reaches every other channel: the alias transfer matrix."""

import numpy as np

from chanbank.metrics._spectrum import band_nodes, comb

__all__ = ["LeakageMatrix"]

# Up to here the sums over channels are formed term by term; beyond, by a circular convolution,
# whose rounding is 1e-16 of the largest term.
_DIRECT = 4096


class LeakageMatrix:
    """Power that a flat signal in channel j sends to the output of channel k.

    The signal fills the occupied band B_j = f_j +- b_j / 2 with unit spectral density, real
    signals also the mirror image -B_j; output k then holds

        P[k, j] = integral over B_j (and -B_j) of abs(H(f - f_k))^2 df,

    f in channel spacings, the density of an overlap of B_j and -B_j counted once. It depends on
    the channels' difference j - k, for the mirror image on their sum j + k, so that M = 65536
    channels take a few megabytes.

    Attributes
    ----------
    channels : int
        M.
    widths : numpy.ndarray
        The distinct occupied bandwidths, in channel spacings, shape (W,).
    by_difference : numpy.ndarray
        Power against (j - k) mod M, shape (W, M).
    by_sum : numpy.ndarray or None
        Real input: power of the mirror image against (j + k) mod M, shape (W, M).

    Examples
    --------
    >>> from chanbank import ChannelPlan, bank_report, boxcar_prototype
    >>> report = bank_report(ChannelPlan(8.0, 8, 8), boxcar_prototype(8))
    >>> report.leakage.matrix_db([0, 1], [0, 1]).round(2)
    array([[  0.  , -11.98],
           [-11.98,   0.  ]])
    """

    def __init__(self, plan, taps, bandwidths):
        channels = plan.channels
        widths, group = np.unique(bandwidths / plan.spacing, return_inverse=True)
        by_difference = np.stack([_bands(taps, channels, w, 0.0) for w in widths])
        by_sum = None
        if plan.real:
            # Seen from channel k the image of f_j + phi sits at -(j + k + 2 offset) - phi, and
            # abs(H) is even: at (j + k + 2 offset) + phi.
            turn = float(2 * plan.exact_offset % channels)
            by_sum = np.stack([_bands(taps, channels, w, turn) for w in widths])
        self._hold(plan, widths, group, by_difference, by_sum, {})
        if plan.real:
            self._doubled = self._overlaps(plan, taps)

    def _hold(self, plan, widths, group, by_difference, by_sum, doubled):
        self.channels, self._index = plan.channels, plan.dft_index
        self.widths, self._group = widths, group
        self.by_difference, self.by_sum, self._doubled = by_difference, by_sum, doubled
        for array in (self.widths, self.by_difference, self.by_sum):
            if array is not None:
                array.flags.writeable = False

    def to_dict(self):
        """JSON-safe: the arrays by difference and sum, and what overlaps."""
        return {
            "kind": "difference and sum",
            "unit": "unit density times channel spacings",
            "widths": self.widths.tolist(),
            "width_of_channel": self._group.tolist() if len(self.widths) > 1 else 0,
            "by_difference": self.by_difference.tolist(),
            "by_sum": None if self.by_sum is None else self.by_sum.tolist(),
            "counted_twice": {str(j): power.tolist() for j, power in self._doubled.items()},
        }

    @classmethod
    def from_dict(cls, plan, held):
        """Rebuild what `to_dict` gave."""
        matrix = cls.__new__(cls)
        group = np.broadcast_to(held["width_of_channel"], (plan.output_channels,))
        by_sum = held["by_sum"]
        doubled = {int(j): np.array(power) for j, power in held["counted_twice"].items()}
        matrix._hold(
            plan,
            np.array(held["widths"]),
            np.array(group),
            np.array(held["by_difference"]),
            None if by_sum is None else np.array(by_sum),
            doubled,
        )
        return matrix

    def _overlaps(self, plan, taps):
        """Power counted twice where a band meets its own mirror image, by input channel."""
        doubled = {}
        centres = plan.normalised_frequencies * plan.channels
        for j in range(len(centres)):
            width = self.widths[self._group[j]]
            for middle in (0.0, plan.channels / 2):
                common = width / 2 - abs(centres[j] - middle)
                if common <= 0:
                    continue
                nodes, weights = band_nodes(taps, plan.channels, middle - common, middle + common)
                power = np.concatenate(
                    [p for _, p in comb(taps, plan.channels, plan.channels, nodes - centres[0])]
                )
                # Output k sees frequency f at f - f_k = (f - f_0) - k: comb position -k.
                seen = (weights @ power)[-(self._index - self._index[0]) % plan.channels]
                doubled[j] = doubled.get(j, 0.0) + seen
        return doubled

    def power(self, outputs, inputs):
        """P[k, j] for arrays of channels that broadcast together.

        Parameters
        ----------
        outputs, inputs : array_like of int
            Output channels k and input channels j, in the plan's output order.

        Returns
        -------
        numpy.ndarray
            float64, unit density times channel spacings: 1 is a spacing's worth at full gain.

        Raises
        ------
        IndexError
            A channel that does not exist.
        """
        outputs, inputs = np.broadcast_arrays(np.asarray(outputs), np.asarray(inputs))
        k, j, group = self._index[outputs], self._index[inputs], self._group[inputs]
        power = self.by_difference[group, (j - k) % self.channels]
        if self.by_sum is not None:
            power = power + self.by_sum[group, (j + k) % self.channels]
            for source, twice in self._doubled.items():
                power = np.where(inputs == source, power - twice[outputs], power)
        return power

    def image(self, outputs):
        """Power of a channel's own mirror image in its output (real input)."""
        k = self._index[outputs]
        return self.by_sum[self._group[outputs], 2 * k % self.channels]

    def direct(self, outputs):
        """Power of a channel's own band, without the mirror image."""
        return self.by_difference[self._group[outputs], 0]

    def matrix_db(self, outputs=None, inputs=None):
        """The matrix in dB, each row relative to the channel's own signal.

        10 log10(P[k, j] / P[k, k]): row k says what reaches output k from channel j.

        Parameters
        ----------
        outputs, inputs : sequence of int, optional
            Rows and columns wanted; by default all channels (at most 8192).

        Returns
        -------
        numpy.ndarray
            float64, shape (outputs, inputs); -inf for an exact zero.

        Raises
        ------
        ValueError
            All channels asked for, and more than 8192 of them.
        """
        count = len(self._index)
        if (outputs is None or inputs is None) and count > 8192:
            raise ValueError(
                f"outputs and inputs must be given for more than 8192 channels; there are {count}"
            )
        outputs = np.arange(count) if outputs is None else np.asarray(outputs)
        inputs = np.arange(count) if inputs is None else np.asarray(inputs)
        power = self.power(outputs[:, None], inputs[None, :])
        own = self.power(outputs, outputs)
        with np.errstate(divide="ignore"):
            return 10 * np.log10(np.maximum(power, 0) / own[:, None])

    def total(self):
        """For every output channel, the power from all other channels."""
        count = len(self._index)
        if self.by_sum is None and len(self.widths) == 1:
            return np.full(count, self.by_difference[0, 1:].sum())
        if count <= _DIRECT:
            every = np.arange(count)
            total = np.empty(count)
            step = max(1, (1 << 20) // count)
            for first in range(0, count, step):
                rows = every[first : first + step]
                power = self.power(rows[:, None], every[None, :])
                power[rows - first, rows] = 0.0
                total[first : first + step] = power.sum(axis=1)
            return total
        return self._convolved()

    def _convolved(self):
        count, channels = len(self._index), self.channels
        k = self._index
        total = np.zeros(channels)
        mirrored = np.zeros(channels)
        for group in range(len(self.widths)):
            present = np.zeros(channels)
            present[k[self._group == group]] = 1.0
            spread = np.fft.fft(present)
            others = self.by_difference[group].copy()
            others[0] = 0.0
            # sum over j of others[(j - k) mod M] present[j]: a correlation.
            total += np.fft.ifft(np.fft.fft(others).conj() * spread).real
            if self.by_sum is not None:
                # sum over j of by_sum[(j + k) mod M] present[j].
                mirrored += np.fft.ifft(np.fft.fft(self.by_sum[group]) * spread.conj()).real
        result = total[k]
        if self.by_sum is not None:
            result = result + mirrored[k] - self.image(np.arange(count))
            for source, twice in self._doubled.items():
                away = np.arange(count) != source
                result[away] -= np.asarray(twice)[away]
        return np.maximum(result, 0.0)


def _bands(taps, channels, width, shift):
    """Integral of abs(H)^2 over d + shift +- width / 2 for d = 0..M-1."""
    nodes, weights = band_nodes(taps, channels, shift - width / 2, shift + width / 2)
    total = np.zeros(channels)
    for first, power in comb(taps, channels, channels, nodes):
        total += weights[first : first + len(power)] @ power
    return total
