"""Compare designs for one raster: a table side by side, and the chosen one's summary sheet.

The coast station at Grauwiek wants its 25 kHz channels 70 dB apart. Which prototype does it at
what cost?

    python examples/compare_designs.py [--sheet sheet.pdf]
"""

import argparse

from chanbank import (
    ChannelPlan,
    Limits,
    bank_report,
    compare_reports,
    equiripple_prototype,
    kaiser_prototype,
    summary_sheet,
    window_prototype,
)

RATE, SPACING, OCCUPIED = 2.4e6, 25e3, 20e3


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--sheet", help="where to save the summary sheet (PDF or PNG)")
    options = parser.parse_args(arguments)

    plan = ChannelPlan.from_spacing(RATE, SPACING, oversampling=4 / 3)
    # The wanted band ends 0.4 spacings from the centre, the neighbour's begins at 0.6.
    edges = {"passband": 0.4, "stopband": 0.6}
    designs = {
        "Hamming, 16 taps": window_prototype(plan.channels, 16, "hamming"),
        "Kaiser, 75 dB": kaiser_prototype(plan.channels, stopband_db=75, **edges),
        "minimax, 70 dB": equiripple_prototype(
            plan.channels, passband_db=0.2, stopband_db=70, **edges
        ),
        "minimax, sloped": equiripple_prototype(
            plan.channels, passband_db=0.2, stopband_db=70, slope_db=6.0, **edges
        ),
    }
    reports = [bank_report(plan, h, occupied_bandwidth=OCCUPIED) for h in designs.values()]
    print(compare_reports(reports, labels=list(designs), bare_dft=True))

    limits = Limits(adjacent_leakage_ratio=70, alias_worst=-70, passband_ripple=0.5)
    checks = [limits.check(report) for report in reports]
    for name, check in zip(designs, checks, strict=True):
        print(f"\n{name}\n{check}")
    good = [r for r, check in zip(reports, checks, strict=True) if check.passed]
    chosen = min(good, key=lambda report: report.multiplications)
    print(f"\nchosen: {chosen.prototype.label}, {chosen.prototype.taps_per_branch} taps per branch")
    if options.sheet:
        summary_sheet(chosen, options.sheet)
        print(f"summary sheet in {options.sheet}")
    return chosen


if __name__ == "__main__":
    main()
