"""Windowed-sinc prototypes: published window tables, closed forms, SciPy, bad input."""

import json

import numpy as np
import pytest
import scipy.optimize
import scipy.signal

from chanbank.prototype.window import window_prototype

POINTS = 1024


def window_alone(window, periodic=True, points=POINTS):
    """The window as a one-branch prototype: the windowed DFT."""
    return window_prototype(points, 1, window, cutoff=0, periodic=periodic)


def level(h, f):
    """abs(H) in dB at f bins, from the definition."""
    i = np.arange(h.length)
    turn = np.exp(-2j * np.pi * np.outer(np.atleast_1d(f), i) / h.channels)
    return 20 * np.log10(np.abs(turn @ h.taps) / abs(h.taps.sum()))


def width(h, down):
    return 2 * scipy.optimize.brentq(lambda f: level(h, f)[0] + down, 1e-6, 5.0)


def figures_of_merit(h):
    w = h.taps
    spectrum = np.abs(np.fft.rfft(w, 32 * h.length))[: 64 * 32]
    first_rise = int(np.argmax(np.diff(spectrum) > 0))
    top = first_rise + int(np.argmax(spectrum[first_rise:]))
    fine = np.linspace((top - 1) / 32, (top + 1) / 32, 201)
    scallop = -level(h, 0.5)[0]
    enbw = h.length * (w**2).sum() / w.sum() ** 2
    overlap = [
        100 * (w[: h.length - lag] * w[lag:]).sum() / (w**2).sum()
        for lag in (h.length // 4, h.length // 2)
    ]
    return {
        "hsl": level(h, fine).max(),
        "cg": w.sum() / (h.length * w.max()),
        "enbw": enbw,
        "w3": width(h, 10 * np.log10(2)),
        "scallop": scallop,
        "wcpl": scallop + 10 * np.log10(enbw),
        "w6": width(h, 20 * np.log10(2)),
        "oc75": overlap[0],
        "oc50": overlap[1],
    }


COLUMNS = ("hsl", "cg", "enbw", "w3", "scallop", "wcpl", "w6", "oc75", "oc50")

# F. J. Harris, Proc. IEEE 66(1), 1978, Table I; the table rests on memory except the sidelobe,
# scallop loss and ENBW of Rectangle, Hann, Hamming and 3-term Blackman-Harris. None marks cells
# that do not describe the printed coefficients (misprints, corrected by Nuttall, IEEE Trans. ASSP
# 29, 1981) or, for Dolph-Chebyshev, depend on the number of points.
HARRIS = {
    "boxcar": (-13, 1.00, 1.00, 0.89, 3.92, 3.92, 1.21, 75.0, 50.0),
    "bartlett": (-27, 0.50, 1.33, 1.28, 1.82, 3.07, 1.78, 71.9, 25.0),
    "cosine": (-23, 0.64, 1.23, 1.20, 2.10, 3.01, 1.65, 75.5, 31.8),
    "hann": (-32, 0.50, 1.50, 1.44, 1.42, 3.18, 2.00, 65.9, 16.7),
    "hamming": (-43, 0.54, 1.36, 1.30, None, 3.10, 1.81, 70.7, 23.5),
    "blackman": (-58, 0.42, 1.73, 1.68, 1.10, 3.47, None, 56.7, 9.0),
    "blackman-harris-3": (None, 0.42, 1.71, 1.66, 1.13, 3.45, None, 57.2, 9.6),
    "blackman-harris-4": (-92, 0.36, 2.00, 1.90, 0.83, 3.85, None, 46.0, 3.8),
    ("kaiser", 2.0 * np.pi): (-46, 0.49, 1.50, 1.43, 1.46, 3.20, 1.99, 65.7, 16.9),
    ("kaiser", 2.5 * np.pi): (-57, 0.44, 1.65, 1.57, 1.20, 3.38, 2.20, 59.5, 11.2),
    ("kaiser", 3.0 * np.pi): (-69, 0.40, 1.80, 1.71, 1.02, 3.56, 2.39, 53.9, 7.4),
    ("kaiser", 3.5 * np.pi): (-82, 0.37, 1.93, 1.83, 0.89, 3.74, 2.57, 48.8, 4.8),
    ("dolph-chebyshev", 50): (-50, 0.53, 1.39, 1.33, 1.70, 3.12, 1.85, 69.6, 22.3),
    ("dolph-chebyshev", 60): (-60, 0.48, 1.51, 1.44, 1.44, 3.23, 2.01, 64.7, 16.3),
    ("dolph-chebyshev", 70): (-70, 0.45, None, 1.55, 1.25, 3.35, 2.17, 60.2, 11.9),
    ("dolph-chebyshev", 80): (-80, 0.42, None, 1.65, 1.10, 3.48, 2.31, 55.9, 8.7),
}
# Half a unit of the last printed digit and the printed table's own rounding along the way.
HARRIS_TOLERANCE = (1.0, 0.01, 0.01, 0.05, 0.04, 0.04, 0.05, 0.6, 0.6)

# Computed independently in double precision at 1024 points (no publication behind these digits).
COMPUTED = {
    "boxcar": (-13.26, 1.0000, 1.0000, 0.8859, 3.922, 3.922, 1.2067, 75.00, 50.00),
    "bartlett": (-26.52, 0.5000, 1.3333, 1.2757, 1.824, 3.074, 1.7718, 71.87, 25.00),
    "hann": (-31.47, 0.5000, 1.5000, 1.4406, 1.424, 3.185, 2.0000, 65.92, 16.67),
    "hamming": (-42.67, 0.5400, 1.3628, 1.3030, 1.751, 3.096, 1.8152, 70.69, 23.38),
    "blackman": (-58.11, 0.4200, 1.7268, 1.6437, 1.099, 3.471, 2.2988, 56.67, 8.96),
    "exact-blackman": (-68.23, 0.4266, 1.6937, 1.6087, 1.150, 3.438, 2.2540, 57.76, 10.00),
    "blackman-harris-3": (-70.83, 0.4232, 1.7085, 1.6235, 1.129, 3.455, 2.2740, 57.23, 9.55),
    "blackman-harris-4": (-92.01, 0.3588, 2.0044, 1.8994, 0.826, 3.845, 2.6664, 46.00, 3.76),
    ("kaiser", 2.0 * np.pi): (-45.85, 0.4892, 1.4963, 1.4294, 1.453, 3.203, 1.9935, 65.66, 16.90),
    ("kaiser", 2.5 * np.pi): (-57.56, 0.4396, 1.6519, 1.5728, 1.201, 3.381, 2.1994, 59.53, 11.16),
    ("kaiser", 3.0 * np.pi): (-69.62, 0.4025, 1.7952, 1.7053, 1.023, 3.564, 2.3892, 53.92, 7.35),
    ("kaiser", 3.5 * np.pi): (-81.92, 0.3735, 1.9284, 1.8289, 0.890, 3.742, 2.5658, 48.83, 4.84),
    ("dolph-chebyshev", 50): (-50.00, 0.5253, 1.3965, 1.3291, 1.684, 3.134, 1.8536, 69.31, 21.78),
    ("dolph-chebyshev", 80): (-80.00, 0.4141, 1.7430, 1.6549, 1.087, 3.500, 2.3194, 55.86, 8.66),
}


@pytest.mark.parametrize("window", list(HARRIS), ids=str)
def test_figures_of_merit_match_the_published_table(window):
    """Harris 1978, Table I."""
    found = figures_of_merit(window_alone(window, periodic=window[0] != "dolph-chebyshev"))
    for name, printed, tolerance in zip(COLUMNS, HARRIS[window], HARRIS_TOLERANCE, strict=True):
        if printed is not None:
            assert found[name] == pytest.approx(printed, abs=tolerance), name


@pytest.mark.parametrize("window", list(COMPUTED), ids=str)
def test_figures_of_merit_match_an_independent_computation(window):
    found = figures_of_merit(window_alone(window, periodic=window[0] != "dolph-chebyshev"))
    # A unit of the last digit given: other codings of the periodic form differ by less.
    for name, value, digit in zip(
        COLUMNS,
        COMPUTED[window],
        (0.01, 1e-4, 1e-4, 1e-4, 1e-3, 1e-3, 1e-4, 0.01, 0.01),
        strict=True,
    ):
        assert found[name] == pytest.approx(value, abs=digit), name


# G. Heinzel, A. Ruediger, R. Schilling, 2002, appendices C and D (figures from memory): highest
# sidelobe dB, ENBW bins, width at -3.000 dB, largest departure within half a bin dB, first null.
# hft169d: the printed coefficients give -167.88 dB where the text quotes -169.5.
HEINZEL = {
    "sft3f": (-31.72, 3.1681, 3.1502, 0.0082, 3),
    "sft4f": (-44.73, 3.7970, 3.7618, 0.0041, 4),
    "sft5f": (-57.26, 4.3412, 4.2910, 0.0025, 5),
    "sft3m": (-44.23, 2.9452, 2.9183, 0.0115, 3),
    "sft4m": (-66.55, 3.3868, 3.3451, 0.0067, 4),
    "sft5m": (-89.87, 3.8852, 3.8340, 0.0039, 5),
    "hft70": (-70.45, 3.4129, 3.3720, 0.0065, 4),
    "hft95": (-95.01, 3.8112, 3.7590, 0.0044, 5),
    "hft90d": (-90.22, 3.8832, 3.8320, 0.0039, 5),
    "hft116d": (-116.80, 4.2186, 4.1579, 0.0028, 6),
    "hft144d": (-144.05, 4.5386, 4.4697, 0.0021, 7),
    "hft169d": (-167.88, 4.8347, 4.7588, 0.0017, 8),
    "hft196d": (-196.21, 5.1134, 5.0308, 0.0013, 9),
    "hft223d": (-222.99, 5.3888, 5.3000, 0.0011, 10),
    "hft248d": (-248.39, 5.6512, 5.5567, 0.0009, 11),
    "nuttall3": (-46.74, 1.9444, 1.8496, 0.8630, 3),
    "nuttall3a": (-64.19, 1.7721, 1.6828, 1.0453, 3),
    "nuttall3b": (-71.48, 1.7037, 1.6162, 1.1352, 3),
    "nuttall4": (-60.95, 2.3100, 2.1884, 0.6184, 4),
    "nuttall4a": (-82.60, 2.1253, 2.0123, 0.7321, 4),
    "nuttall4b": (-93.32, 2.0212, 1.9122, 0.8118, 4),
    "nuttall4c": (-98.17, 1.9761, 1.8687, 0.8506, 4),
    "blackman-harris-4": (-92.01, 2.0044, 1.8962, 0.8256, 4),
    "flat-top-5": (-93.03, 3.7702, 3.7210, 0.0098, 5),
}


@pytest.mark.parametrize("name", list(HEINZEL))
def test_flat_top_and_minimum_sidelobe_windows(name):
    """Heinzel, Ruediger and Schilling 2002."""
    sidelobe, enbw, width3, flat, null = HEINZEL[name]
    h = window_alone(name)
    beyond = np.concatenate([np.linspace(null, null + 12, 1201), np.linspace(null + 12, 40, 561)])
    coarse = level(h, beyond)
    top = beyond[np.argmax(coarse)]
    fine = np.linspace(top - 0.02, top + 0.02, 81)
    # 1024 points against the limit of many: the spectrum's repetitions add a few thousandths.
    assert level(h, fine[fine >= null]).max() == pytest.approx(sidelobe, abs=0.05)
    assert h.length * (h.taps**2).sum() == pytest.approx(enbw, abs=6e-5)
    assert width(h, 3.0) == pytest.approx(width3, abs=2e-4)
    inside = level(h, np.linspace(0, 0.5, 101))
    # The flat-top five-term row gives the scallop at half a bin only.
    departure = abs(inside[-1]) if name == "flat-top-5" else np.abs(inside).max()
    assert departure == pytest.approx(flat, abs=6e-5)
    # At its first null the sum cancels to rounding: 1e-16 over the taps' own sum.
    assert level(h, null)[0] < -270


def test_names_are_read_in_any_case():
    assert np.array_equal(window_alone("HFT95").taps, window_alone("hft95").taps)


def test_hann_closed_forms():
    """Exact values of the Hann window (elementary)."""
    found = figures_of_merit(window_alone("hann"))
    # The sums are exact; only the discrete main lobe differs from the continuous one, by 1/N^2.
    assert found["enbw"] == pytest.approx(1.5, rel=1e-13)
    assert found["oc50"] == pytest.approx(100 / 6, abs=1e-4)
    assert found["oc75"] == pytest.approx(100 * (0.5 + 1 / (2 * np.pi)), abs=1e-3)
    assert found["scallop"] == pytest.approx(-20 * np.log10(8 / (3 * np.pi)), abs=1e-5)


@pytest.mark.parametrize("length", [16, 31, 64])
@pytest.mark.parametrize("sidelobe_db", [50, 80])
def test_dolph_chebyshev_closed_form(length, sidelobe_db):
    """C. L. Dolph, Proc. IRE 34(6), 1946: W(f) = T_(N-1)(x0 cos(pi f/N)) / T_(N-1)(x0)."""
    h = window_prototype(length, 1, ("dolph-chebyshev", sidelobe_db), cutoff=0)
    order = length - 1
    top = np.cosh(np.arccosh(10 ** (sidelobe_db / 20)) / order)
    f = np.linspace(0, length / 2, 97)
    x = top * np.cos(np.pi * f / length)
    inside = np.cos(order * np.arccos(np.clip(x, -1, 1)))
    outside = np.cosh(order * np.arccosh(np.maximum(x, 1)))
    expected = np.where(x > 1, outside, inside) / 10 ** (sidelobe_db / 20)
    amplitude = (h.response(f) * np.exp(2j * np.pi * f * h.delay / length)).real
    # SciPy computes the taps from samples of this polynomial: rounding over N terms.
    assert np.abs(amplitude - expected).max() < 1e-13 * length


@pytest.mark.parametrize("alpha", [2.0, 3.0])
def test_kaiser_spectrum_closed_form(alpha):
    """J. F. Kaiser 1974: sinh(q)/q over sinh(beta)/beta, q^2 = beta^2 - (pi f)^2."""
    beta = np.pi * alpha
    h = window_prototype(4096, 1, ("kaiser-bessel", beta), cutoff=0)
    f = np.linspace(0, 6, 61)
    q = np.sqrt(beta**2 - (np.pi * f * (4095 / 4096)) ** 2 + 0j)
    expected = (np.sinh(q) / q).real / (np.sinh(beta) / beta)
    amplitude = (h.response(f) * np.exp(2j * np.pi * f * h.delay / 4096)).real
    # The sum over taps and the integral differ by the window's step at its ends, 1/(N I0(beta)).
    assert np.abs(amplitude - expected).max() < 1.0 / 4096


@pytest.mark.parametrize("length,nw", [(24, 2.5), (33, 4.0)])
def test_slepian_window_is_the_eigenvector_of_most_concentration(length, nw):
    """D. Slepian, Bell Syst. Tech. J. 57(5), 1978: eigenvectors of sin(2 pi W d)/(pi d)."""
    h = window_prototype(length, 1, ("slepian", nw), cutoff=0)
    gap = np.subtract.outer(np.arange(length), np.arange(length))
    kernel = 2 * nw / length * np.sinc(2 * nw / length * gap)
    assert kernel @ h.taps == pytest.approx(
        h.taps * np.linalg.eigvalsh(kernel)[-1], abs=1e-14 * length
    )


@pytest.mark.parametrize("window", ["hann", ("kaiser", 9.0), ("chebwin", 70), "blackmanharris"])
@pytest.mark.parametrize("channels,branch,cutoff", [(16, 8, 0.5), (15, 5, 0.7), (1, 31, 0.2)])
def test_equals_scipy_firwin(window, channels, branch, cutoff):
    """scipy.signal.firwin: the same windowed sinc."""
    h = window_prototype(channels, branch, window, cutoff=cutoff)
    reference = scipy.signal.firwin(channels * branch, 2 * cutoff / channels, window=window)
    assert np.abs(h.taps - reference).max() < 1e-15


@pytest.mark.parametrize(
    "window",
    [
        *("barthann", "bartlett", "blackman", "blackmanharris", "bohman", "boxcar", "cosine"),
        *("flattop", "hamming", "hann", "lanczos", "nuttall", "parzen", "triang", "tukey"),
        *("taylor", ("exponential", None, 40.0), ("gaussian", 20.0), ("dpss", 3.0)),
        *(("general_cosine", [0.5, 0.5]), ("general_gaussian", 1.5, 20.0)),
        *(("general_hamming", 0.6), ("kaiser_bessel_derived", 6.0), 7.5, ("tukey", 0.3)),
    ],
    ids=str,
)
def test_every_scipy_window_is_reached(window):
    h = window_prototype(16, 8, window)
    assert h.length == 128
    assert h.taps.sum() == pytest.approx(1.0, rel=1e-14)
    assert np.abs(h.taps - h.taps[::-1]).max() < 1e-15
    sinc = np.sinc((np.arange(128) - 63.5) / 16)
    weights = scipy.signal.get_window(window, 128, fftbins=False)
    assert h.taps == pytest.approx(weights * sinc / (weights * sinc).sum(), abs=1e-15)
    json.dumps(h.design)


def test_periodic_form_overlap_adds_to_a_constant():
    """Constant overlap-add of the periodic Hann window at half its length; elementary."""
    h = window_prototype(64, 1, "hann", cutoff=0, periodic=True)
    assert h.taps[:32] + h.taps[32:] == pytest.approx(np.full(32, 2 / 64), abs=1e-16)
    symmetric = window_prototype(64, 1, "hann", cutoff=0).taps
    assert np.ptp(symmetric[:32] + symmetric[32:]) > 1e-4


def test_windows_of_ones_own():
    own = np.hanning(32)
    h = window_prototype(8, 4, own)
    own[:] = 0
    assert np.array_equal(h.taps, window_prototype(8, 4, np.hanning(32)).taps)


@pytest.mark.parametrize(
    "call,exception,words",
    [
        (lambda: window_prototype(16, 4, None), TypeError, "window must be"),
        (lambda: window_prototype(16, 4, True), TypeError, "window must be"),
        (lambda: window_prototype(16, 4, "no such"), ValueError, "no such"),
        (lambda: window_prototype(16, 4, ("kaiser",)), ValueError, "kaiser"),
        (lambda: window_prototype(16, 4, np.ones(63)), ValueError, "64 numbers"),
        (lambda: window_prototype(16, 4, np.full(64, np.nan)), ValueError, "finite"),
        (lambda: window_prototype(16, 4, np.zeros(64)), ValueError, "sum to zero"),
        (lambda: window_prototype(16, 4, ("kaiser", np.nan)), ValueError, "finite"),
        (lambda: window_prototype(16, 4, "hann", cutoff=9.0), ValueError, "9 > 8"),
        (lambda: window_prototype(16, 4, "hann", cutoff=-0.1), ValueError, "cutoff"),
        (lambda: window_prototype(16, 4, "hann", cutoff=np.nan), ValueError, "cutoff"),
        (lambda: window_prototype(16, 0, "hann"), ValueError, "taps_per_branch"),
        (lambda: window_prototype(0, 4, "hann"), ValueError, "channels"),
        (lambda: window_prototype(16, 4, "hann", periodic=1), TypeError, "periodic"),
    ],
)
def test_bad_input_is_named(call, exception, words):
    with pytest.raises(exception, match=words):
        call()
