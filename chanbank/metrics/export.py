"""A report as a dict that JSON can hold, and back."""

import numpy as np

from chanbank.metrics.figures import DEFINITIONS, Figure
from chanbank.metrics.leakage import LeakageMatrix
from chanbank.metrics.report import BankReport
from chanbank.metrics.system import SystemResponse
from chanbank.metrics.tones import MeasuredLeakage, NoiseResponse, ToneResponse
from chanbank.plan import ChannelPlan
from chanbank.prototype.prototype import Prototype

__all__ = ["report_from_dict", "report_to_dict"]

_FORMAT, _VERSION = "chanbank report", 1
_ZERO_NOTE = "a power that is exactly zero: {} dB"


def report_to_dict(report):
    """See `BankReport.to_dict`."""
    return {
        "format": _FORMAT,
        "version": _VERSION,
        "method": report.method,
        "dtype": report.dtype,
        "floor": {"value": report.floor_db, "unit": "dB"},
        "plan": _plan_to_dict(report.plan),
        "prototype": _prototype_to_dict(report.prototype),
        "synthesis_prototype": _prototype_to_dict(report.synthesis_prototype),
        "channels": _compact(report.channels),
        "occupied_bandwidth": {"values": _compact(report.occupied_bandwidth), "unit": "Hz"},
        "stopband_edge": {"values": _compact(report.stopband_edge), "unit": "channel spacings"},
        "figures": {name: _figure_to_dict(figure) for name, figure in report.figures.items()},
        "leakage": report.leakage.to_dict(),
        "system": _system_to_dict(report.system),
        "tones": [tone.to_dict() for tone in report.tones],
        "noise": [noise.to_dict() for noise in report.noise],
        "notes": list(report.notes),
    }


def report_from_dict(held):
    """See `BankReport.from_dict`."""
    if not isinstance(held, dict):
        raise TypeError(f"held must be a dict from BankReport.to_dict; got {type(held).__name__}")
    if held.get("format") != _FORMAT:
        raise ValueError(f"held must be a dict from BankReport.to_dict; got format "
                         f"{held.get('format')!r}, expected {_FORMAT!r}")  # fmt: skip
    if held["version"] > _VERSION:
        raise ValueError(
            f"held is a report of version {held['version']}; this library reads up to {_VERSION}"
        )
    plan = _plan_from_dict(held["plan"])
    kinds = {"difference and sum": LeakageMatrix, "dense": MeasuredLeakage}
    leakage = kinds[held["leakage"]["kind"]]
    system = held["system"]
    return BankReport(
        method=held["method"],
        plan=plan,
        prototype=_prototype_from_dict(held["prototype"]),
        synthesis_prototype=_prototype_from_dict(held["synthesis_prototype"]),
        channels=_expand(held["channels"]),
        occupied_bandwidth=_expand(held["occupied_bandwidth"]["values"]),
        stopband_edge=_expand(held["stopband_edge"]["values"]),
        figures={name: _figure_from_dict(name, figure) for name, figure in held["figures"].items()},
        leakage=leakage.from_dict(plan, held["leakage"]),
        system=None
        if system is None
        else SystemResponse(
            plan.channels, system["lags"], system["impulse_responses"], system["pair_delay"]
        ),
        tones=[ToneResponse.from_dict(tone) for tone in held["tones"]],
        noise=[NoiseResponse.from_dict(noise) for noise in held["noise"]],
        floor_db=held["floor"]["value"],
        dtype=held["dtype"],
        notes=held["notes"],
    )


def _plan_to_dict(plan):
    return {
        "sample_rate": {"value": plan.sample_rate, "exact": str(plan.exact_sample_rate),
                        "unit": "Hz"},
        "channels": plan.channels,
        "hop": {"value": plan.hop, "unit": "samples"},
        "center_frequency": {"value": plan.center_frequency,
                             "exact": str(plan.exact_center_frequency), "unit": "Hz"},
        "offset": {"value": plan.offset, "exact": str(plan.exact_offset),
                   "unit": "channel spacings"},
        "real": plan.real,
    }  # fmt: skip


def _plan_from_dict(held):
    return ChannelPlan(
        held["sample_rate"]["exact"],
        held["channels"],
        held["hop"]["value"],
        center_frequency=held["center_frequency"]["exact"],
        offset=held["offset"]["exact"],
        real=held["real"],
    )


def _prototype_to_dict(prototype):
    if prototype is None:
        return None
    return {
        "taps": prototype.taps.tolist(),
        "channels": prototype.channels,
        "label": prototype.label,
        "design": prototype.design,
        "pair_delay": prototype.pair_delay,
    }


def _prototype_from_dict(held):
    if held is None:
        return None
    return Prototype(
        held["taps"],
        held["channels"],
        label=held["label"],
        design=held["design"],
        pair_delay=held["pair_delay"],
    )


def _compact(values):
    """A list; equal values and counting indices in a short form, so that many channels fit."""
    if len(values) > 1 and (values == values[0]).all():
        return {"same": values[0].item(), "count": len(values)}
    if len(values) > 1 and (values == np.arange(len(values))).all():
        return {"counting": len(values)}
    return values.tolist()


def _expand(held):
    if isinstance(held, dict):
        if "counting" in held:
            return np.arange(held["counting"])
        return np.full(held["count"], held["same"])
    return np.array(held)


def _figure_to_dict(figure):
    definition = figure.definition
    result = {
        "title": definition.title,
        "unit": definition.unit,
        "definition": definition.text,
        "better": definition.better,
    }
    flat = np.atleast_1d(figure.values)
    shown = [float(v) if np.isfinite(v) else None for v in flat]
    if not figure.values.ndim:
        result["value"] = shown[0]
    elif len(set(shown)) == 1 and not np.isnan(flat).any():
        result["values"] = {"same": shown[0], "count": len(shown)}
    else:
        result["values"] = shown
    if figure.reasons:
        result["absent"] = {_place(key): text for key, text in figure.reasons.items()}
    zeros = np.flatnonzero(np.isinf(flat))
    if len(zeros):
        places = zeros.tolist() if figure.values.ndim and len(zeros) < len(flat) else [None]
        result["exact_zeros"] = {
            _place(at): _ZERO_NOTE.format("-inf" if flat[at or 0] < 0 else "+inf") for at in places
        }
    if figure.uncertainty is not None:
        result["uncertainty"] = figure.uncertainty
    return result


def _place(key):
    return "all" if key is None else str(key)


def _figure_from_dict(name, held):
    values = held["value"] if "value" in held else held["values"]
    if isinstance(values, dict):
        values = np.full(values["count"], np.nan if values["same"] is None else values["same"])
    values = np.array(values, np.float64)
    for place, note in held.get("exact_zeros", {}).items():
        infinite = -np.inf if "-inf" in note else np.inf
        if place == "all":
            values[...] = infinite
        else:
            values[int(place)] = infinite
    reasons = {
        None if place == "all" else int(place): text
        for place, text in held.get("absent", {}).items()
    }
    return Figure(DEFINITIONS[name], values, reasons, held.get("uncertainty"))


def _system_to_dict(system):
    if system is None:
        return None
    return {
        "lags": system.lags.tolist(),
        "lag_unit": f"{system.channels} samples",
        "impulse_responses": system.impulse_responses.tolist(),
        "pair_delay": system.pair_delay,
        "pair_delay_unit": "samples",
    }
