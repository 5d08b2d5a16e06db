"""Least stopband energy: eigenvectors, Slepian sequences, SciPy's designs."""

import numpy as np
import pytest
import scipy.linalg
import scipy.signal

from chanbank.prototype.energy import energy_prototype
from chanbank.prototype.equiripple import equiripple_prototype


def band_matrix(length, channels, low, high):
    """2/M integral from low to high of cos(2 pi f d/M), the energy of the band as a form."""
    gap = np.subtract.outer(np.arange(length), np.arange(length))
    part = lambda f: 2 * f / channels * np.sinc(2 * f * gap / channels)  # noqa: E731
    return part(high) - part(low)


def passband_matrix(length, channels, passband):
    """2/M integral from 0 to passband of (A(f) - A(0))^2, by quadrature."""
    x, w = np.polynomial.legendre.leggauss(120)
    f, w = passband * (x + 1) / 2, passband * w / 2
    position = np.arange(length) - (length - 1) / 2
    rows = np.cos(2 * np.pi / channels * np.outer(f, position)) - 1
    return 2 / channels * (rows * w[:, None]).T @ rows


def smallest_symmetric(form):
    """The symmetric eigenvector of the least eigenvalue, sum 1."""
    vectors = scipy.linalg.eigh(form)[1]
    symmetric = [v for v in vectors.T if abs(v - v[::-1]).max() < 1e-6 * abs(v).max()]
    return symmetric[0] / symmetric[0].sum()


@pytest.mark.parametrize("channels,branch,stopband", [(8, 2, 1.0), (5, 3, 0.7), (4, 3, 0.6)])
def test_equals_the_eigenvector_without_passband(channels, branch, stopband):
    h = energy_prototype(channels, branch, stopband=stopband)
    form = band_matrix(channels * branch, channels, stopband, channels / 2)
    assert np.abs(h.taps - smallest_symmetric(form)).max() < 1e-10


@pytest.mark.parametrize("channels,branch,stopband", [(8, 2, 1.0), (5, 3, 0.7), (4, 3, 0.6)])
@pytest.mark.parametrize("weight", [0.3, 10.0])
def test_equals_the_eigenvector_with_passband(channels, branch, stopband, weight):
    """P. P. Vaidyanathan and T. Q. Nguyen, IEEE Trans. Circuits and Systems 34(1), 1987."""
    h = energy_prototype(channels, branch, stopband=stopband, passband=0.3, passband_weight=weight)
    length = channels * branch
    form = band_matrix(length, channels, stopband, channels / 2)
    form = form + weight * passband_matrix(length, channels, 0.3)
    assert np.abs(h.taps - smallest_symmetric(form)).max() < 1e-10


@pytest.mark.parametrize("channels,branch,stopband", [(64, 4, 0.8), (512, 4, 0.8), (2048, 3, 1.0)])
def test_slepian_sequence_of_scipy(channels, branch, stopband):
    """scipy.signal.windows.dpss."""
    h = energy_prototype(channels, branch, stopband=stopband)
    other = scipy.signal.windows.dpss(h.length, branch * stopband)
    # Above 600 taps the shape is that of 600 taps: equal to the square of one over it.
    tolerance = 1e-12 if h.length <= 600 else 2e-5
    assert np.abs(h.taps / h.taps.max() - other / other.max()).max() < tolerance


def stop_energy(taps, channels, stopband):
    """Share of the energy beyond the edge, in extended precision."""
    taps = np.asarray(taps, dtype=np.longdouble)
    gap = np.arange(1, len(taps), dtype=np.longdouble)
    turn = 4 * np.arctan(np.longdouble(1))
    full = np.correlate(taps, taps, "full")[len(taps) - 1 :]
    edge = np.longdouble(stopband)
    inside = 2 * edge / channels * full[0]
    inside += 2 * (full[1:] * np.sin(2 * turn * edge * gap / channels) / (turn * gap)).sum()
    return float(1 - inside / full[0])


def test_reported_energy_is_the_true_one():
    for kwargs in (dict(stopband=0.8), dict(stopband=1.0, passband=0.4)):
        h = energy_prototype(32, 5, **kwargs)
        exact = stop_energy(h.taps, 32, kwargs["stopband"])
        assert h.design["stopband_energy_db"] == pytest.approx(10 * np.log10(exact), abs=0.01)


def test_no_other_design_lets_less_through():
    """scipy.signal.firls and firwin, and the minimax design, at the same length and edges."""
    channels, branch, passband, stopband = 16, 6, 0.4, 1.0
    h = energy_prototype(channels, branch, passband=passband, stopband=stopband)
    length = h.length
    form = band_matrix(length, channels, stopband, channels / 2)
    form = form + passband_matrix(length, channels, passband)

    def quotient(taps):
        return taps @ form @ taps / (taps @ taps)

    firls = scipy.signal.firls(
        length - 1, [0, passband, stopband, channels / 2], [1, 1, 0, 0], fs=channels
    )
    rivals = [
        np.append(firls, 0.0),
        scipy.signal.firwin(length, 1.4 / channels, window=("kaiser", 7.0)),
        equiripple_prototype(channels, branch, passband=passband, stopband=stopband).taps,
    ]
    for rival in rivals:
        assert quotient(h.taps) < quotient(rival)
    # firls minimises nearly the same sum, at one tap less: the responses lie close together.
    f = np.linspace(0, 4, 81)
    other = np.abs(scipy.signal.freqz(firls, worN=2 * np.pi * f / channels)[1])
    assert np.abs(np.abs(h.response(f)) - other).max() < 3e-3


def test_passband_ripple_is_kept_with_the_least_stopband():
    loose = energy_prototype(64, 8, stopband=1.0, passband=0.4, passband_db=0.5)
    tight = energy_prototype(64, 8, stopband=1.0, passband=0.4, passband_db=0.001)
    assert loose.design["passband_db"] == pytest.approx(0.5, rel=1e-6)
    assert tight.design["passband_db"] == pytest.approx(0.001, rel=1e-6)
    assert loose.design["stopband_energy_db"] < tight.design["stopband_energy_db"] - 20


@pytest.mark.parametrize("passband", [None, 0.4])
def test_length_changes_nothing_but_the_sampling(passband):
    small = energy_prototype(64, 9, stopband=0.9, passband=passband)
    large = energy_prototype(32768, 9, stopband=0.9, passband=passband)
    assert large.length == 294912
    f = np.linspace(0, 4, 41)
    # Amplitudes of filters sampled 64 and 32768 times a channel: equal to the square of 1/64.
    assert np.abs(np.abs(large.response(f)) - np.abs(small.response(f))).max() < 1 / 64**2
    assert large.design["stopband_energy_db"] < small.design["stopband_energy_db"] + 0.2


@pytest.mark.parametrize(
    "kwargs,words",
    [
        (dict(stopband=0.0), "stopband must be"),
        (dict(stopband=8.0), "below channels / 2"),
        (dict(stopband=9.0), "stopband 9"),
        (dict(stopband=0.4, passband=0.5), "passband 0.5, stopband 0.4"),
        (dict(stopband=1.0, passband_db=0.1), "passband must be given"),
        (dict(stopband=1.0, passband=0.4, passband_db=0.1, passband_weight=2), "exclude"),
        (dict(stopband=float("inf")), "stopband must be"),
        (dict(stopband=1.0, passband=-0.4), "passband must be"),
    ],
)
def test_bad_input_is_named(kwargs, words):
    with pytest.raises(ValueError, match=words):
        energy_prototype(16, 4, **kwargs)
