"""The report: every figure of a bank, whichever way it was found."""

import numpy as np

from chanbank._checks import Boolean, OwnCheck, Real, checked
from chanbank.metrics.figures import DEFINITIONS, Figure

__all__ = ["BankReport"]


class BankReport:
    """What a bank leaks, aliases and costs; made by `bank_report` or `measured_report`.

    Every figure is there by name: ``report["total_leakage"]`` is a `Figure` with its definition,
    values, reasons for what is absent and uncertainty; ``report.total_leakage`` is only the value
    (a float or None) or the values (an array over channels, masked where absent).

    Attributes
    ----------
    method : str
        "formula" or "measured".
    plan : ChannelPlan
    prototype, synthesis_prototype : Prototype
        The latter None without a synthesis bank.
    channels : numpy.ndarray
        Output channels that the figures are about, in the order of their values.
    occupied_bandwidth : numpy.ndarray
        Two-sided, in hertz, one per output channel of the plan.
    stopband_edge : numpy.ndarray
        One-sided edge of `stopband_level` in channel spacings, one per output channel.
    figures : dict
        Name to `Figure`, in the order of the table.
    leakage : LeakageMatrix or MeasuredLeakage
        Power from every channel in every channel.
    system : SystemResponse or None
        Both banks as one, with a synthesis prototype.
    tones : tuple of ToneResponse
        The tones that were run (measured reports).
    noise : tuple of NoiseResponse
        What the analysis bank, and the synthesis bank, made of known white noise (measured
        reports).
    floor_db : float
        Levels below this, relative to the strongest signal, are rounding.
    dtype : str
        Of the arithmetic that the figures hold for.
    notes : tuple of str
        What else a reader should know.

    Examples
    --------
    >>> from chanbank import ChannelPlan, bank_report, boxcar_prototype
    >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
    >>> round(report["scalloping_loss"].worst, 2), report["enbw"].worst
    (3.92, 1.0)
    >>> report.image_rejection is None, report["image_rejection"].reason()
    (True, 'complex input has no mirror image')
    """

    def __init__(
        self,
        *,
        method,
        plan,
        prototype,
        synthesis_prototype,
        channels,
        occupied_bandwidth,
        stopband_edge,
        figures,
        leakage,
        system,
        tones=(),
        noise=(),
        floor_db,
        dtype,
        notes=(),
    ):
        self.method, self.plan = method, plan
        self.prototype, self.synthesis_prototype = prototype, synthesis_prototype
        self.channels = np.array(channels, np.int64)
        self.occupied_bandwidth = np.array(occupied_bandwidth, np.float64)
        self.stopband_edge = np.array(stopband_edge, np.float64)
        for array in (self.channels, self.occupied_bandwidth, self.stopband_edge):
            array.flags.writeable = False
        self.figures = {name: figures[name] for name in DEFINITIONS}
        self.leakage, self.system, self.tones = leakage, system, tuple(tones)
        self.noise = tuple(noise)
        self.floor_db, self.dtype, self.notes = float(floor_db), dtype, tuple(notes)

    def __getitem__(self, name):
        try:
            return self.figures[name]
        except (KeyError, TypeError):
            raise KeyError(f"a report holds {', '.join(DEFINITIONS)}; it has no {name!r}") from None

    def __getattr__(self, name):
        figures = self.__dict__.get("figures", {})
        if name not in figures:
            raise AttributeError(
                f"BankReport has no attribute or figure {name!r}; its figures are "
                + ", ".join(figures)
            )
        figure = figures[name]
        return figure.public if figure.present else None

    def __dir__(self):
        return [*super().__dir__(), *DEFINITIONS]

    @checked(absent=Boolean())
    def table(self, *, absent=True):
        """The report as text for a terminal.

        Parameters
        ----------
        absent : bool, default True
            Also list the figures that are absent, with their reasons.

        Returns
        -------
        str

        Raises
        ------
        TypeError
            `absent` is not True or False.

        Examples
        --------
        >>> from chanbank import ChannelPlan, bank_report, boxcar_prototype
        >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
        >>> print(report.table(absent=False).splitlines()[0])
        Bank report by formula
        """
        from chanbank.metrics.present import text_table

        return text_table(self, absent=absent)

    def __str__(self):
        return self.table()

    def __repr__(self):
        pair = "" if self.synthesis_prototype is None else " with synthesis"
        return (
            f"BankReport({self.method}, {self.plan.channels} channels, hop {self.plan.hop}, "
            f"{self.prototype.taps_per_branch} taps per branch{pair})"
        )

    def _repr_html_(self):
        from chanbank.metrics.present import html_table

        return html_table(self)

    def to_dict(self):
        """The report as a dict that JSON can hold, with units and definitions.

        Values that are absent are null with a reason, powers that are exactly zero are null with a
        note; a figure that is the same in all channels is given once.

        Returns
        -------
        dict
            For ``json.dumps``, and for `from_dict`.

        Examples
        --------
        >>> import json
        >>> from chanbank import BankReport, ChannelPlan, bank_report, boxcar_prototype
        >>> report = bank_report(ChannelPlan(64e3, 64, 64), boxcar_prototype(64))
        >>> text = json.dumps(report.to_dict(), allow_nan=False)
        >>> BankReport.from_dict(json.loads(text)).table() == report.table()
        True
        """
        from chanbank.metrics.export import report_to_dict

        return report_to_dict(self)

    @classmethod
    @checked(
        held=OwnCheck(
            "a dict from BankReport.to_dict", (3, TypeError), (None, TypeError), ({}, ValueError)
        )
    )
    def from_dict(cls, held):
        """Rebuild a report from what `to_dict` gave.

        Parameters
        ----------
        held : dict
            As loaded from JSON.

        Returns
        -------
        BankReport

        Raises
        ------
        TypeError, ValueError
            Not a dict, not a report's, or of a later version.

        Examples
        --------
        See `to_dict`.
        """
        from chanbank.metrics.export import report_from_dict

        return report_from_dict(held)

    @checked(
        other=OwnCheck("a BankReport", (3, TypeError), (None, TypeError)),
        tolerance_db=Real(above=0, unit="dB"),
    )
    def verify(self, other, *, tolerance_db=0.1):
        """Hold this report against another of the same bank, found the other way.

        Every figure that both hold must agree within `tolerance_db` wherever it is above the
        arithmetic's floor (or three times a measured figure's own uncertainty, where that is
        more). The complex response to every tone that either has run, and frames of white noise,
        must be what the coefficients predict, in every channel and frame, to the floor of the
        dtype: levels in dB alone hide small faults.

        Parameters
        ----------
        other : BankReport
            Usually one report is by formula and one measured.
        tolerance_db : float, default 0.1
            Above 0.

        Returns
        -------
        Verification
            What was compared and the largest differences; prints as a table.

        Raises
        ------
        ReportDisagreement
            Any figure or tone disagrees; the message lists them, worst first.
        TypeError, ValueError
            Not a report, or one of another plan.

        Examples
        --------
        >>> import chanbank as cb
        >>> plan, h = cb.ChannelPlan(8.0, 8, 6), cb.boxcar_prototype(8)
        >>> said = cb.bank_report(plan, h)
        >>> done = cb.measured_report(cb.AnalysisBank(plan, h))
        >>> said.verify(done).agreed
        True
        """
        from chanbank.metrics.verify import verify_reports

        return verify_reports(self, other, tolerance_db=tolerance_db)


def absent_figure(name, reason, count):
    """A figure of `count` channels (or of the bank) that has no meaning."""
    definition = DEFINITIONS[name]
    shape = (count,) if definition.scope == "channel" else ()
    return Figure(definition, np.full(shape, np.nan), {None: reason})
