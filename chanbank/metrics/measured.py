"""The report by measurement: tones and noise through the actual banks."""

import numpy as np

from chanbank._blas import one_blas_thread
from chanbank._checks import Integer, Optional, OwnCheck, checked, wrong_type, wrong_value
from chanbank.metrics._drive import Driver
from chanbank.metrics._measured_bank import measure_bank
from chanbank.metrics._measured_channels import measure_channels
from chanbank.metrics._tone_run import run_noise, run_synthesis_noise
from chanbank.metrics.bands import OCCUPIED, occupied_bands
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.report import BankReport, absent_figure

__all__ = ["measured_report"]

_BANK = OwnCheck("a bank of this library", (3, TypeError), ("bank", TypeError))
_CHANNELS = OwnCheck(
    "None or a non-empty sequence of output channels", ("all", TypeError), ([-1], ValueError)
)
_DEFAULT_CHANNELS, _LARGE, _FEW = 8, 1024, 3

# Rounding of a bank lies near one epsilon of the strongest output; a few of them are the floor.
_FLOOR_EPSILONS = 4


@checked(
    analysis=_BANK,
    synthesis=_BANK,
    occupied_bandwidth=OCCUPIED,
    stopband_edge=Optional(OwnCheck("None or a number of 0 or more", (-1.0, ValueError))),
    channels=_CHANNELS,
    max_samples=Integer(1),
    seed=Integer(0),
)
@one_blas_thread
def measured_report(
    analysis,
    synthesis=None,
    *,
    occupied_bandwidth=None,
    stopband_edge=None,
    channels=None,
    max_samples=1 << 28,
    seed=0,
):
    """Every figure of a bank by running tones and noise through it.

    A tone exp(2j pi f t) leaves channel k as H(f - f_k) exp(2j pi (f - f_k) n D); band-limited
    noise of many lines at random phases leaves it with the sum of abs(H)^2 over them. The figures
    are those of `bank_report`, with the same definitions, found without its formulas.

    Parameters
    ----------
    analysis : AnalysisBank
        Or any object with its attributes and methods. Copies of the banks are run, in their own
        dtype, phase and layout, by pushes of random sizes and with several antennas at once; the
        stream in progress on the banks given is not touched.
    synthesis : SynthesisBank, optional
        For the same plan and phase; `analysis` must then return all channels.
    occupied_bandwidth, stopband_edge
        As in `bank_report`.
    channels : sequence of int, optional
        Output channels to test with noise; by default up to 8: the first and last two, the middle
        one and others at random (of more than 1024, the first, the middle one and one at random).
        Every tone is held against every channel.
    max_samples : int, default 2**28
        Most samples for the sweep over all frequencies. A bank that needs more is swept near the
        tested channels only; the figures that need all frequencies then come from noise, with a
        larger uncertainty, or are absent with the reason.
    seed : int, default 0
        Of every random choice: the same seed gives the same report.

    Returns
    -------
    BankReport
        Of method "measured": with the responses to all tones, ``report.tones``, and the
        uncertainty of each figure.

    Raises
    ------
    TypeError, ValueError
        Not a bank, or a parameter of the wrong type or out of range; banks of different plans or
        phases; a synthesis bank with an analysis bank that returns only some channels.

    References
    ----------
    H. Boelcskei, F. Hlawatsch and H. G. Feichtinger, "Frame-theoretic analysis of oversampled
    filter banks", IEEE Trans. Signal Processing 46(12), 3256-3268, 1998 (frame bounds).

    Examples
    --------
    >>> from chanbank import AnalysisBank, ChannelPlan, boxcar_prototype, measured_report
    >>> bank = AnalysisBank(ChannelPlan(8.0, 8, 6), boxcar_prototype(8))
    >>> report = measured_report(bank)
    >>> round(report["scalloping_loss"].worst, 2)
    3.87
    """
    for name in ("plan", "prototype", "dtype", "phase", "layout", "push", "reset"):
        if not hasattr(analysis, name):
            raise wrong_type("analysis", "an analysis bank", analysis)
    if synthesis is not None:
        _check_pair(analysis, synthesis)
    plan = analysis.plan
    widths = occupied_bands(plan, occupied_bandwidth)
    bands = widths / plan.spacing
    edges = plan.oversampling - bands / 2
    if stopband_edge is not None:
        edges = np.full(len(bands), _edge(stopband_edge))
    rng = np.random.default_rng(seed)
    driver = Driver(analysis, synthesis, rng)
    tested = _chosen(channels, driver, rng)

    figures, leakage, tones, notes = measure_channels(driver, tested, bands, edges, max_samples)
    noise = [run_noise(driver, seed)]
    if synthesis is not None:
        noise.append(run_synthesis_noise(driver, seed))
    found, system, tones, more = measure_bank(driver, tones, float(edges.max()), max_samples)
    figures |= found
    for name, definition in DEFINITIONS.items():
        if name not in figures:
            reason = {
                "cost": "counted by formula, not measured",
                "bank": "no synthesis bank given",
            }[definition.scope]
            figures[name] = absent_figure(name, reason, 1)
    return BankReport(
        method="measured",
        plan=plan,
        prototype=analysis.prototype,
        synthesis_prototype=None if synthesis is None else synthesis.prototype,
        channels=driver.outputs[tested],
        occupied_bandwidth=widths,
        stopband_edge=edges,
        figures=figures,
        leakage=leakage,
        system=system,
        tones=tones,
        noise=noise,
        floor_db=20 * np.log10(_FLOOR_EPSILONS * driver.epsilon),
        dtype=driver.dtype.name,
        notes=[*notes, *more, f"{driver.pushed:,} samples pushed, seed {seed}"],
    )


def _edge(value):
    if isinstance(value, bool) or not isinstance(value, (int, float, np.number)):
        raise wrong_type("stopband_edge", "None or a number of 0 or more", value)
    if not 0 <= float(value) < np.inf:
        raise wrong_value("stopband_edge", "None or a number of 0 or more", value)
    return float(value)


def _check_pair(analysis, synthesis):
    for name in ("plan", "prototype", "dtype", "phase", "layout", "delay", "push", "reset"):
        if not hasattr(synthesis, name):
            raise wrong_type("synthesis", "None or a synthesis bank", synthesis)
    for name in ("plan", "phase", "dtype"):
        ours, theirs = getattr(analysis, name), getattr(synthesis, name)
        if ours != theirs:
            raise ValueError(
                f"analysis and synthesis must have the same {name}; got {ours!r} and {theirs!r}"
            )
    if getattr(analysis, "select", None) is not None:
        raise ValueError(
            "analysis must return all channels to be measured with a synthesis bank; "
            f"got select with {len(analysis.select)} of {analysis.plan.output_channels}"
        )


def _chosen(channels, driver, rng):
    """Positions among the bank's outputs of the channels to test."""
    outputs = driver.outputs
    count = len(outputs)
    if channels is None:
        if count <= _DEFAULT_CHANNELS:
            return np.arange(count)
        few = count > _LARGE
        fixed = {0, count // 2} if few else {0, 1, count // 2, count - 2, count - 1}
        rest = [k for k in rng.permutation(count).tolist() if k not in fixed]
        wanted = _FEW if few else _DEFAULT_CHANNELS
        return np.array(sorted(fixed | set(rest[: wanted - len(fixed)])))
    accepted = f"distinct output channels of the bank, from {outputs.min()} to {outputs.max()}"
    if isinstance(channels, (str, bytes)) or not hasattr(channels, "__iter__"):
        raise wrong_type("channels", accepted, channels)
    place = {int(k): at for at, k in enumerate(outputs)}
    rule = Integer()
    wanted = [rule.check("each of channels", k) for k in channels]
    if not wanted or len(set(wanted)) != len(wanted) or any(k not in place for k in wanted):
        raise wrong_value("channels", accepted, channels)
    return np.array([place[k] for k in wanted])
