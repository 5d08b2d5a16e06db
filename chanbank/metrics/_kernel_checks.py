"""Measured tones and noise held against the coefficients, channel by channel, frame by frame."""

from dataclasses import dataclass
from fractions import Fraction

import numpy as np

from chanbank.metrics._spectrum import complex_comb

__all__ = ["Comparison", "kernel_checks"]

# Rounding of one output is near eps (abs(H) + rms of H over channels + norm(h)): a fold of P
# products, a DFT of log2 M stages whose error spreads over all channels, and taps rounded once.
# The mean over frames shares what is systematic, single frames reach further; a pair adds both
# banks' share.
_MEAN_EPSILONS, _FRAME_EPSILONS, _PAIR_EPSILONS, _NOISE_EPSILONS = 8.0, 16.0, 24.0, 24.0
_DOUBLE = float(np.finfo(float).eps)


@dataclass(frozen=True)
class Comparison:
    """One line of a verification.

    Attributes
    ----------
    what : str
        Name of a figure, or of a check of tones.
    compared : int
        Values compared.
    difference : float
        The largest difference found, in `unit`.
    allowed : float
        What was allowed there.
    unit : str
    at : str
        Where it was found.
    agreed : bool
    """

    what: str
    compared: int
    difference: float
    allowed: float
    unit: str
    at: str
    agreed: bool


def kernel_checks(measured, known):
    """Lines for all that `measured` has run, against the coefficients of `known`."""
    lines = []
    if measured.tones:
        lines += _compare_tones(measured, known)
    for noise in measured.noise:
        if len(noise.shape) == 2:
            lines.append(_noise_line("noise frames", measured, known, noise, _expected_frames))
        elif known.synthesis_prototype is not None:
            lines.append(_noise_line("noise samples", measured, known, noise, _expected_samples))
    return lines


def _compare_tones(measured, known):
    """Responses of every tone in every channel and frame against the coefficients."""
    plan = known.plan
    epsilon = float(np.finfo(np.dtype(measured.dtype)).eps)
    taps = known.prototype.taps
    spread = float(np.sqrt((taps**2).sum()))
    checks = {
        "tone responses": [0, 0.0, 1.0, ""],
        "tone frames": [0, 0.0, 1.0, ""],
        "tones through the pair": [0, 0.0, 1.0, ""],
        "pair samples": [0, 0.0, 1.0, ""],
    }

    def note(what, differences, allowed, place):
        entry = checks[what]
        entry[0] += len(differences)
        at = int(np.argmax(differences / allowed))
        if differences[at] / allowed[at] >= entry[1] / entry[2]:
            entry[1:] = [float(differences[at]), float(allowed[at]), place(at)]

    for tone in measured.tones:
        index = plan.dft_index[tone.channels]
        # Exact until the last: the tone in spacings from the nearest centre, -1/2 to 1/2.
        spacings = Fraction(tone.frequency) * plan.channels - plan.exact_offset
        nearest = round(spacings)
        shift = float(spacings - nearest)
        every = next(complex_comb(taps, plan.channels, plan.channels, [shift]))[1]
        every = every[0]
        predicted = every[(nearest - index) % plan.channels]
        level = np.abs(predicted) + np.sqrt(np.mean(np.abs(every) ** 2)) + spread
        if plan.real:
            # A real tone brings its mirror image, which leaves only with cosine and sine together.
            mirrored = -spacings - 2 * plan.exact_offset
            turned = float(mirrored - round(mirrored))
            other = next(complex_comb(taps, plan.channels, plan.channels, [turned]))[1][0]
            level += np.abs(other[(round(mirrored) - index) % plan.channels])
        # A loud channel leaves spurs of a fraction of an epsilon: the DFT's constants are rounded.
        level += np.abs(every).max() / _MEAN_EPSILONS
        # The prediction itself: phases of up to P turns in double precision.
        own = 4 * _DOUBLE * known.prototype.taps_per_branch * np.abs(taps).sum()
        scale = epsilon * level + own / _MEAN_EPSILONS

        def place(at, tone=tone):
            return f"channel {int(tone.channels[at])}, tone {tone.frequency:.9g} cycles/sample"

        note("tone responses", np.abs(tone.responses - predicted), _MEAN_EPSILONS * scale, place)
        note("tone frames", tone.residuals, _FRAME_EPSILONS * scale, place)
        if tone.pair is None or known.system is None:
            continue
        expected = known.system.responses([shift % 1.0])[:, 0]
        gain = 1.0
        if known["noise_gain"].present:
            gain = max(1.0, 10 ** (float(known["noise_gain"].values) / 20))
        allowed = _PAIR_EPSILONS * epsilon * gain * (1 + np.abs(expected).max())

        def phase(at, tone=tone):
            return f"output phase {at}, tone {tone.frequency:.9g} cycles/sample"

        full = np.full(len(expected), allowed)
        note("tones through the pair", np.abs(tone.pair - expected), full, phase)
        note("pair samples", np.array([tone.pair_residual]), full[:1], phase)
    return [
        Comparison(what, count, difference, allowed, "amplitude", at, difference <= allowed)
        for what, (count, difference, allowed, at) in checks.items()
        if count
    ]


def _noise_line(what, measured, known, noise, expect):
    """White noise through a bank against the double-precision sum over the coefficients.

    Noise is as loud in every channel, so that the floor is eps norm(h) everywhere: a single tap
    off by a thousandth of the largest stands out at any number of channels.
    """
    expected, scale, branches = expect(known, noise)
    differences = np.abs(noise.answer - expected)
    epsilon = _NOISE_EPSILONS * float(np.finfo(np.dtype(measured.dtype)).eps)
    # The prediction's own phases, of up to P turns, are rounded to double precision.
    allowed = (epsilon + 4 * _DOUBLE * branches) * scale
    place = np.unravel_index(differences.argmax(), differences.shape)
    largest = float(differences[place])
    at = f"antenna {place[0]}, sample {noise.first + place[1]}"
    if len(place) == 3:
        channel = int(noise.channels[place[2]])
        at = f"channel {channel}, antenna {place[0]}, frame {noise.first + place[1]}"
    return Comparison(what, differences.size, largest, allowed, "amplitude", at, largest <= allowed)


def _expected_frames(known, noise):
    """The frames, what one of them is loud on the average, and the taps per branch."""
    plan, taps = known.plan, known.prototype.taps
    channels, branches = plan.channels, known.prototype.taps_per_branch
    size = branches * channels
    weights = np.zeros(size, np.complex128)
    weights[: len(taps)] = taps
    turn = float(plan.exact_offset % channels)
    weights *= np.exp(2j * np.pi * (turn * np.arange(size) / channels))
    samples = np.pad(noise.given(), [(0, 0), (size, 0)])
    bins = plan.dft_index[noise.channels]
    expected = np.empty(noise.answer.shape, np.complex128)
    for frame in range(expected.shape[1]):
        newest = size + (noise.first + frame) * plan.hop
        window = samples[:, newest - size + 1 : newest + 1][:, ::-1] * weights
        folded = window.reshape(len(samples), branches, channels).sum(axis=1)
        expected[:, frame] = (np.fft.ifft(folded, axis=1) * channels)[:, bins]
    return expected, float(np.sqrt((taps**2).sum())), branches


def _expected_samples(known, noise):
    """z[s] = sum_n g[s - nD] sum_k y[n, k] exp(2j pi f_k (s - delay)), real parts for real plans,
    what a sample is loud on the average, and the taps per branch."""
    plan, g, delay = known.plan, known.synthesis_prototype, known.system.pair_delay
    channels, hop, turn = plan.channels, plan.hop, plan.exact_offset / plan.channels
    frames = noise.given()
    stop = noise.first + noise.answer.shape[1]
    samples = np.arange(noise.first, stop) - delay
    bins = plan.dft_index[noise.channels]
    weights = np.ones(len(bins))
    if plan.real:
        twice = 2 * plan.normalised_frequencies[noise.channels]
        weights[twice != np.round(twice)] = 2.0
    turned = np.exp(2j * np.pi * np.array([float((turn * int(s)) % 1) for s in samples]))
    expected = np.zeros(noise.answer.shape, np.complex128)
    for n in range(frames.shape[1]):
        low, high = max(noise.first, n * hop), min(stop, n * hop + g.length)
        if high <= low:
            continue
        full = np.zeros((len(frames), channels), np.complex128)
        full[:, bins] = frames[:, n] * weights
        wave = np.fft.ifft(full, axis=1) * channels
        place = slice(low - noise.first, high - noise.first)
        # With frame phase the frame's own time is the origin.
        origin = 0 if noise.absolute else n * hop
        column = (samples[place] - origin) % channels
        late = turned[place] * np.exp(-2j * np.pi * float((turn * origin) % 1))
        expected[:, place] += wave[:, column] * late * g.taps[low - n * hop : high - n * hop]
    if plan.real:
        expected = expected.real + 0j
    loud = float(np.sqrt((g.taps**2).sum() * channels / hop * weights.max()))
    return expected, loud, g.taps_per_branch
