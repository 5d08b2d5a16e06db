"""What a pair reached, from its coefficients."""

from chanbank.prototype._measure import band_extremes, decibels, stopband_peak
from chanbank.prototype.prototype import Prototype
from chanbank.synthesis.condition import noise_gain, residual_of_taps, rms_error

__all__ = ["EXACT", "peak_db", "reached"]

# An error of this size is rounding: (P + Q) products of about 1 carry some sqrt(P + Q) / 2 units
# of 2^-52 each, 1e-15 in all; ten times that allows for the wide ones.
EXACT = 1e-14


def peak_db(taps, channels, edge):
    """Stopband peak over passband peak in dB."""
    inner = band_extremes(taps, channels, 0.0, min(edge, 0.5))[1]
    return float(decibels(stopband_peak(taps, channels, edge) / inner))


def reached(plan, prototype, placed, edge):
    """The figures of a pair, from its coefficients: plain numbers that JSON can hold."""
    taps, delay = placed
    error = rms_error(residual_of_taps(plan.channels, plan.hop, prototype.taps, taps, delay))
    synthesis = Prototype(taps, plan.channels)
    return {
        "exact": False,
        "error_db": float(decibels(error)) if error > 0 else None,
        "stopband_edge": edge,
        "stopband_db": peak_db(taps, plan.channels, edge),
        "analysis_stopband_db": peak_db(prototype.taps, plan.channels, edge),
        "noise_gain_db": float(decibels(noise_gain(plan, prototype, synthesis))),
        "pair_delay": delay,
        "hop": plan.hop,
    }
