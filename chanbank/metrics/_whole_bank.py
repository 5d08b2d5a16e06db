"""Figures of the bank as a whole by formula: the pair, frame bounds and cost."""

import math

import numpy as np

from chanbank.metrics._shape import Shape, decibels
from chanbank.metrics.bands import NULL, UNMIRRORED
from chanbank.metrics.cost import bank_cost, converter_cost, state_bytes
from chanbank.metrics.figures import DEFINITIONS, NULL_DB, Figure
from chanbank.metrics.report import absent_figure
from chanbank.synthesis.condition import noise_gain
from chanbank.synthesis.frames import frame_bounds

__all__ = ["cost_figures", "frame_figures", "pair_figures"]

# Up to here frame bounds are exact and take a second at most.
_MOST_COLUMNS = 4096


def pair_figures(plan, prototype, synthesis, system, edge):
    low, high = system.distortion_extremes()
    fast, slow = system.delay_extremes()
    stop = Shape(synthesis.taps, plan.channels)
    level = stop.beyond(edge)
    values = {
        "distortion_ripple": float(decibels(high) - decibels(low)),
        "distortion_delay_spread": slow - fast,
        "alias_transfer_peak": float(decibels(system.worst_alias())),
        "alias_transfer_sum": float(decibels(system.worst_alias_sum())),
        "reconstruction_error": float(decibels(system.white_error())),
        "reconstruction_error_peak": float(decibels(system.worst_error())),
        "impulse_spread": float(decibels(system.spread())),
        "synthesis_stopband": np.nan if level is None else float(decibels(level / stop.centre)),
        "noise_gain": float(2 * decibels(noise_gain(plan, prototype, synthesis))),
    }
    found = {}
    for name, value in values.items():
        if np.isnan(value):
            reason = "the stopband edge lies at or beyond half the sample rate"
            found[name] = absent_figure(name, reason, 1)
        else:
            found[name] = Figure(DEFINITIONS[name], value)
    if not found["distortion_ripple"].values <= NULL_DB:
        found["distortion_delay_spread"] = absent_figure("distortion_delay_spread", NULL, 1)
    if plan.hop == 1:
        for name in ("alias_transfer_peak", "alias_transfer_sum", "impulse_spread"):
            found[name] = absent_figure(name, "hop 1: the pair does not vary with time", 1)
    return found


def frame_figures(plan, prototype):
    names = ("frame_lower", "frame_upper", "frame_ratio")
    if plan.real and (2 * plan.exact_offset).denominator != 1:
        return {name: absent_figure(name, UNMIRRORED, 1) for name in names}
    if plan.hop // math.gcd(plan.channels, plan.hop) > _MOST_COLUMNS:
        reason = (
            f"hop / gcd(channels, hop) is above {_MOST_COLUMNS}, where bounds lose digits: "
            "call frame_bounds(plan, prototype)"
        )
        return {name: absent_figure(name, reason, 1) for name in names}
    bounds = frame_bounds(plan, prototype)
    values = (bounds.lower, bounds.upper, bounds.condition)
    return {
        name: Figure(DEFINITIONS[name], value) for name, value in zip(names, values, strict=True)
    }


def cost_figures(plan, prototype, synthesis, pair_delay, dtype):
    total = bank_cost(plan, prototype.length)
    apart = converter_cost(plan, prototype.length)
    latency, span = prototype.delay, None
    if synthesis is not None:
        total, span = total + bank_cost(plan, synthesis.length), synthesis.length
        apart = apart + converter_cost(plan, synthesis.length)
        latency = pair_delay
    values = {
        "multiplications": total.multiplications,
        "additions": total.additions,
        "converter_multiplications": apart.multiplications,
        "converter_additions": apart.additions,
        "latency": latency,
        "latency_seconds": latency / plan.sample_rate,
        "state": state_bytes(plan, prototype.length, span, dtype),
    }
    return {name: Figure(DEFINITIONS[name], value) for name, value in values.items()}
