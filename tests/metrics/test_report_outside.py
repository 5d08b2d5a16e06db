"""The report against published tables, closed forms and SciPy's own integrals."""

import numpy as np
import pytest
import scipy.integrate
import scipy.signal
import scipy.special

from chanbank import ChannelPlan, Prototype, bank_report, boxcar_prototype, window_prototype

# F. J. Harris, "On the use of windows for harmonic analysis with the discrete Fourier transform",
# Proc. IEEE 66(1), 1978, Table I (quoted from memory): sidelobe dB, ENBW, -3 dB width, scallop dB,
# -6 dB width. None: a cell known to be misprinted or to describe another window.
HARRIS = {
    "boxcar": (-13, 1.00, 0.89, 3.92, 1.21),
    "bartlett": (-27, 1.33, 1.28, 1.82, 1.78),
    "cosine": (-23, 1.23, 1.20, 2.10, 1.65),
    "hann": (-32, 1.50, 1.44, 1.42, 2.00),
    "hamming": (-43, 1.36, 1.30, 1.78, 1.81),
    "blackman": (-58, 1.73, 1.68, 1.10, 2.35),
    "blackman-harris-3": (None, 1.71, 1.66, 1.13, None),
    "blackman-harris-4": (-92, 2.00, 1.90, 0.83, 2.72),
    ("kaiser", 2.0 * np.pi): (-46, 1.50, 1.43, 1.46, 1.99),
    ("kaiser", 2.5 * np.pi): (-57, 1.65, 1.57, 1.20, 2.20),
    ("kaiser", 3.0 * np.pi): (-69, 1.80, 1.71, 1.02, 2.39),
    ("kaiser", 3.5 * np.pi): (-82, 1.93, 1.83, 0.89, 2.57),
}


@pytest.mark.parametrize("window", HARRIS, ids=str)
def test_published_window_table(window):
    """One tap per branch without a sinc: the bank's channel is the window's transform."""
    h = window_prototype(1024, 1, window, cutoff=0, periodic=True)
    report = bank_report(ChannelPlan(1.0, 1024, 1024), h)
    names = ("highest_sidelobe", "enbw", "bandwidth_3db", "scalloping_loss", "bandwidth_6db")
    # What a table printed in whole dB and hundredths, with its known roundings, can be held to.
    slack = (1.0, 0.01, 0.05, 0.04, 0.06)
    for name, printed, allowed in zip(names, HARRIS[window], slack, strict=True):
        if printed is not None:
            assert report[name].worst == pytest.approx(printed, abs=allowed), name


def test_hann_closed_forms():
    """ENBW 3/2 and scalloping loss 20 log10(3 pi / 8) (many channels), -6 dB width 2."""
    h = window_prototype(1 << 14, 1, "hann", cutoff=0, periodic=True)
    report = bank_report(ChannelPlan(1.0, 1 << 14, 1 << 14), h)
    # The discrete window's transform differs from the continuous one's by some 1/M^2.
    assert report["enbw"].worst == pytest.approx(1.5, rel=1e-12)
    assert report["scalloping_loss"].worst == pytest.approx(20 * np.log10(3 * np.pi / 8), abs=1e-7)
    assert report["bandwidth_6db"].worst == pytest.approx(2.0, abs=1e-7)


@pytest.mark.parametrize(
    "channels, sidelobe, scallop, half",
    # The Dirichlet kernel sin(pi f) / (M sin(pi f / M)), evaluated in double precision; the limits
    # for many channels are the classic -13.26 dB, 3.92 dB and 0.886.
    [
        (8, -12.797, 3.8665, 0.89193),
        (16, -13.147, 3.9084, None),
        (1024, -13.2614, 3.92240, 0.88589),
    ],
)
def test_bare_dft_closed_forms(channels, sidelobe, scallop, half):
    report = bank_report(ChannelPlan(1.0, channels, channels), boxcar_prototype(channels))
    assert report["highest_sidelobe"].worst == pytest.approx(sidelobe, abs=6e-4)
    assert report["scalloping_loss"].worst == pytest.approx(scallop, abs=6e-5)
    if half is not None:
        assert report["bandwidth_3db"].worst == pytest.approx(half, abs=1e-5)
    assert report["enbw"].worst == pytest.approx(1.0, rel=1e-12)


def test_bare_dft_shares_of_white_noise():
    """Own, next and second channel of a bare DFT with channels occupied to the full spacing.

    F(x) = Si(2 pi x) / pi - sin(pi x)^2 / (pi^2 x) gives 9.926 dB and 17.414 dB.
    """
    plan = ChannelPlan(1.0, 8192, 8192)
    report = bank_report(plan, boxcar_prototype(8192), occupied_bandwidth=plan.spacing)

    def share(x):
        return scipy.special.sici(2 * np.pi * x)[0] / np.pi - np.sin(np.pi * x) ** 2 / np.pi**2 / x

    own, near, far = 2 * share(0.5), share(1.5) - share(0.5), share(2.5) - share(1.5)
    assert own == pytest.approx(0.773695, abs=1e-6)
    # The continuous kernel against 8192 channels: relative difference below 1/M.
    assert report.leakage.power(0, 0) == pytest.approx(own, rel=1e-6)
    ratios = report["adjacent_leakage_ratio"].worst, report["alternate_leakage_ratio"].worst
    assert ratios[0] == pytest.approx(10 * np.log10(own / near), abs=1e-4)
    assert ratios[0] == pytest.approx(9.926, abs=1e-3)
    assert ratios[1] == pytest.approx(10 * np.log10(own / far), abs=1e-4)
    assert ratios[1] == pytest.approx(17.414, abs=1e-3)


def response_power(taps, frequency):
    """abs(H)^2 by SciPy at frequencies in cycles per sample."""
    points = 2 * np.pi * np.atleast_1d(np.asarray(frequency, float))
    return np.abs(scipy.signal.freqz(taps, worN=points)[1]) ** 2


def integral(taps, low, high):
    """Integral of abs(H)^2 by SciPy's adaptive quadrature."""
    return scipy.integrate.quad(
        lambda f: response_power(taps, f)[0], low, high, epsabs=0, epsrel=1e-9, limit=400
    )[0]


def random_taps(seed, channels):
    """A lowpass with random errors: asymmetric, not normalised."""
    rng = np.random.default_rng(seed)
    length = int(rng.integers(2 * channels, 5 * channels))
    taps = scipy.signal.firwin(length, 1.0 / channels, window=("kaiser", rng.uniform(3, 8)))
    return 1.7 * taps * (1 + 0.01 * rng.standard_normal(length))


@pytest.mark.parametrize("seed", range(6))
def test_leakage_and_alias_by_quadrature(seed):
    """ACLR as 3GPP TS 36.104 (6.6.2) defines it: mean power in the assigned channel over mean power
    in the adjacent one, each through a filter as wide as the occupied band."""
    rng = np.random.default_rng(100 + seed)
    channels, width = int(rng.integers(5, 13)), float(rng.uniform(0.4, 0.95))
    hop = int(rng.integers(2, channels + 1))
    taps = random_taps(seed, channels)
    plan = ChannelPlan(1.0, channels, hop)
    report = bank_report(plan, Prototype(taps, channels), occupied_bandwidth=width * plan.spacing)
    half = width / channels / 2
    own = integral(taps, -half, half)
    for distance, name in ((1, "adjacent_leakage_ratio"), (2, "alternate_leakage_ratio")):
        there = integral(taps, distance / channels - half, distance / channels + half)
        wanted = 10 * np.log10(own / there)
        assert report[name].values == pytest.approx(np.full(channels, wanted), abs=1e-5)
    others = sum(
        integral(taps, d / channels - half, d / channels + half) for d in range(1, channels)
    )
    assert report["total_leakage"].worst == pytest.approx(10 * np.log10(others / own), abs=1e-5)
    aliases = sum(integral(taps, r / hop - half, r / hop + half) for r in range(1, hop))
    assert report["alias_mean"].worst == pytest.approx(10 * np.log10(aliases / own), abs=1e-5)
    grid = np.linspace(-half, half, 20001)
    folded = sum(response_power(taps, grid + r / hop) for r in range(1, hop))
    worst = 10 * np.log10((folded / response_power(taps, grid)).max())
    # The grid's own error: 20001 points over some ten lobes.
    assert report["alias_worst"].worst == pytest.approx(worst, abs=1e-3)


@pytest.mark.parametrize("offset", [0, 0.5, 0.25])
def test_real_samples_by_quadrature(offset):
    """Bands and mirror images, edge channels included; overlaps of both counted once."""
    channels, width = 8, 0.8
    taps = random_taps(3, channels)
    plan = ChannelPlan(1.0, channels, 6, offset=offset, real=True)
    report = bank_report(plan, Prototype(taps, channels))
    centres = plan.normalised_frequencies
    half = width / channels / 2

    def power(k, j):
        """Channel j's band and image seen from channel k, by steps of a fine comb."""
        size = 40000
        f = (np.arange(size) + 0.5) / size
        away = np.abs((f - centres[j] + 0.5) % 1 - 0.5)
        mirrored = np.abs((f + centres[j] + 0.5) % 1 - 0.5)
        inside = (away <= half) | (mirrored <= half)
        return response_power(taps, f[inside] - centres[k]).sum() / size * channels

    for k in range(len(centres)):
        own = power(k, k)
        for step, name in (
            (-1, "adjacent_leakage_ratio_lower"),
            (1, "adjacent_leakage_ratio_upper"),
        ):
            j = k + step
            if not 0 <= j < len(centres):
                assert np.isnan(report[name].values[k]) and "mirror image" in report[name].reason(k)
                continue
            # A comb of 5000 points a spacing misses some 1e-4 of a band's edges.
            wanted = 10 * np.log10(own / power(k, j))
            assert report[name].values[k] == pytest.approx(wanted, abs=0.02)
        total = sum(power(k, j) for j in range(len(centres)) if j != k)
        wanted = 10 * np.log10(total / own)
        assert report["total_leakage"].values[k] == pytest.approx(wanted, abs=0.02)
        rejection = report["image_rejection"]
        if 2 * centres[k] % 1 == 0:
            assert np.isnan(rejection.values[k]) and "own mirror image" in rejection.reason(k)
            continue
        direct = integral(taps, -half, half)
        image = integral(taps, 2 * centres[k] - half, 2 * centres[k] + half)
        wanted = 10 * np.log10(direct / image)
        assert rejection.values[k] == pytest.approx(wanted, abs=1e-5)


def test_bandwidths_that_differ_by_channel():
    channels = 6
    taps = random_taps(5, channels)
    plan = ChannelPlan(1.0, channels, 4)
    widths = plan.spacing * np.array([0.8, 0.3, 0.8, 0.5, 0.8, 0.3])
    report = bank_report(plan, Prototype(taps, channels), occupied_bandwidth=widths)
    half = widths / 2
    for k in range(channels):
        own = integral(taps, -half[k], half[k])
        leaks = []
        for step in (-1, 1):
            j = (k + step) % channels
            leaks.append(integral(taps, step / channels - half[j], step / channels + half[j]))
        wanted = 10 * np.log10(own / max(leaks))
        assert report["adjacent_leakage_ratio"].values[k] == pytest.approx(wanted, abs=1e-5)
        shown = report.leakage.matrix_db([k], [(k + 1) % channels])[0, 0]
        assert shown == pytest.approx(10 * np.log10(leaks[1] / own), abs=1e-5)
    assert report.leakage.matrix_db().shape == (channels, channels)


# Frequency-sampling prototypes, h[n] = 1 + 2 sum (-1)^k H_k cos(2 pi k n / (K M)): K. W. Martin,
# IEEE Trans. CAS-II 45(8), 1998; M. Bellanger, ICASSP 2001; S. Mirabbasi and K. Martin, IEEE Trans.
# CAS-II 50(8), 2003. With the matched pair at M/D = 2: error for white input, its part that does
# not vary with time, the rest, ripple of T_0 and the largest response beyond one spacing, in dB,
# computed in double precision (Bellanger et al. 2010 print -44 and -65 dB for K = 3 and 4).
SAMPLED = {
    3: ([0.91143783, 0.41143783], -43.43, -53.30, -43.91, 5.9e-2, -32.57),
    4: ([0.97195983, 0.70710678, 0.23514695], -65.20, -67.81, -68.66, 1.1e-2, -39.86),
    5: ([0.99184131, 0.86541624, 0.50105361, 0.12747868], -58.15, -58.41, -70.50, 3.8e-2, -48.24),
    6: (
        [0.99818572, 0.94838678, 0.70710678, 0.31711593, 0.06021021],
        -79.45, -79.57, -95.22, 2.9e-3, -58.13,
    ),
}  # fmt: skip


@pytest.mark.parametrize("overlap", SAMPLED)
def test_published_reconstruction_of_frequency_sampling_pairs(overlap):
    samples, error, steady, varying, ripple, stop = SAMPLED[overlap]
    channels, hop = 64, 32
    n = np.arange(overlap * channels)
    h = 1 + 2 * sum(
        (-1) ** k * value * np.cos(2 * np.pi * k * n / (overlap * channels))
        for k, value in enumerate(samples, 1)
    )
    # Gain set to a mean of 1; the pair is symmetric about K M / 2 each.
    g = h * hop / channels / (h**2).sum()
    report = bank_report(
        ChannelPlan(1.0, channels, hop),
        Prototype(h, channels),
        Prototype(g, channels, pair_delay=overlap * channels),
        stopband_edge=1.0,
    )
    assert report.reconstruction_error == pytest.approx(error, abs=0.006)
    assert report.distortion_ripple == pytest.approx(ripple, rel=0.05)
    assert report["stopband_level"].worst == pytest.approx(stop, abs=0.006)
    assert report.synthesis_stopband == pytest.approx(stop, abs=0.006)
    system = report.system
    mean = system.impulse_responses.mean(axis=0) - (system.lags == 0)
    assert 10 * np.log10((mean**2).sum()) == pytest.approx(steady, abs=0.006)
    spread = report.impulse_spread
    assert spread == pytest.approx(varying, abs=0.006)
    # White input sees the mean over frequency of what tones see.
    assert 10 * np.log10(system.error.mean()) == pytest.approx(error, abs=0.006)


@pytest.mark.parametrize(
    "taps_per_branch, error, stop",
    # Root-raised-cosine with roll-off 1, the standard closed form (from memory), cut to K symbol
    # periods; error of the matched pair at M/D = 2 and largest response beyond one channel,
    # computed in double precision.
    [
        (4, -45.6, -27.9),
        (6, -53.6, -31.5),
        (8, -58.9, -34.0),
        (12, -66.1, -37.5),
        (16, -71.0, -40.0),
    ],
)
def test_raised_cosine_pair_has_no_distortion_but_its_truncation(taps_per_branch, error, stop):
    channels, hop = 64, 32
    length = taps_per_branch * channels
    t = (np.arange(length) - (length - 1) / 2) / channels
    h = 4 * np.cos(2 * np.pi * t) / (np.pi * (1 - (4 * t) ** 2))
    g = h * hop / channels / (h**2).sum()
    report = bank_report(
        ChannelPlan(1.0, channels, hop),
        Prototype(h, channels),
        Prototype(g, channels, pair_delay=length - 1),
        stopband_edge=1.0,
    )
    assert report.reconstruction_error == pytest.approx(error, abs=0.06)
    assert report["stopband_level"].worst == pytest.approx(stop, abs=0.06)
    # Nyquist: h * g vanishes at multiples of M, so that T_0 is flat but for the truncation.
    both = np.convolve(h, g) * channels / hop
    at = length - 1 + channels * np.arange(-taps_per_branch + 1, taps_per_branch)
    lags = both[at]
    frequencies = np.arange(512) / 512
    known = np.abs(np.exp(-2j * np.pi * np.outer(frequencies, at / channels)) @ lags)
    ripple = 20 * np.log10(known.max() / known.min())
    assert report.distortion_ripple == pytest.approx(ripple, abs=1e-4)
    assert report.distortion_ripple < 0.2


def test_frame_bounds_of_windows():
    """Closed forms for a window of one tap per branch: Hann A/M = 1/2, B/M = 1 at M/D = 2, tight
    at M/D = 4 with A = 3 M R / 8; the sine window is tight at M/D = 2 (Daubechies, Grossmann and
    Meyer, J. Math. Phys. 27, 1986)."""
    n = np.arange(64)
    for h, hop, low, high in (
        (0.5 - 0.5 * np.cos(2 * np.pi * n / 64), 32, 0.5, 1.0),
        (0.5 - 0.5 * np.cos(2 * np.pi * n / 64), 16, 1.5, 1.5),
        (np.sin(np.pi * n / 64), 32, 1.0, 1.0),
    ):
        report = bank_report(ChannelPlan(1.0, 64, hop), Prototype(h, 64))
        assert report.frame_lower == pytest.approx(64 * low, rel=1e-9)
        assert report.frame_upper == pytest.approx(64 * high, rel=1e-9)


def test_cost_of_published_structures():
    """Real operations per complex sample from the split-radix count 4 M log2 M - 6 M + 8
    (Duhamel and Hollmann 1984) and the polyphase structure (Crochiere and Rabiner 1983)."""
    for channels, taps, hop, bank, converters in (
        (8, 8, 8, 37.0, 302),
        (64, 16, 32, 160.25, 8572),
        (1024, 8, 1024, 64.0, 38910),
        (4096, 16, 4096, 104.0, 286718),
    ):
        h = Prototype(np.ones(channels * taps), channels)
        report = bank_report(ChannelPlan(1.0, channels, hop), h)
        assert report.multiplications + report.additions == pytest.approx(bank, abs=0.05)
        total = report.converter_multiplications + report.converter_additions
        assert total == pytest.approx(converters, abs=0.6)


def test_a_window_that_falls_exactly_to_zero_and_a_bank_of_one_channel():
    one = bank_report(ChannelPlan(1.0, 1, 1), Prototype([1.0], 1))
    assert (
        one.total_leakage is None and one["total_leakage"].reason() == "there is no other channel"
    )
    assert one.bandwidth_3db is None and "never falls" in one["bandwidth_3db"].reason()
    assert "hop 1" in one["alias_worst"].reason()
    with pytest.raises(ValueError, match="passes its channel's centre"):
        bank_report(ChannelPlan(1.0, 2, 2), Prototype([1.0, -1.0], 2))


def test_deep_stopbands_keep_their_digits():
    """A sidelobe near -248 dB: the closed transform of an eleven-term cosine window (Heinzel,
    Ruediger and Schilling 2002 print -248.4 dB)."""
    h = window_prototype(2048, 1, "hft248d", cutoff=0, periodic=True)
    report = bank_report(ChannelPlan(1.0, 2048, 2048), h)
    assert report["highest_sidelobe"].worst == pytest.approx(-248.4, abs=0.15)
