"""Impulses and white noise through both banks."""

import numpy as np
import scipy.fft

from chanbank.metrics._sweep import Band
from chanbank.metrics.figures import DEFINITIONS, Figure
from chanbank.metrics.report import absent_figure
from chanbank.metrics.system import SystemResponse

__all__ = [
    "frame_bounds",
    "measure_impulses",
    "noise_gain",
    "synthesis_stopband",
    "white_error",
]

# White noise: samples for one estimate; a relative spread of about 1/sqrt of it.
_NOISE = 1 << 18


def measure_impulses(driver, most):
    """The D impulse responses by running impulses, as a `SystemResponse`, and a note how.

    Impulses stand alone where that takes at most `most` samples. Otherwise D of them follow each
    other sample by sample: a bank of M channels answers an impulse only at multiples of M samples
    from it, so that the answers of D <= M neighbours do not meet.
    """
    channels, hop, delay = driver.channels, driver.hop, driver.back.delay
    tail = driver.back.prototype.length
    span = driver.length + tail + channels
    low = -(delay // channels)
    high = max(0, (driver.length + tail - 2 - delay) // channels)
    lags = np.arange(low, high + 1)
    apart = span * hop <= most
    table = np.zeros((hop, len(lags)), np.complex128)
    groups = [[p] for p in range(hop)] if apart else [list(range(hop))]
    batch = max(1, min(8, (1 << 21) // span))
    for start in range(0, len(groups), batch):
        group = groups[start : start + batch]
        # Samples before time 0 are zero in the bank: begin late enough to see negative lags.
        signals = np.zeros((len(group), span), np.complex128)
        for row, places in enumerate(group):
            signals[row, places] = 1.0
        out = driver.round_trip(signals)
        for row, places in enumerate(group):
            for place in places:
                at = place + lags * channels + delay
                inside = (at >= 0) & (at < out.shape[1])
                values = np.where(inside, out[row, np.where(inside, at, 0)], 0.0)
                turned = values * np.exp(-2j * np.pi * ((driver.plan.offset * lags) % 1.0))
                # Output sample s = at has the phase s mod D.
                table[at % hop, np.arange(len(lags))] = turned
    note = (
        f"{hop} impulses run one by one"
        if apart
        else f"{hop} impulses run side by side, their answers told apart by the channel count"
    )
    return SystemResponse(channels, lags, table.real, delay), note


def _noise(driver, shape):
    """Unit-power white noise of random phases (random signs for real samples)."""
    if driver.real:
        return driver.rng.choice([-1.0, 1.0], shape) + 0j
    return np.exp(2j * np.pi * driver.rng.random(shape))


def white_error(driver, least=4):
    """Error power over signal power for white noise, and its standard error, by parts."""
    delay, lead = driver.back.delay, driver.length + driver.back.prototype.length
    size = _NOISE // least
    parts = []
    for _ in range(least):
        signal = _noise(driver, (1, size + 2 * lead))
        sent = signal if not driver.real else signal.real + 0j
        out = driver.round_trip(sent)
        low = lead
        error = out[0, low + delay : low + delay + size] - sent[0, low : low + size]
        parts.append(float(np.mean(np.abs(error) ** 2)))
    parts = np.array(parts)
    return float(parts.mean()), float(parts.std(ddof=1) / np.sqrt(least))


def noise_gain(driver):
    """Power gain of the analysis bank for white noise times that of the synthesis bank."""
    analysis, spread_a = _analysis_gain(driver)
    synthesis, spread_s = _synthesis_gain(driver)
    return analysis * synthesis, float(np.hypot(spread_a, spread_s))


def _analysis_gain(driver):
    """Energy of all frames per unit of input energy, for white noise, by parts."""
    hop, skip = driver.hop, driver.settle()
    count = max(64, _NOISE // 4 // driver.channels)
    weights = mirror_weights(driver)
    parts = []
    for _ in range(4):
        signal = _noise(driver, (1, (skip + count) * hop))
        frames = driver.frames(signal, skip, count)[0]
        power = np.abs(frames) ** 2 @ weights
        parts.append(power.mean() / hop)
    return float(np.mean(parts)), _relative(parts)


def _synthesis_gain(driver):
    """Output power per unit of noise power in each channel."""
    hop, columns = driver.hop, len(driver.outputs)
    tail = -(-driver.back.prototype.length // hop)
    count = max(64, _NOISE // 4 // hop) + 2 * tail
    alone = mirror_weights(driver) == 1
    parts = []
    for _ in range(4):
        noise = np.exp(2j * np.pi * driver.rng.random((count, columns)))
        if driver.real:
            # A channel that is its own mirror image is real up to a fixed phase.
            noise[:, alone] = driver.rng.choice([-1.0, 1.0], (count, int(alone.sum())))
        if driver.absolute:
            noise *= driver.rotation(0, count, np.arange(columns)).conj()
        driver.back.reset()
        fed = noise.astype(driver.dtype)
        fed = fed.T if driver.back.layout == "channels" else fed
        out = driver.back.push(np.ascontiguousarray(fed))
        parts.append(float(np.mean(np.abs(out[tail * hop : -tail * hop]) ** 2)))
    return float(np.mean(parts)), _relative(parts)


def _relative(parts):
    return float(np.std(parts, ddof=1) / np.mean(parts) / np.sqrt(len(parts)))


def mirror_weights(driver):
    """How many of the M channels each output channel stands for: 2 for one of a mirrored pair."""
    if not driver.real:
        return np.ones(len(driver.outputs))
    twice = (2 * (driver.plan.dft_index + driver.plan.exact_offset)) % driver.channels
    return np.where(np.array(twice == 0, bool), 1.0, 2.0)


def frame_bounds(driver):
    """A and B from the bank's answers to impulses at each of the D sample phases.

    With E[k, p](w) = sum_n y_p[n, k] exp(-j w n), y_p the frame-phase answer to an impulse at
    sample p, the bounds are the squares of the extreme singular values of E over w (Boelcskei,
    Hlawatsch and Feichtinger, IEEE Trans. SP 46(12), 1998).
    """
    hop = driver.hop
    count = driver.settle() + 2
    signals = np.zeros((hop, count * hop), np.complex128)
    signals[np.arange(hop), np.arange(hop)] = 1.0
    answers = driver.frames(signals, 0, count)
    if driver.real:
        paired = mirror_weights(driver) == 2
        answers = np.concatenate([answers, answers[..., paired].conj()], axis=-1)
    index = np.arange(count)

    def extremes(cycles, exact=False):
        blocks = np.einsum("wn,pnk->wpk", np.exp(-2j * np.pi * np.outer(cycles, index)), answers)
        if exact:
            values = np.linalg.svd(blocks, compute_uv=False)
            return values[:, -1] ** 2, values[:, 0] ** 2
        values = [np.linalg.eigvalsh(block @ block.conj().T)[[0, -1]] for block in blocks]
        return np.array(values).T

    grid = np.arange(8 * count) / (8 * count)
    scanned = np.concatenate([extremes([w]) for w in grid], axis=1)
    # Eigenvalues are six times as fast; singular values keep the digits of a small A, which
    # vanishes linearly in amplitude at a zero: twelve rounds of four close in on it to 1e-9.
    exact = scanned[0].min() < 1e-6 * scanned[1].max()
    low = _refined(lambda f: extremes(f, exact)[0], grid, scanned[0], 12 if exact else 3)
    high = -_refined(lambda f: -extremes(f)[1], grid, -scanned[1], 3)
    return low, high


def _refined(level, grid, scanned, rounds):
    """The least of a periodic function, from the best few minima of a scan."""
    valleys = np.flatnonzero((scanned <= np.roll(scanned, 1)) & (scanned <= np.roll(scanned, -1)))
    best = np.inf
    for start in valleys[np.argsort(scanned[valleys])[:6]]:
        centre, reach = grid[start], grid[1]
        for _ in range(rounds):
            across = centre + np.linspace(-reach, reach, 9)
            values = level(across)
            centre, reach = across[values.argmin()], reach / 4
            best = min(best, float(values.min()))
    return best


def synthesis_stopband(driver, edge):
    """Largest abs(G)^2 beyond the edge, by noise in one channel.

    N periodic frames in channel k, with N equal lines of random phase, leave the synthesis bank
    as lines at f_k + m / (N D) in proportion to G: one period shows G at every frequency.
    """
    name = "synthesis_stopband"
    if edge >= driver.channels / 2:
        reason = "the stopband edge lies at or beyond half the sample rate"
        return absent_figure(name, reason, 1)
    hop, tail = driver.hop, driver.back.prototype.length
    # An inner channel of a real bank: its mirror image then lies elsewhere, and is taken out by
    # running the frames times 1 and times j.
    column = len(driver.outputs) // 2
    size = scipy.fft.next_fast_len(-(-max(64 * tail, 256 * driver.channels) // hop))
    settle = -(-tail // hop)
    # Equal lines: a weak one would be drowned by the rounding of the others.
    flat = np.exp(2j * np.pi * driver.rng.random(size))
    phases = scipy.fft.ifft(flat) * np.sqrt(size)
    frames = np.resize(phases, size + settle)
    if driver.absolute:
        frames = frames * driver.rotation(0, len(frames), np.array([column]))[:, 0].conj()
    spectra = []
    for factor in (1, 1j):
        fed = np.zeros((size + settle, len(driver.outputs)), driver.dtype)
        fed[:, column] = factor * frames
        fed = np.ascontiguousarray(fed.T) if driver.back.layout == "channels" else fed
        driver.back.reset()
        out = driver.back.push(fed)[settle * hop :].astype(np.complex128)
        spectra.append(out)
    real = driver.real and mirror_weights(driver)[column] == 2
    # Real output is (w + conj(w)) / 2 for frames w, so that 1 and -j times j give w alone.
    wave = 0.5 * (spectra[0] - 1j * spectra[1]) if real else spectra[0]
    lines = np.abs(scipy.fft.fft(wave)) ** 2
    centre = driver.plan.normalised_frequencies[column]
    reference = lines[round(centre * len(lines)) % len(lines)]
    reach = edge / driver.channels
    beyond = Band(centre + reach, centre + 1 - reach, len(lines))
    level = beyond.inside(lines).max() / reference
    noise = min(1.0, driver.epsilon / np.sqrt(level))
    return Figure(
        DEFINITIONS[name], float(10 * np.log10(level)), {}, float(np.hypot(0.01, 8.7 * noise))
    )
