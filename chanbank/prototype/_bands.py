"""Stopbands in pieces: bands that matter, each with its weight, and freedom between them."""

import math
import numbers

import numpy as np

from chanbank._checks import wrong_type, wrong_value
from chanbank.prototype._exchange import Band

__all__ = ["BandSet", "parsed_bands", "stretched"]

# How much higher than in the bands beside it a ripple may be where nothing is asked. Without any
# limit the response between the bands grows far beyond the passband's.
_RELIEF = 100.0


def parsed_bands(stopband, channels, passband, accepted):
    """[(low, high, weight), ...] in rising order, or None where `stopband` is a single edge."""
    if isinstance(stopband, numbers.Real) and not isinstance(stopband, (bool, np.bool_)):
        if not math.isfinite(stopband) or stopband <= 0:
            raise wrong_value("stopband", accepted, stopband)
        return None
    if isinstance(stopband, (str, bytes)) or not hasattr(stopband, "__iter__"):
        raise wrong_type("stopband", accepted, stopband)
    bands, edge = [], passband
    for item in stopband:
        try:
            low, high, *rest = (float(part) for part in item)
        except (TypeError, ValueError):
            raise wrong_type("stopband", accepted, stopband) from None
        weight = rest[0] if rest else 1.0
        if len(rest) > 1 or not (math.isfinite(weight) and weight > 0):
            raise wrong_value("stopband", accepted + ", weights above 0", stopband)
        if not edge < low < high <= channels / 2:
            raise ValueError(
                "stopband bands must satisfy passband < low < high <= channels / 2 and rise; got "
                f"band ({low:g}, {high:g}) after {edge:g}, channels / 2 = {channels / 2:g}"
            )
        bands.append((low, high, weight))
        edge = high
    if not bands:
        raise wrong_value("stopband", accepted, stopband)
    return bands


class BandSet:
    """A passband and stopbands in pieces, in channel spacings; the counterpart of `Lowpass`."""

    slope = 0.0
    knee = 0.0

    def __init__(self, passband, bands, channels):
        self.passband, self.pieces, self.channels = passband, bands, channels
        self.stopband = bands[0][0]
        self.edges = np.array([edge for low, high, _ in bands for edge in (low, high)])

    def levels(self, f, channels):
        """Allowed ripple over that of weight 1; infinite between the bands."""
        f = np.asarray(f)
        result = np.full(f.shape, np.inf)
        slack = 1e-12 * channels
        for low, high, weight in self.pieces:
            result[(f >= low - slack) & (f <= high + slack)] = 1 / weight
        return result

    counted = levels

    def bands(self, rate, ratio):
        """Exchange bands at `rate` channels, the gaps included at their relief.

        A filter that stands for a longer one has only the gaps that are near its passband:
        further out the bands run together, since what happens there shows as structure of the
        outermost taps, which does not stretch.
        """
        limit = rate / 2 if rate == self.channels else rate / 5
        stops, edge = [], None
        for low, high, weight in self.pieces:
            if low >= limit:
                break
            if edge is not None and low > edge:
                stops.append((edge, low, min(weight, stops[-1][2]) / _RELIEF))
            stops.append((low, min(high, limit), weight))
            edge = stops[-1][1]
        far = [weight for _, high, weight in self.pieces if high > limit]
        if far:
            stops.append((edge if edge is not None else self.stopband, rate / 2, max(far)))
        elif edge < rate / 2:
            top = rate / 2 if rate == self.channels else max(edge, limit)
            if edge < top:
                stops.append((edge, top, stops[-1][2] / _RELIEF))
            if top < rate / 2:
                stops.append((top, rate / 2, min(weight for _, _, weight in self.pieces)))
        merged = []
        for low, high, weight in stops:
            if merged and merged[-1][2] == weight and merged[-1][1] == low:
                low = merged.pop()[0]
            merged.append((low, high, weight))
        rest = [Band(low, high, 0.0, 1 / weight) for low, high, weight in merged]
        return [Band(0.0, self.passband, 1.0, ratio), *rest]


def stretched(taps, length):
    """The taps of a short filter as `length` taps over the same span of time.

    Inside, the impulse response is smooth and is continued as a cosine series on a span a
    quarter longer; at each end stands a single tap of its own (flat ripples need it), which keeps
    its weight. What the sum over more taps changes is left to the measurement of the result.
    """
    short = len(taps)
    half = np.linspace(-1, 1, short)
    terms = min(short // 4, short // 2 - 4)
    turn = np.pi * np.arange(terms) / 1.25
    inside = slice(1, short - 1)
    series = np.linalg.lstsq(np.cos(np.outer(half[inside], turn)), taps[inside], rcond=1e-13)[0]
    ends = float(np.cos(turn) @ series)
    fine = np.linspace(-1, 1, length)
    smooth = np.zeros(length)
    for start in range(0, length, 1 << 14):
        part = slice(start, start + (1 << 14))
        smooth[part] = np.cos(np.outer(fine[part], turn)) @ series
    scale = (short - 1) / (length - 1)
    result = smooth * scale
    # Trapezoid weights at the ends, and the lone end taps at full weight.
    result[[0, -1]] = ends * scale / 2 + (taps[0] - ends / 2)
    return result
