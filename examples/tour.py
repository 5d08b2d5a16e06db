"""The README's five-minute tour, step by step; it draws the README's pictures.

python examples/tour.py [--folder FOLDER]
"""

import argparse
import pathlib
import tempfile

import harbour
import matplotlib.pyplot as plt
import numpy as np

from chanbank import (
    AnalysisBank,
    ChannelPlan,
    Limits,
    Specification,
    SynthesisBank,
    bank_report,
    boxcar_prototype,
    compare_reports,
    equiripple_prototype,
    find_designs,
    measure_activity,
    measured_report,
    open_recording,
    plot_activity,
    plot_distortion,
    plot_prototype,
    plot_tradeoff,
    prototype_pair,
)


def save(figure, folder, name):
    figure.tight_layout()
    figure.savefig(folder / name, dpi=80)
    plt.close(figure)


def the_leak(folder):
    """1. The bare DFT, and a proper prototype, on the same raster."""
    plan = ChannelPlan.from_spacing(4.8e6, 25e3, oversampling=1.5, center_frequency=158e6)
    proper = equiripple_prototype(192, 12, passband=0.32, stopband=0.68, slope_db=6)
    figure, (left, right) = plt.subplots(1, 2, figsize=(11, 3.8), sharey=True)
    for ax, prototype in ((left, boxcar_prototype(192)), (right, proper)):
        plot_prototype(prototype, plan=plan, occupied=0.64, spacings=4, ax=ax)
    save(figure, folder, "prototypes.png")
    reports = [bank_report(plan, proper, occupied_bandwidth=16e3)]
    print(compare_reports(reports, bare_dft=True))
    return plan, proper


def the_search(folder):
    """2. From a specification to designs."""
    specification = Specification(
        4.8e6, 25e3, occupied_bandwidth=16e3, neighbour_rejection=70, alias_level=-70
    )
    found = find_designs(specification, progress=False)
    print(found)
    figure, ax = plt.subplots(figsize=(7, 3.8))
    plot_tradeoff(found, ax=ax, y="margin")
    save(figure, folder, "tradeoff.png")


def the_activity(folder, plan, proper):
    """3. Who is talking, and when."""
    with tempfile.TemporaryDirectory() as place:
        path = pathlib.Path(place) / "grauwiek"
        harbour.record(path, 10.0, harbour.voice_phases(10.0))
        with open_recording(path) as recording:
            activity = measure_activity(recording, AnalysisBank(plan, proper))
    print(activity)
    figure, ax = plt.subplots(figsize=(9, 3.8))
    plot_activity(activity, ax=ax)
    save(figure, folder, "activity.png")


def the_way_back(folder):
    """4. Perfect reconstruction: designed, reported, measured, verified."""
    plan = ChannelPlan(4.8e6, 192, 128)
    h, g = prototype_pair(plan, 8, 16)
    report = bank_report(plan, h, g)
    analysis, synthesis = AnalysisBank(plan, h), SynthesisBank(plan, g)
    report.verify(measured_report(analysis, synthesis))
    print(Limits(reconstruction_error=-100, synthesis_stopband=-100, noise_gain=1).check(report))
    rng = np.random.default_rng(1)
    x = (rng.standard_normal(100_000) + 1j * rng.standard_normal(100_000)).astype("complex64")
    back = synthesis(analysis(x), length=len(x))
    error = np.sqrt(np.mean(np.abs(back - x) ** 2) / np.mean(np.abs(x) ** 2))
    print(f"error of these {len(x)} samples: {20 * np.log10(error):.1f} dB")
    figure, ax = plt.subplots(figsize=(9, 3.6))
    plot_distortion(report, ax=ax)
    save(figure, folder, "distortion.png")


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--folder", help="where to draw the pictures (default: a temporary one)")
    folder = parser.parse_args(arguments).folder
    with tempfile.TemporaryDirectory() as temporary:
        place = pathlib.Path(folder or temporary)
        plan, proper = the_leak(place)
        the_search(place)
        the_activity(place, plan, proper)
        the_way_back(place)


if __name__ == "__main__":
    main()
