"""Every picture against a stored one, and what each function does with its arguments.

The stored pictures hold no text, which moves from one Matplotlib to the next. To draw them anew,
after looking at them: CHANBANK_NEW_PICTURES=1 pytest tests/plots
"""

import os
import pathlib
import warnings

import matplotlib as mpl
import numpy as np
import pytest

mpl.use("Agg")

import matplotlib.pyplot as plt
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.testing.compare import compare_images
from matplotlib.text import Text

from chanbank import (
    AnalysisBank,
    ChannelPlan,
    Prototype,
    bank_report,
    boxcar_prototype,
    kaiser_prototype,
    measure_activity,
    measured_report,
    open_recording,
    window_prototype,
    write_sigmf,
)
from chanbank.plots.activity import plot_activity
from chanbank.plots.prototype import plot_channels, plot_prototype
from chanbank.plots.report import plot_distortion, plot_error, plot_leakage
from chanbank.plots.sheet import summary_sheet
from chanbank.plots.tradeoff import plot_tradeoff
from chanbank.search.design import Design
from chanbank.search.result import DesignSearch

STORED = pathlib.Path(__file__).parent / "pictures"

# Root mean square of the difference of pixels, of 255: edges of lines are smoothed a little
# differently from one Matplotlib to the next (1 to 2); a curve moved by a hundredth of the picture
# makes 10 and more.
TOLERANCE = 5.0


@pytest.fixture(scope="module")
def plan():
    return ChannelPlan(1.6e6, 64, 48, center_frequency=158e6)


@pytest.fixture(scope="module")
def prototype():
    return kaiser_prototype(64, stopband_db=70, passband=0.4, stopband=0.7)


@pytest.fixture(scope="module")
def pair(plan):
    h = window_prototype(64, 6, ("kaiser", 7.0))
    return bank_report(plan, h, Prototype(h.taps * 48, 64, pair_delay=h.length - 1))


@pytest.fixture(scope="module")
def real():
    plan = ChannelPlan(96e3, 32, 24, real=True)
    return bank_report(plan, kaiser_prototype(32, stopband_db=60, passband=0.4, stopband=0.8))


@pytest.fixture(scope="module")
def activity(tmp_path_factory):
    """Three calls over noise, one of them in two channels."""
    rng = np.random.default_rng(3)
    count = 60000
    t = np.arange(count)
    x = rng.standard_normal(count) + 1j * rng.standard_normal(count)
    for frequency, start, stop, level in (
        (0.125, 5000, 20000, 3.0),
        (0.25, 0, count, 1.5),
        (-0.28, 30000, 50000, 9.0),
    ):
        fading = 1 + 0.7 * np.sin(2 * np.pi * t[start:stop] / 8000)
        x[start:stop] += level * fading * np.exp(2j * np.pi * frequency * t[start:stop])
    path = tmp_path_factory.mktemp("quay") / "calls"
    write_sigmf(path, (x / 64).astype("complex64"), sample_rate=96e3, center_frequency=156e6)
    plan = ChannelPlan(96e3, 16, 12, center_frequency=156e6)
    bank = AnalysisBank(plan, window_prototype(16, 8, ("kaiser", 7.0)))
    return measure_activity(open_recording(path), bank, block_frames=40)


class Standing:
    """How a design stands to its limits, for a trade-off that is laid out by hand."""

    def __init__(self, passed, margin):
        self.lines = ()
        self.passed, self.margin = passed, margin


@pytest.fixture(scope="module")
def search():
    designs = []
    for method, taps, cost, latency, memory, margin, passed in (
        ("kaiser", 8, 60, 1.6e-3, 9e3, 3.0, True),
        ("kaiser", 12, 80, 1.2e-3, 1.4e4, 12.0, True),
        ("equiripple", 7, 52, 1.8e-3, 8e3, 2.0, True),
        ("equiripple", 9, 66, 2.3e-3, 1e4, 1.0, True),
        ("energy", 6, 45, 1.5e-3, 7e3, -8.0, False),
    ):
        plan, h = ChannelPlan(16e3, 16, 12), window_prototype(16, taps, "hann")
        lines = () if passed else (Failing(),)
        check = Standing(passed, margin)
        check.lines = lines
        designs.append(Design(method, plan, h, None, None, check, cost, latency, memory, margin))
    return DesignSearch(None, designs)


class Failing:
    name, passed, margin, value, reason = "total_leakage", False, -8.0, None, "made up"
    low, high = None, -60.0


DRAWN = {
    "response": lambda f, ax: plot_prototype(f("prototype"), ax=ax, plan=f("plan")),
    "taps": lambda f, ax: plot_prototype(f("prototype"), ax=ax, view="taps"),
    "channels": lambda f, ax: plot_channels(f("plan"), f("prototype"), ax=ax),
    "leakage": lambda f, ax: plot_leakage(f("real"), ax=ax),
    "distortion": lambda f, ax: plot_distortion(f("pair"), ax=ax),
    "error": lambda f, ax: plot_error(f("real"), ax=ax),
    "activity": lambda f, ax: plot_activity(f("activity"), ax=ax),
    "tradeoff": lambda f, ax: plot_tradeoff(f("search"), ax=ax),
}


def drawn(name, request, path):
    """Draw a picture in Axes of fixed place, take all text out, and save it."""
    figure = Figure(figsize=(4.0, 2.6), dpi=60)
    FigureCanvasAgg(figure)
    ax = figure.add_axes((0.04, 0.04, 0.8, 0.92))
    with mpl.rc_context({"font.family": "DejaVu Sans"}):
        returned = DRAWN[name](request.getfixturevalue, ax)
    assert returned is ax
    for part in figure.findobj(Text):
        part.set_visible(False)
    for axes in figure.axes:
        if axes.get_legend():
            axes.get_legend().set_visible(False)
    figure.savefig(path)
    return ax


@pytest.mark.parametrize("name", DRAWN)
def test_picture(name, request, tmp_path):
    stored, made = STORED / f"{name}.png", tmp_path / f"{name}.png"
    if os.environ.get("CHANBANK_NEW_PICTURES"):
        STORED.mkdir(exist_ok=True)
        drawn(name, request, stored)
    drawn(name, request, made)
    assert compare_images(str(stored), str(made), tol=TOLERANCE) is None


def test_the_comparison_sees_a_curve_that_moved(request, tmp_path):
    made = tmp_path / "distortion.png"
    ax = drawn("distortion", request, made)
    for line in ax.lines:
        line.set_ydata(np.asarray(line.get_ydata()) + 3.0)
    ax.figure.savefig(made)
    assert compare_images(str(STORED / "distortion.png"), str(made), tol=TOLERANCE) is not None


@pytest.mark.parametrize("name", DRAWN)
def test_axes_are_labelled_with_units_and_nothing_is_shown(name, request, monkeypatch):
    def shown(*args, **kwargs):
        raise AssertionError("show was called")

    monkeypatch.setattr(plt, "show", shown)
    before = dict(mpl.rcParams)
    own = DRAWN[name](request.getfixturevalue, None)
    try:
        assert dict(mpl.rcParams) == before
        assert own.get_title(loc="left")
        for label in (own.get_xlabel(), own.get_ylabel()):
            assert label
        assert "(" in own.get_ylabel() or "(" in own.get_xlabel() or name == "leakage"
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            own.figure.canvas.draw()
    finally:
        plt.close(own.figure)


def test_lines_differ_in_pattern_not_only_in_colour(pair, plan, prototype):
    for ax in (plot_distortion(pair), plot_channels(plan, prototype)):
        looks = {}
        for line in ax.lines:
            looks.setdefault(line.get_color(), set()).add(str(line.get_linestyle()))
        patterns = [next(iter(styles)) for styles in looks.values()]
        assert all(len(styles) == 1 for styles in looks.values())
        dashes = {str(line._dash_pattern) for line in ax.lines}
        assert len(dashes) == len(looks) > 1, patterns
        plt.close(ax.figure)


def test_the_drawn_numbers_are_the_reports(real, pair):
    ax = plot_error(real, figures=["image_rejection", "total_leakage"])
    image = ax.lines[0].get_ydata()
    assert np.allclose(np.asarray(image)[1:-1], -real["image_rejection"].values[1:-1])
    assert np.isnan(np.asarray(image)[[0, -1]]).all()  # absent: no mark, no zero
    plt.close(ax.figure)
    ax = plot_leakage(real, channels=[3, 4, 9])
    held = np.asarray(ax.images[0].get_array())
    assert held.shape == (3, 3)
    assert held[0, 1] == pytest.approx(real.leakage.matrix_db([3], [4])[0, 0])
    plt.close(ax.figure)
    ax = plot_distortion(pair)
    sums = np.asarray(ax.lines[2].get_ydata())
    assert sums.max() == pytest.approx(10 * np.log10(pair.system.alias_sum.max()))
    plt.close(ax.figure)


def test_a_measured_report_can_be_drawn():
    plan = ChannelPlan(16.0, 16, 12, real=True)
    done = measured_report(AnalysisBank(plan, window_prototype(16, 4, "hann")), channels=[2, 5])
    for ax in (plot_leakage(done), plot_error(done)):
        ax.figure.canvas.draw()
        plt.close(ax.figure)
    summary_sheet(done)


def test_activity_says_which_channels_it_draws(activity):
    for most, words in ((16, "activity of 16"), (8, "active of 16"), (2, "the 2 busiest")):
        ax = plot_activity(activity, most=most)
        assert words in ax.get_title(loc="left"), most
        plt.close(ax.figure)
    ax = plot_activity(activity, most=3, threshold_db=500.0)
    assert "none active" in ax.get_title(loc="left")
    plt.close(ax.figure)


@pytest.mark.parametrize("ending", ["pdf", "png"])
def test_summary_sheet_is_one_page_whole_or_nothing(pair, tmp_path, ending):
    path = tmp_path / f"bank.{ending}"
    page = summary_sheet(pair, path, title="Grauwiek")
    assert page.get_size_inches().tolist() == pytest.approx([8.27, 11.69])
    first = path.read_bytes()
    assert first.startswith({"pdf": b"%PDF", "png": b"\x89PNG"}[ending])
    if ending == "pdf":
        assert first.count(b"/Type /Page\n") + first.count(b"/Type /Page ") == 1
    with pytest.raises(FileExistsError, match="overwrite=True"):
        summary_sheet(pair, path)
    assert path.read_bytes() == first
    summary_sheet(pair, path, title="Grauwiek", overwrite=True)
    assert path.read_bytes() == first  # the same report gives the same bytes
    with pytest.raises(FileNotFoundError):
        summary_sheet(pair, tmp_path / "none" / f"bank.{ending}")
    assert [p.name for p in tmp_path.iterdir()] == [path.name]


def test_summary_sheet_text_stays_inside_the_page(pair, real):
    plain = bank_report(ChannelPlan(1.0, 8, 8), boxcar_prototype(8))
    for report in (pair, real, plain):
        page = summary_sheet(report)
        FigureCanvasAgg(page)
        page.canvas.draw()
        box = page.bbox
        for text in page.findobj(Text):
            if text.get_text().strip() and text.get_visible():
                extent = text.get_window_extent()
                inside = extent.x1 <= box.x1 + 1 and extent.y0 >= -1 and extent.x0 >= -1
                # Ticks beyond the limits of their axis are made but not drawn.
                if not inside and not _is_tick(text, page):
                    raise AssertionError(f"{text.get_text()!r} leaves the page: {extent}")


def _is_tick(text, page):
    axes = [ax for ax in page.findobj(lambda part: hasattr(part, "get_xticklabels"))]
    return any(
        text in (*ax.get_xticklabels(which="both"), *ax.get_yticklabels(which="both"))
        for ax in axes
    )


@pytest.mark.parametrize(
    "call, error, words",
    [
        (lambda r, p: plot_distortion(bank_report(r.plan, r.prototype)), ValueError, "synthesis"),
        (lambda r, p: plot_error(r, figures=["speed"]), ValueError, "figures must be some of"),
        (lambda r, p: plot_error(r, figures=["image_rejection"]), ValueError, "absent"),
        (lambda r, p: plot_leakage(r, channels=[99]), ValueError, "channels must be"),
        (lambda r, p: plot_prototype(p, ax=3), TypeError, "ax must be None or Matplotlib Axes"),
        (lambda r, p: plot_channels(r.plan, p, channel=64), ValueError, "channel must be below 64"),
        (lambda r, p: summary_sheet(r, "bank.svg"), ValueError, "ends in .pdf or .png"),
    ],
)
def test_bad_arguments(pair, prototype, call, error, words):
    with pytest.raises(error, match=words):
        call(pair, prototype)
    assert not plt.get_fignums()
