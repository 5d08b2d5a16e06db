"""What a reader gets: tables, HTML, JSON, comparisons and limits."""

import html.parser
import json

import numpy as np
import pytest

from chanbank import (
    AnalysisBank,
    BankReport,
    ChannelPlan,
    Limits,
    Prototype,
    SynthesisBank,
    bank_report,
    boxcar_prototype,
    compare_reports,
    measured_report,
    window_prototype,
)


def pair_report(**plan):
    plan = ChannelPlan("25000/3", 16, 12, center_frequency=1e6, **plan)
    h = window_prototype(16, 6, ("kaiser", 7.0))
    return bank_report(plan, h, Prototype(h.taps * 12, 16, pair_delay=95, label="matched"))


def reports():
    yield pair_report()
    yield pair_report(real=True)
    yield bank_report(ChannelPlan(16.0, 16, 16, offset=0.3, real=True), boxcar_prototype(16))
    plan, h = ChannelPlan(16.0, 16, 12), window_prototype(16, 3, "hann")
    g = Prototype(h.taps * 12, 16, pair_delay=47)
    yield measured_report(AnalysisBank(plan, h), SynthesisBank(plan, g), channels=[2, 5])


@pytest.mark.parametrize("report", list(reports()), ids=["pair", "real", "offset", "measured"])
def test_a_report_survives_json(report):
    text = json.dumps(report.to_dict(), allow_nan=False)
    twin = BankReport.from_dict(json.loads(text))
    assert twin.to_dict() == report.to_dict()
    assert twin.plan == report.plan and twin.prototype == report.prototype
    assert str(twin) == str(report) and twin._repr_html_() == report._repr_html_()
    for name, figure in report.figures.items():
        assert np.array_equal(twin[name].values, figure.values, equal_nan=True), name
        assert twin[name].reasons == figure.reasons, name
    assert twin.verify(report).agreed
    matrix, again = report.leakage.matrix_db(), twin.leakage.matrix_db()
    assert np.array_equal(matrix, again, equal_nan=True)
    held = json.loads(text)["figures"]
    assert all("unit" in figure and figure["definition"] for figure in held.values())


def test_an_exact_zero_is_null_with_a_note():
    """A bare DFT that is its own inverse: the error is exactly zero, -inf dB."""
    plan = ChannelPlan(8.0, 8, 8)
    report = bank_report(plan, boxcar_prototype(8), Prototype(np.ones(8), 8, pair_delay=7))
    assert report.reconstruction_error == -np.inf
    held = report.to_dict()["figures"]["reconstruction_error"]
    assert held["value"] is None and "exactly zero" in held["exact_zeros"]["all"]
    assert "exactly 0" in str(report)
    again = BankReport.from_dict(json.loads(json.dumps(report.to_dict(), allow_nan=False)))
    assert again.reconstruction_error == -np.inf


def test_absent_figures_have_reasons_and_no_number():
    real = pair_report(real=True)
    rejection = real.image_rejection
    assert np.ma.is_masked(rejection[0]) and np.ma.is_masked(rejection[8])
    assert not np.ma.is_masked(rejection[1])
    assert real["image_rejection"].reason(0) == "the channel is its own mirror image"
    assert real["image_rejection"].reason(1) is None
    held = real.to_dict()["figures"]["image_rejection"]
    assert held["values"][0] is None and "own mirror image" in held["absent"]["0"]
    alone = bank_report(ChannelPlan(16.0, 16, 12), window_prototype(16, 3, "hann"))
    assert alone.distortion_ripple is None
    assert alone["distortion_ripple"].reason() == "no synthesis prototype given"
    assert "no synthesis prototype given" in str(alone)
    assert "distortion, amplitude ripple:" not in alone.table(absent=False)
    two = bank_report(ChannelPlan(2.0, 2, 2), boxcar_prototype(2))
    assert "the channel itself" in two["alternate_leakage_ratio"].reason()


def test_the_table_fits_a_terminal_and_names_worst_channels():
    text = str(pair_report(real=True))
    body, absent = text.split("\nAbsent\n")
    assert max(len(line) for line in body.splitlines()) <= 88
    assert "16 channels of 520.833 Hz, hop 12 (oversampling 1.333), 8.33333 kS/s real" in body
    line = next(row for row in body.splitlines() if row.strip().startswith("image rejection"))
    assert line.split()[2] == f"{np.ma.min(pair_report(real=True).image_rejection):.2f}"
    assert "channel 0, 8: the channel is its own mirror image" in absent


def test_html_is_well_formed():
    class Strict(html.parser.HTMLParser):
        def __init__(self):
            super().__init__()
            self.open = []

        def handle_starttag(self, tag, attrs):
            if tag != "br":
                self.open.append(tag)

        def handle_endtag(self, tag):
            assert self.open.pop() == tag

    h = window_prototype(16, 3, "hann")
    odd = Prototype(h.taps, 16, label="<b>&")
    report = bank_report(ChannelPlan(16.0, 16, 12), odd)
    check = Limits(scalloping_loss=1).check(report)
    for page in (report, compare_reports([report], bare_dft=True), check):
        parser = Strict()
        text = page._repr_html_()
        parser.feed(text)
        assert not parser.open
        assert "<b>&" not in text


def test_comparison_marks_the_best_and_counts_the_work():
    plan = ChannelPlan(64.0, 64, 48)
    several = [bank_report(plan, window_prototype(64, p, ("kaiser", 8.0))) for p in (8, 12)]
    both = compare_reports(several, bare_dft=True)
    assert both.labels == ("kaiser 8 x 8", "kaiser 8 x 12", "bare DFT")
    ratios = both["adjacent_leakage_ratio"]
    assert ratios[1] > ratios[0] > ratios[2]
    row = next(r for r in str(both).splitlines() if r.startswith("adjacent leakage ratio"))
    assert row.split()[-3:] == [
        f"{ratios[0]:.2f}",
        f"{ratios[1]:.2f}*",
        f"{ratios[2]:.2f}",
    ]
    work = both["multiplications"] + both["additions"]
    apart = both["converter_multiplications"] + both["converter_additions"]
    assert both.saving == pytest.approx(apart / work)
    assert (both.saving > 20).all()
    named = compare_reports(several, labels=["short", "long"])
    assert named.labels == ("short", "long")
    held = json.dumps(named.to_dict(), allow_nan=False)
    assert json.loads(held)["labels"] == ["short", "long"]
    with pytest.raises(ValueError, match="labels must be one text for each of the 2 reports"):
        compare_reports(several, labels=["one"])


def test_limits_pass_and_fail_with_margins():
    report = pair_report(real=True)
    worst = report["adjacent_leakage_ratio"].worst
    check = Limits(
        adjacent_leakage_ratio=worst - 1,
        passband_ripple=report["passband_ripple"].worst,
        enbw=(0.1, 0.2),
        latency_seconds=1.0,
        image_rejection=(None, 1000.0),
    ).check(report)
    ratio, ripple, noise, latency, image = check.lines
    assert ratio.passed and ratio.margin == pytest.approx(1.0) and ratio.channel in (0, 8)
    assert ripple.passed and ripple.margin == 0.0  # the limit itself is still allowed
    assert not noise.passed and noise.margin == pytest.approx(0.2 - report["enbw"].worst)
    assert latency.passed and image.passed
    assert not check and not check.passed
    assert "1 of 5 limits failed" in str(check)
    assert json.loads(json.dumps(check.to_dict(), allow_nan=False))["passed"] is False
    # A figure the report does not hold cannot pass.
    alone = bank_report(ChannelPlan(16.0, 16, 12), window_prototype(16, 3, "hann"))
    line = Limits(reconstruction_error=-60).check(alone).lines[0]
    assert not line.passed and line.value is None and "no synthesis" in line.reason
    # An exact zero passes every limit.
    plan = ChannelPlan(8.0, 8, 8)
    exact = bank_report(plan, boxcar_prototype(8), Prototype(np.ones(8), 8, pair_delay=7))
    assert Limits(reconstruction_error=-300).check(exact).passed


@pytest.mark.parametrize(
    "limits, error, words",
    [
        ({}, TypeError, "needs at least one"),
        ({"leakage": 3}, TypeError, "has no figure 'leakage'"),
        ({"enbw": 1.0}, ValueError, "enbw must be a pair"),
        ({"scalloping_loss": "low"}, TypeError, "scalloping_loss must be a finite number"),
        ({"scalloping_loss": np.nan}, ValueError, "scalloping_loss must be a finite number"),
        ({"enbw": (2.0, 1.0)}, ValueError, "a pair with low <= high"),
        ({"enbw": (None, None)}, ValueError, "enbw must be"),
    ],
)
def test_bad_limits(limits, error, words):
    with pytest.raises(error, match=words):
        Limits(**limits)


@pytest.mark.parametrize(
    "changes, error, words",
    [
        ({"prototype": boxcar_prototype(4)}, ValueError, "a prototype for 4 and a plan of 8"),
        ({"occupied_bandwidth": [0.5] * 3}, ValueError, "one for each of the 8 output channels"),
        ({"occupied_bandwidth": 2.5}, ValueError, "at most the channel rate, 2 Hz"),
        ({"occupied_bandwidth": np.linspace(0.1, 1, 8) * 1j}, TypeError, "occupied_bandwidth"),
        ({"stopband_edge": -1}, ValueError, "stopband_edge must be"),
    ],
)
def test_bad_report_arguments(changes, error, words):
    arguments = {"plan": ChannelPlan(8.0, 8, 4), "prototype": boxcar_prototype(8)} | changes
    with pytest.raises(error, match=words):
        bank_report(**arguments)


def test_unknown_figures_are_named():
    report = pair_report()
    with pytest.raises(KeyError, match="it has no 'leak'"):
        report["leak"]
    with pytest.raises(AttributeError, match="no attribute or figure 'leak'"):
        report.leak  # noqa: B018
    assert "total_leakage" in dir(report)
    with pytest.raises(ValueError, match="expected 'chanbank report'"):
        BankReport.from_dict({"format": "other"})


def test_many_channels_stay_small():
    """65536 channels: the matrix is held by channel difference, and nothing is M by M."""
    plan = ChannelPlan(65536.0, 65536, 65536, real=True)
    report = bank_report(plan, window_prototype(65536, 1, "hann"))
    assert report.leakage.by_difference.shape == (1, 65536)
    # Real samples: the edge channels hear their one neighbour from both sides.
    ratio = report.adjacent_leakage_ratio
    assert ratio[0] == pytest.approx(ratio[100] - 10 * np.log10(2), abs=1e-6)
    with pytest.raises(ValueError, match="more than 8192"):
        report.leakage.matrix_db()
    assert report.leakage.matrix_db([5], [6]).shape == (1, 1)
