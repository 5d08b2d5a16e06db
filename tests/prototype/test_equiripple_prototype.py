"""Minimax prototypes: alternation, SciPy, the figures asked for, and a million taps."""

import numpy as np
import pytest
import scipy.signal

from chanbank.prototype.equiripple import equiripple_prototype
from chanbank.prototype.kaiser import kaiser_prototype
from chanbank.prototype.lengths import length_estimates


def amplitude(h, f):
    """The real amplitude of a symmetric prototype, by the direct sum."""
    position = np.arange(h.length) - (h.length - 1) / 2
    return np.cos(2 * np.pi / h.channels * np.outer(f, position)) @ h.taps


def peaks(h, f):
    """Local extremes of the amplitude on a dense grid, both ends included."""
    a = amplitude(h, f)
    inner = (np.abs(a[1:-1]) >= np.abs(a[:-2])) & (np.abs(a[1:-1]) > np.abs(a[2:]))
    return np.concatenate([a[:1], a[1:-1][inner], a[-1:]])


def alternations(values, least):
    """Longest run of values of alternating sign, each at least `least` in size."""
    count, last = 0, 0.0
    for value in values:
        if abs(value) >= least and np.sign(value) != np.sign(last):
            count, last = count + 1, value
    return count


def grid(low, high, h):
    """A hundred points a lobe and more at the edges, where lobes are narrow."""
    lobes = max(4, (high - low) * h.length / h.channels)
    even = np.linspace(low, high, int(60 * lobes))
    near = low + (high - low) * np.linspace(0, 1, 400) ** 2 / lobes * 4
    return np.unique(np.concatenate([even, near[near < high], high - near[near < high] + low]))


@pytest.mark.parametrize("channels", [7, 16])
@pytest.mark.parametrize("branch", [3, 5, 6])
@pytest.mark.parametrize("weight", [0.1, 1.0, 30.0])
@pytest.mark.parametrize("slope_db", [0.0, 6.0])
def test_alternation_proves_the_minimum(channels, branch, weight, slope_db):
    """Chebyshev's alternation theorem: (L + 1)//2 + 1 equal alternating errors, and no larger."""
    h = equiripple_prototype(
        channels, branch, passband=0.35, stopband=0.95, weight=weight, slope_db=slope_db
    )
    inside, beyond = grid(0, 0.35, h), grid(0.95, channels / 2, h)
    a = amplitude(h, inside)
    middle = (a.max() + a.min()) / 2
    knee = np.sinh(np.pi * 0.475 / channels) ** 2
    shape = lambda f: np.sin(np.pi * f / channels) ** 2 + knee  # noqa: E731
    level = (shape(0.95) / shape(beyond)) ** (slope_db / 20 / np.log10(2) / 2)
    delta = (a.max() - a.min()) / 2 / weight
    errors = np.concatenate([(a - middle) / weight, amplitude(h, beyond) / level]) / delta
    # 60 points a lobe miss a peak by (pi/60)^2/2 at most, 0.0014 of it.
    assert np.abs(errors).max() < 1.002
    assert alternations(errors, 0.997) >= (h.length + 1) // 2 + 1


@pytest.mark.parametrize("channels,branch", [(8, 8), (5, 9), (1, 28), (16, 12)])
def test_no_taller_than_scipy_remez(channels, branch):
    """scipy.signal.remez at lengths where it is sound."""
    h = equiripple_prototype(channels, branch, passband=0.25, stopband=0.45)
    other = scipy.signal.remez(
        h.length,
        [0, 0.25 / channels, 0.45 / channels, 0.5],
        [1, 0],
        fs=1.0,
        grid_density=64,
    )
    # Its grid of 64 points a lobe lets the true peaks stand (pi/128)^2/2 higher, and levels others
    # than the true peaks; the taps follow by a few per cent of the ripple.
    assert np.abs(h.taps * other.sum() - other).max() < 0.05 * 10 ** (-h.design["stopband_db"] / 20)
    worst = np.abs(
        scipy.signal.freqz(other, worN=2 * np.pi * grid(0.45, channels / 2, h) / channels)[1]
    )
    ours = np.abs(amplitude(h, grid(0.45, channels / 2, h)))
    assert ours.max() * abs(other.sum()) < worst.max() * 1.001


def test_big_bank_is_true_to_its_ripples():
    """M = 4096, P = 12, 80 dB from 1.0 spacing: all peaks equal, deeper than Kaiser's."""
    kaiser = kaiser_prototype(4096, stopband_db=80, passband=0.5, stopband=1.0, taps_per_branch=12)
    h = equiripple_prototype(4096, 12, passband=0.55, stopband=1.0, stopband_db=80)
    assert h.length == 49152
    size = 16 * h.length
    spectrum = np.abs(np.fft.rfft(h.taps, size))
    f = np.arange(len(spectrum)) * 4096 / size
    inner = (spectrum[1:-1] >= spectrum[:-2]) & (spectrum[1:-1] > spectrum[2:])
    # Beyond a few lobes from the edge, where 16 points a lobe resolve a peak to 0.04 dB and a
    # parabola to a thousandth; nearer, by the direct sum.
    where = np.flatnonzero(inner & (f[1:-1] > 1.5)) + 1
    left, mid, right = spectrum[where - 1], spectrum[where], spectrum[where + 1]
    heights = mid - (left - right) ** 2 / (8 * (left - 2 * mid + right))
    near = peaks(h, 1.0 + 0.5 * np.linspace(0, 1, 1500) ** 2)[:-1]
    assert len(heights) > 24500
    every = 20 * np.log10(np.concatenate([heights, np.abs(near[np.abs(near) > 1e-5])]))
    assert np.ptp(every) < 0.05
    assert every.max() == pytest.approx(-80, abs=0.01)
    # The alternation theorem once more: stopband peaks and passband ripples make L/2 + 1.
    inside = amplitude(h, np.linspace(0, 0.55, 400))
    ripple = (inside.max() - inside.min()) / 2
    passes = alternations(inside - (inside.max() + inside.min()) / 2, 0.99 * ripple)
    assert len(heights) + np.sum(np.abs(near) > 0.99e-4) + passes >= h.length // 2 + 1
    same = equiripple_prototype(
        4096, 12, passband=0.5, stopband=1.0, passband_db=kaiser.design["passband_db"]
    )
    assert same.design["passband_db"] <= kaiser.design["passband_db"] * (1 + 1e-6)
    assert same.design["stopband_db"] > kaiser.design["stopband_db"] + 5


def test_a_million_taps():
    h = equiripple_prototype(131072, 8, passband=0.4, stopband=1.0, stopband_db=70)
    assert h.length == 1048576
    spectrum = np.abs(np.fft.rfft(h.taps, 8 * h.length))
    f = np.arange(len(spectrum)) / 64
    assert 20 * np.log10(spectrum[f >= 1.0].max()) == pytest.approx(-70, abs=0.01)
    assert h.design["peak_spread_db"] < 0.05


@pytest.mark.parametrize("channels,branch", [(64, 8), (99, 7), (256, 20), (1024, 2)])
def test_closed_form_agrees_with_the_exchange(channels, branch, monkeypatch):
    """Both methods on the same task, where both work."""
    edges = dict(passband=0.4, stopband=0.7)
    closed = equiripple_prototype(channels, branch, **edges)
    if closed.length <= 1024:
        monkeypatch.setattr("chanbank.prototype._ripple_task._DIRECT", 4096)
        direct = equiripple_prototype(channels, branch, **edges)
        # The exchange levels its ripples to 1e-4 or so.
        height = 10 ** (-direct.design["stopband_db"] / 20)
        assert np.abs(closed.taps - direct.taps).max() < 1e-3 * height
    assert closed.design["peak_spread_db"] < 0.05


@pytest.mark.parametrize("slope_db", [3.0, 6.0, 12.0])
def test_sloped_stopband_falls_as_stated(slope_db):
    h = equiripple_prototype(512, 8, passband=0.3, stopband=0.9, slope_db=slope_db)
    heights = {}
    for octave in (2, 4, 8, 16, 32):
        heights[octave] = np.abs(amplitude(h, grid(octave, octave * 1.2, h))).max()
    for octave in (4, 8, 16):
        fall = 20 * np.log10(heights[octave] / heights[2 * octave])
        # sinh(pi a/M) and the sine of the frequency bend the law by less than this.
        assert fall == pytest.approx(slope_db, abs=0.1 * slope_db)
    flat = equiripple_prototype(512, 8, passband=0.3, stopband=0.9)
    assert h.design["stopband_db"] < flat.design["stopband_db"]


def test_a_slope_is_what_lowers_the_aliases():
    """Ripples of a flat stopband add up over all aliases: 10 log10 of their number above one."""
    channels, hop = 256, 192
    r = np.arange(1, hop // 2) * channels / hop
    sums = {}
    for slope_db in (0.0, 6.0):
        h = equiripple_prototype(channels, 8, passband=0.4, stopband=14 / 15, slope_db=slope_db)
        wanted = np.linspace(-0.4, 0.4, 9)
        aliases = sum((h.response(wanted + x)).__abs__() ** 2 for x in np.concatenate([r, -r]))
        sums[slope_db] = 10 * np.log10(aliases.max())
    assert sums[6.0] < sums[0.0] - 6


def test_weighted_and_free_bands():
    """Bands of their own: the alternation theorem with the stated relief between them."""
    bands = [(0.93, 1.73, 1.0), (2.27, 3.07, 3.0), (3.6, 8.0, 1.0)]
    h = equiripple_prototype(16, 6, passband=0.4, stopband=bands)
    tops = [np.abs(amplitude(h, grid(low, high, h))).max() * w for low, high, w in bands]
    assert max(tops) / min(tops) < 1.01
    everywhere = equiripple_prototype(
        16, 6, passband=0.4, stopband=[(0.93, 1.73), (1.7301, 3.07, 3.0), (3.0701, 8.0)]
    )
    assert tops[0] < np.abs(amplitude(everywhere, grid(0.93, 1.73, everywhere))).max() * 0.95
    gap = np.abs(amplitude(h, grid(1.73, 2.27, h))).max()
    assert tops[0] < gap <= 101 * tops[0]


def test_bands_of_a_long_prototype():
    long = equiripple_prototype(2048, 6, passband=0.4, stopband=[(0.93, 1.73), (2.27, 1024.0)])
    short = equiripple_prototype(64, 6, passband=0.4, stopband=[(0.93, 1.73), (2.27, 32.0)])
    for low, high in ((0.93, 1.73), (2.27, 20.0)):
        reached = np.abs(amplitude(long, grid(low, high, long))).max()
        # A stretched solution, with M0 = 133 against 64: near, not equal.
        assert 20 * np.log10(reached) == pytest.approx(-short.design["stopband_db"], abs=0.5)


@pytest.mark.parametrize("channels", [64, 1024])
def test_shortest_that_meets_both_figures(channels):
    figures = dict(passband=0.4, stopband=1.0, passband_db=0.2, stopband_db=50)
    h = equiripple_prototype(channels, **figures)
    assert h.design["passband_db"] <= 0.2 * (1 + 1e-5)
    assert h.design["stopband_db"] >= 50 - 1e-3
    estimate = length_estimates(channels, **figures)["herrmann-rabiner-chan"]
    # Herrmann, Rabiner and Chan, Bell Syst. Tech. J. 52(6), 1973: within 10 %.
    assert h.length == pytest.approx(estimate, rel=0.1)
    kaiser = kaiser_prototype(channels, passband=0.4, stopband=1.0, passband_db=0.2, stopband_db=50)
    assert h.length < kaiser.length


@pytest.mark.parametrize("channels,branch", [(4096, 12), (8, 5)])
def test_a_fixed_figure_is_kept(channels, branch):
    by_stop = equiripple_prototype(channels, branch, passband=0.6, stopband=1.0, stopband_db=55)
    assert by_stop.design["stopband_db"] == pytest.approx(55, abs=1e-3)
    by_pass = equiripple_prototype(channels, branch, passband=0.6, stopband=1.0, passband_db=0.3)
    assert by_pass.design["passband_db"] == pytest.approx(0.3, rel=1e-3)


@pytest.mark.parametrize("length", [1, 2, 3, 4, 5])
def test_a_few_taps(length):
    h = equiripple_prototype(1, length, passband=0.15, stopband=0.4)
    assert h.length == length
    assert h.taps.sum() == pytest.approx(1)
    assert np.abs(h.taps - h.taps[::-1]).max() < 1e-15


@pytest.mark.parametrize(
    "kwargs,words",
    [
        (dict(passband=1.0, stopband=0.9), "passband 1, stopband 0.9"),
        (dict(passband=0.4, stopband=8.0), "below channels / 2"),
        (dict(passband=0.4, stopband=float("nan")), "stopband must be"),
        (dict(passband=0.4, stopband=0.9, weight=2, stopband_db=50), "weight"),
        (dict(passband=0.4, stopband=[(0.9, 2.0), (1.5, 3.0)]), r"\(1.5, 3\) after 2"),
        (dict(passband=0.4, stopband=[]), "stopband must be"),
        (dict(passband=0.4, stopband=[(0.9, 8.0)], slope_db=6), "slope_db"),
        (dict(passband=0.4, stopband=[(0.9, 8.0, -1.0)]), "weights above 0"),
        (dict(passband=0.4, stopband=1.0, slope_db=-1), "slope_db must be"),
        (dict(passband=0.4, stopband=0.9, stopband_db=200), "stopband_db must be"),
        (
            dict(passband=0.4, stopband=0.9, stopband_db=90, passband_db=0.01),
            "taps_per_branch [0-9]+ would",
        ),
    ],
)
def test_bad_input_is_named(kwargs, words):
    with pytest.raises(ValueError, match=words):
        equiripple_prototype(16, 4, **kwargs)


def test_more_joint_rules():
    with pytest.raises(ValueError, match="taps_per_branch None"):
        equiripple_prototype(16, passband=0.4, stopband=1.0, stopband_db=50)
    with pytest.raises(ValueError, match="at most about"):
        equiripple_prototype(4096, 60, passband=0.4, stopband=1.0)
    with pytest.raises(TypeError, match="stopband must be"):
        equiripple_prototype(16, 4, passband=0.4, stopband="wide")
