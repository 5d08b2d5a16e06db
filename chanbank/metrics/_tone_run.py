"""Single tones through the banks, several at once as antennas, every channel and frame kept."""

from dataclasses import replace

import numpy as np

from chanbank.metrics._drive import Exact, tone
from chanbank.metrics.tones import NoiseResponse, ToneResponse

__all__ = ["run_noise", "run_pair_tones", "run_synthesis_noise", "run_tones"]

# Frames averaged, and complex numbers held at a time.
_FRAMES, _HELD = 48, 1 << 21
# A large first sample: a phase must be as exact there as at the start.
_FAR = 10**12 + 3


def run_tones(driver, frequencies):
    """Responses of all output channels to tones, in the order given."""
    batch = max(2, min(8, _HELD // (_FRAMES * len(driver.outputs))))
    skip, hop = driver.settle(), driver.hop
    count = skip * hop + _FRAMES * hop
    results = []
    for number, start in enumerate(range(0, len(frequencies), batch)):
        exact = [Exact(f) for f in frequencies[start : start + batch]]
        first = _FAR if number % 2 else 0
        signals = np.stack([tone(e, first, count) for e in exact])
        # The first frame is the first n with n D >= first.
        frame = -(-first // hop)
        frames = driver.frames(signals, skip, _FRAMES, first_sample=first)
        for e, rows in zip(exact, frames, strict=True):
            turns = np.exp(-2j * np.pi * e.phases((frame + skip) * hop, _FRAMES, hop))
            seen = rows * turns[:, None]
            mean = seen.mean(axis=0)
            results.append(
                ToneResponse(
                    e.cycles, driver.outputs, mean, np.abs(seen - mean).max(axis=0), _FRAMES
                )
            )
    return results


def run_noise(driver, seed):
    """Frames that known white noise on two antennas leaves the analysis bank with."""
    first, count = driver.settle() // 2 + 1, 6
    shape = (2, (first + count) * driver.hop)
    noise = NoiseResponse(
        seed, shape, driver.real, driver.absolute, first, driver.outputs, np.empty(0)
    )
    frames = driver.frames(noise.given().astype(complex), first, count)
    return replace(noise, answer=frames)


def run_synthesis_noise(driver, seed):
    """Samples that known white frames on two antennas leave the synthesis bank with."""
    reach = -(-driver.back.prototype.length // driver.hop)
    count, first = reach + 6, reach // 2
    shape = (2, count, len(driver.outputs))
    noise = NoiseResponse(
        seed, shape, False, driver.absolute, first * driver.hop, driver.outputs, np.empty(0)
    )
    samples = driver.synthesise(noise.given())[:, first * driver.hop :]
    return replace(noise, answer=samples.astype(np.complex128))


def run_pair_tones(driver, frequencies, analysed):
    """Add to tone responses (same frequencies) what the tone is multiplied by through the pair."""
    hop, delay = driver.hop, driver.back.delay
    tail = driver.back.prototype.length
    # Steady once both filters are full: then whole hops, enough for a mean.
    lead = driver.length + tail
    hops = max(4, min(_FRAMES, (1 << 16) // hop))
    count = lead + hops * hop + hop
    batch = max(2, min(8, _HELD // count))
    results = []
    for start in range(0, len(frequencies), batch):
        exact = [Exact(f) for f in frequencies[start : start + batch]]
        frame = (_FAR // hop) * ((start // batch) % 2)
        first = frame * hop
        signals = np.stack([tone(e, first, count) for e in exact])
        out = driver.round_trip(signals, frame)
        # Output s estimates input s - delay: take whole hops from the first s = 0 mod D on.
        low = -(-lead // hop) * hop
        for e, row, known in zip(exact, out, analysed[start : start + batch], strict=True):
            ideal = tone(e, first + low - delay, hops * hop)
            seen = (row[low : low + hops * hop] * ideal.conj()).reshape(hops, hop)
            mean = seen.mean(axis=0)
            results.append(
                ToneResponse(
                    known.frequency,
                    known.channels,
                    known.responses,
                    known.residuals,
                    known.frames,
                    mean,
                    float(np.abs(seen - mean).max()),
                )
            )
    return results
