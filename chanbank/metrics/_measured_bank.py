"""The figures of the bank as a whole: frame bounds, latency and the pair."""

import numpy as np

from chanbank.metrics import _pair_run
from chanbank.metrics._drive import Exact
from chanbank.metrics._tone_run import run_pair_tones, run_tones
from chanbank.metrics.bands import NULL, UNMIRRORED
from chanbank.metrics.figures import DEFINITIONS, NULL_DB, Figure
from chanbank.metrics.report import absent_figure

__all__ = ["measure_bank"]

# Channels up to which the bank's D impulse answers are decomposed for the frame bounds.
_MOST_FRAME_CHANNELS = 128
_PAIR_TONES = 24


def measure_bank(driver, tones, edge, most):
    """Figures, the system response, all tone responses and notes."""
    figures = _frame(driver)
    notes = []
    if driver.back is None:
        figures["latency"], seconds = _latency(driver, tones)
        figures["latency_seconds"] = seconds
        return figures, None, tones, notes
    system, note = _pair_run.measure_impulses(driver, most // 8)
    notes.append(note)
    worst = _worst_frequencies(system)
    spacing, offset = 1.0 / driver.channels, driver.plan.offset
    asked = [
        (f + offset + int(driver.rng.integers(driver.channels))) * spacing for f in worst.values()
    ]
    asked += driver.rng.random(_PAIR_TONES).tolist()
    run = run_pair_tones(driver, asked, run_tones(driver, asked))
    figures |= _pair_figures(driver, system, run, edge)
    return figures, system, [*tones, *run], notes


def _figure(name, value, spread):
    return Figure(DEFINITIONS[name], value, {}, None if spread is None else float(spread))


def _decibels(name, power, epsilon, extra=0.001):
    with np.errstate(divide="ignore"):
        level = 10 * np.log10(power)
    noise = min(1.0, epsilon / max(np.sqrt(power), epsilon))
    return _figure(name, level, np.hypot(extra, 8.7 * noise))


def _frame(driver):
    names = ("frame_lower", "frame_upper", "frame_ratio")
    reason = ""
    if driver.channels > _MOST_FRAME_CHANNELS:
        reason = f"measured for up to {_MOST_FRAME_CHANNELS} channels"
    elif len(driver.outputs) < driver.plan.output_channels:
        reason = "the bank returns only some of the channels"
    elif driver.real and (2 * driver.plan.exact_offset).denominator != 1:
        reason = UNMIRRORED
    if reason:
        return {name: absent_figure(name, reason, 1) for name in names}
    low, high = _pair_run.frame_bounds(driver)
    values = (low, high, high / low if low > 0 else np.inf)
    return {
        name: _figure(name, value, abs(value) * 1e-3 if np.isfinite(value) else None)
        for name, value in zip(names, values, strict=True)
    }


def _latency(driver, tones):
    """Phase slope across the centre of the first channel."""
    step = 1.0 / (16 * driver.length)
    centre = float(driver.plan.normalised_frequencies[driver.outputs[0]])
    low, high = run_tones(driver, [centre - step, centre + step])
    turn = np.angle(high.responses[0] * low.responses[0].conj()) / (2 * np.pi)
    apart = (Exact(centre + step).step - Exact(centre - step).step) / 2**32 % 1.0
    # The slope is known modulo 1/apart samples, far longer than the filter.
    delay = -turn / apart
    spread = driver.epsilon / apart
    if delay < -0.25 / apart:
        delay += 1 / apart
    return (
        _figure("latency", delay, spread),
        _figure("latency_seconds", delay / driver.plan.sample_rate, None),
    )


def _worst_frequencies(system):
    """Offsets from a channel's centre at which the measured impulse answers are worst."""
    f, step = system.frequencies, system.frequencies[1]
    asked = {
        "weak": lambda at: -np.abs(system.transfer(at)),
        "strong": lambda at: np.abs(system.transfer(at)),
        "error": system.error_power,
        "sum": system.alias_power,
    }
    found = {"peak": float(f[system.alias_peak.argmax()])}
    for name, level in asked.items():
        best, reach = float(f[np.argmax(level(f))]), step
        for _ in range(8):
            near = best + np.linspace(-reach, reach, 9)
            best, reach = float(near[np.argmax(level(near))]), reach / 4
        found[name] = best
    return found


def _pair_figures(driver, system, run, edge):
    epsilon, hop = driver.epsilon, driver.hop
    # From the impulse answers, since a zero of T_0 lies between any two tones.
    low, high = system.distortion_extremes()
    with np.errstate(divide="ignore"):
        ripple = float(10 * np.log10(high / low))
    noise = min(1.0, epsilon / max(np.sqrt(low / high), epsilon))
    found = {"distortion_ripple": _figure("distortion_ripple", ripple, 8.7 * noise)}
    if not ripple <= NULL_DB:
        found["distortion_delay_spread"] = absent_figure("distortion_delay_spread", NULL, 1)
    else:
        fast, slow = system.delay_extremes()
        found["distortion_delay_spread"] = _figure("distortion_delay_spread", slow - fast, None)
    errors = [float(np.mean(np.abs(tone.pair - 1) ** 2)) for tone in run]
    found["reconstruction_error_peak"] = _decibels(
        "reconstruction_error_peak", max(errors), epsilon, 0.01
    )
    if hop == 1:
        for name in ("alias_transfer_peak", "alias_transfer_sum", "impulse_spread"):
            found[name] = absent_figure(name, "hop 1: the pair does not vary with time", 1)
    else:
        spectra = [np.abs(np.fft.fft(tone.pair)[1:] / hop) ** 2 for tone in run]
        found["alias_transfer_peak"] = _decibels(
            "alias_transfer_peak", max(float(s.max()) for s in spectra), epsilon, 0.01
        )
        found["alias_transfer_sum"] = _decibels(
            "alias_transfer_sum", max(float(s.sum()) for s in spectra), epsilon, 0.01
        )
        found["impulse_spread"] = _decibels("impulse_spread", system.spread(), epsilon)
    error, spread = _pair_run.white_error(driver)
    found["reconstruction_error"] = _decibels(
        "reconstruction_error", error, epsilon, 4.34 * spread / max(error, epsilon**2)
    )
    gain, spread = _pair_run.noise_gain(driver)
    found["noise_gain"] = _figure("noise_gain", float(10 * np.log10(gain)), 4.34 * spread)
    found["synthesis_stopband"] = _pair_run.synthesis_stopband(driver, edge)
    strongest = np.abs(system.impulse_responses).mean(axis=0).argmax()
    delay = system.pair_delay + driver.channels * int(system.lags[strongest])
    found["latency"] = _figure("latency", delay, 0.0)
    found["latency_seconds"] = _figure("latency_seconds", delay / driver.plan.sample_rate, 0.0)
    return found
