"""One candidate: a bank, its report, and how it stands to the specification."""

from dataclasses import dataclass, field

import numpy as np

from chanbank._checks import Integer, checked
from chanbank.analysis.bank import AnalysisBank
from chanbank.metrics.figures import DEFINITIONS
from chanbank.metrics.limits import Limits
from chanbank.metrics.measured import measured_report
from chanbank.synthesis.bank import SynthesisBank

__all__ = ["Design", "judged"]

# Figures whose margin in dB is a margin of rejection; a ripple's is not.
_LEVELS = {
    name
    for name, definition in DEFINITIONS.items()
    if definition.unit == "dB"
    and name not in ("passband_ripple", "scalloping_loss", "distortion_ripple", "noise_gain")
}

# What a measured report may differ by from the formula: a design must keep its limits in both.
GUARD_DB = 0.1


@dataclass(frozen=True)
class Design:
    """A bank that was tried.

    Attributes
    ----------
    method : str
        How the prototype was designed.
    plan : ChannelPlan
    prototype : Prototype
    synthesis_prototype : Prototype or None
    report : BankReport
        By formula.
    check : LimitCheck
        The report held against the specification's limits.
    cost : float
        Real multiplications and additions per input sample.
    latency : float
        Seconds.
    memory : float
        Bytes of state.
    margin : float
        Smallest distance in dB to any limit on a level (leakage, aliases, reconstruction); where
        no level is limited, the smallest distance to the limits there are.

    Examples
    --------
    See `find_designs`.
    """

    method: str
    plan: object
    prototype: object
    synthesis_prototype: object
    report: object = field(repr=False)
    check: object = field(repr=False)
    cost: float
    latency: float
    memory: float
    margin: float

    @property
    def taps_per_branch(self):
        """P of the analysis prototype."""
        return self.prototype.taps_per_branch

    @property
    def passed(self):
        """Whether every limit is kept, levels by the 0.1 dB that a measurement may differ by."""
        return not self.failures

    @property
    def failures(self):
        """The lines of the check that fail, levels counted with their guard."""
        return tuple(
            line
            for line in self.check.lines
            if not line.passed or (line.name in _LEVELS and line.margin < GUARD_DB)
        )

    @property
    def name(self):
        """Method, M, D and P in a few words."""
        plan = self.plan
        return f"{self.method}, M {plan.channels}, D {plan.hop}, P {self.taps_per_branch}"

    @checked(seed=Integer(0))
    def measured(self, *, seed=0):
        """The limits held against a measured report: tones and noise through the actual bank.

        Parameters
        ----------
        seed : int, default 0
            Of the measurement's random choices.

        Returns
        -------
        LimitCheck
            Of the limits on figures that a measurement has (cost and latency are counted, not
            measured).

        Examples
        --------
        See `find_designs`.
        """
        bounds = {line.name: (line.low, line.high) for line in self.check.lines}
        bounds = {name: pair for name, pair in bounds.items() if DEFINITIONS[name].scope != "cost"}
        bank = AnalysisBank(self.plan, self.prototype)
        back = None
        if self.synthesis_prototype is not None:
            back = SynthesisBank(self.plan, self.synthesis_prototype)
        report = measured_report(
            bank, back, occupied_bandwidth=self.report.occupied_bandwidth, seed=seed
        )
        return Limits(**bounds).check(report)


def judged(method, plan, prototype, synthesis, report, limits):
    """A design with its standing read from its report."""
    check = limits.check(report)
    levels = [line.margin for line in check.lines if line.name in _LEVELS]
    if not levels:
        levels = [line.margin for line in check.lines]
    margins = [-np.inf if margin is None else margin for margin in levels]
    return Design(
        method,
        plan,
        prototype,
        synthesis,
        report,
        check,
        float(report["multiplications"].worst + report["additions"].worst),
        float(report["latency_seconds"].worst),
        float(report["state"].worst),
        float(min(margins)),
    )
