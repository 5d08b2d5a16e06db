"""Excise an interferer and re-synthesise the rest of the band.

A welding set in the shipyard at Grauwiek wanders about 156.650 MHz, 60 dB above the calls of the
harbour. The band goes through an analysis bank and a synthesis bank that mutes the channels it
touches; everything else comes out as it went in, block by block.

    python examples/excise.py [--output NAME] [--save picture.png]
"""

import argparse

import numpy as np

from chanbank import AnalysisBank, ChannelPlan, SynthesisBank, prototype_pair, write_sigmf

RATE, CENTER, SPACING = 1.2e6, 156.6e6, 25e3
WELDER, CALL = 156.650e6, 156.800e6
BLOCK = 1 << 14


def capture(rng, count=400_000):
    """The band as it should be, and what the welding set adds."""
    index = np.arange(count)
    wander = 6e3 * np.sin(2 * np.pi * 40 * index / RATE)
    turns = np.mod((WELDER - CENTER) / RATE * index + np.cumsum(wander) / RATE, 1.0)
    welder = np.exp(2j * np.pi * turns)
    calls = np.zeros(count, complex)
    for frequency in (156.300e6, 156.500e6, CALL, 157.000e6):
        tone = 2e3 * np.sin(2 * np.pi * 700 * index / RATE)
        turns = np.mod((frequency - CENTER) / RATE * index + np.cumsum(tone) / RATE, 1.0)
        calls += 1e-3 * np.exp(2j * np.pi * turns)
    noise = 1e-4 * (rng.normal(size=count) + 1j * rng.normal(size=count))
    return (calls + noise).astype(np.complex64), welder.astype(np.complex64)


def excise(samples, analysis, synthesis):
    """A band through both banks in blocks, aligned with its input."""
    analysis.reset()
    synthesis.reset()
    pieces = []
    for start in range(0, len(samples), BLOCK):
        pieces.append(synthesis.push(analysis.push(samples[start : start + BLOCK])))
    pieces += [synthesis.push(analysis.finish()), synthesis.finish()]
    # The first `delay` samples are the banks' own.
    return np.concatenate(pieces)[synthesis.delay :][: len(samples)]


def decibels(power):
    return 10 * np.log10(power)


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--output", help="SigMF recording to write the cleaned band to")
    parser.add_argument("--save", help="where to save the picture (PNG or PDF)")
    options = parser.parse_args(arguments)

    clean, welder = capture(np.random.default_rng(3))
    dirty = clean + welder
    plan = ChannelPlan.from_spacing(RATE, SPACING, oversampling=1.5, center_frequency=CENTER)
    h, g = prototype_pair(plan, 12)
    print(f"pair: error {g.design['error_db']:.1f} dB, stopband {g.design['stopband_db']:.1f} dB")

    # A channel of this plan reaches to stopband_edge = 1 spacing from its centre, so whatever
    # wanders about one centre is in the neighbours' transition bands as well: mute all three.
    here = plan.index_of(WELDER)
    gains = np.ones(plan.channels)
    gains[[here - 1, here, here + 1]] = 0
    cleaned = excise(dirty, AnalysisBank(plan, h), SynthesisBank(plan, g, gains=gains))

    # What the call's channel holds, before and after, against the band without the welding set.
    sharp = AnalysisBank(plan, h, layout="channels")
    settled = slice(100, -100)  # without the clicks where the capture begins and ends
    wanted, before, after = (sharp(x)[:, settled] for x in (clean, dirty, cleaned))
    call = plan.index_of(CALL)
    figures = {
        "welding set before": decibels(np.mean(np.abs(before[here]) ** 2)),
        "welding set after": decibels(np.mean(np.abs(after[here]) ** 2)),
        "call": decibels(np.mean(np.abs(wanted[call]) ** 2)),
        "error of the call": decibels(
            np.mean(np.abs(after[call] - wanted[call]) ** 2) / np.mean(np.abs(wanted[call]) ** 2)
        ),
    }
    for name, value in figures.items():
        print(f"{name:>20}: {value:7.1f} dB")
    if options.output:
        write_sigmf(options.output, cleaned, sample_rate=RATE, center_frequency=CENTER)
        print(f"cleaned band in {options.output}")
    if options.save:
        draw(options.save, plan, dirty, cleaned)
    return figures


def draw(path, plan, dirty, cleaned):
    import matplotlib.pyplot as plt
    from scipy.signal import welch

    figure, ax = plt.subplots(figsize=(8, 4), layout="constrained")
    for samples, style, label in ((dirty, "0.6", "received"), (cleaned, "k", "cleaned")):
        f, density = welch(
            samples, RATE, "blackmanharris", 8192, return_onesided=False, detrend=False
        )
        order = np.argsort(f)
        place = (plan.center_frequency + f[order]) / 1e6
        ax.plot(place, decibels(density[order]), style, lw=1, label=label)
    ax.set(xlabel="frequency [MHz]", ylabel="density [dB re full scale per Hz]")
    ax.legend()
    figure.savefig(path)
    plt.close(figure)


if __name__ == "__main__":
    main()
