"""Several antennas at once: one bank, phases kept, and the bearing of a weak call.

Three masts stand along the quay at Grauwiek. A trawler calls faintly while the dredger, 50 dB
stronger and from another bearing, talks five channels away. Before the bank, the phase difference
between the masts is the dredger's; in the trawler's channel it is the trawler's.

    python examples/antennas.py [--save picture.png]
"""

import argparse

import numpy as np

from chanbank import AnalysisBank, ChannelPlan, kaiser_prototype

RATE, CENTER = 1.2e6, 156.6e6
MASTS = np.array([0.0, 0.8, 1.7])  # metres along the quay
LIGHT = 299_792_458.0
TRAWLER = {"frequency": 156.725e6, "bearing": 24.0, "level": -50.0}
DREDGER = {"frequency": 156.600e6, "bearing": -52.0, "level": 0.0}


def phases(talker):
    """Phase of a plane wave at each mast against the first, in radians."""
    return 2 * np.pi * talker["frequency"] / LIGHT * MASTS * np.sin(np.radians(talker["bearing"]))


def capture(rng, count=240_000):
    """What the three masts receive, (antennas, samples), and the trawler's part of it."""
    index = np.arange(count)
    heard = []
    for talker in (TRAWLER, DREDGER):
        # A voice-like frequency modulation: noise below 3 kHz, 2 kHz rms deviation.
        voice = np.convolve(rng.normal(size=count), np.hanning(400) / 200, "same")
        voice *= 2e3 / voice.std()
        turns = (talker["frequency"] - CENTER) / RATE * index + np.cumsum(voice) / RATE
        wave = 10 ** (talker["level"] / 20) * np.exp(2j * np.pi * np.mod(turns, 1.0))
        heard.append(np.exp(1j * phases(talker))[:, None] * wave)
    noise = rng.normal(0, 10 ** (-65 / 20), (2, len(MASTS), count))
    x = heard[0] + heard[1] + noise[0] + 1j * noise[1]
    return x.astype(np.complex64), heard[0]


def phase_difference(signals):
    """Mean phase of each antenna against the first, in degrees; time is the last axis."""
    return np.degrees(np.angle(np.mean(signals * signals[0].conj(), axis=-1)))


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--save", help="where to save the picture (PNG or PDF)")
    options = parser.parse_args(arguments)

    samples, trawler_alone = capture(np.random.default_rng(5))
    plan = ChannelPlan.from_spacing(RATE, 25e3, oversampling=1.5, center_frequency=CENTER)
    prototype = kaiser_prototype(plan.channels, stopband_db=90, passband=0.4, stopband=0.6)
    bank = AnalysisBank(plan, prototype, layout="channels")
    channels = bank.push(samples)  # (antennas, channels, frames)
    channels = channels[..., -(-prototype.length // plan.hop) :]  # without the filter's start

    here = plan.index_of(TRAWLER["frequency"])
    sent = phase_difference(trawler_alone)
    before = phase_difference(samples)
    after = phase_difference(channels[:, here])
    print(f"{samples.shape} samples in, {channels.shape} out")
    print("phase against mast 1 [degrees]          mast 2   mast 3")
    for name, values in (
        ("the trawler alone, before the bank", sent),
        ("all the band, before the bank", before),
        ("the trawler's channel", after),
        ("the dredger's channel", phase_difference(channels[:, plan.index_of(CENTER)])),
    ):
        print(f"  {name:<36} {values[1]:8.2f} {values[2]:8.2f}")

    # Bearing by the steering vector that fits best; the masts are closer than a wavelength.
    bearings = np.linspace(-90, 90, 3601)
    turns = TRAWLER["frequency"] / LIGHT * np.outer(np.sin(np.radians(bearings)), MASTS)
    fit = np.abs(np.exp(-2j * np.pi * turns) @ np.exp(1j * np.radians(after)))
    bearing = bearings[fit.argmax()]
    print(f"bearing of the trawler: {bearing:.1f} degrees (it lies at {TRAWLER['bearing']:.1f})")
    if options.save:
        draw(options.save, plan, channels)
    return {"sent": sent, "before": before, "after": after, "bearing": bearing}


def draw(path, plan, channels):
    import matplotlib.pyplot as plt

    order = np.argsort(plan.frequencies)
    cross = np.mean(channels * channels[0].conj(), axis=-1)
    level = 10 * np.log10(np.mean(np.abs(channels[0]) ** 2, axis=-1))
    figure, (top, bottom) = plt.subplots(2, sharex=True, figsize=(8, 5), layout="constrained")
    top.plot(plan.frequencies[order] / 1e6, level[order], ".-", color="0.2")
    top.set_ylabel("level at mast 1 [dB]")
    # Where there is only noise, the masts share nothing and the phase means nothing.
    power = np.mean(np.abs(channels) ** 2, axis=-1)
    for mast, marker in ((1, "o"), (2, "^")):
        shared = np.abs(cross[mast]) / np.sqrt(power[mast] * power[0]) > 0.5
        at = [channel for channel in order if shared[channel]]
        phase = np.degrees(np.angle(cross[mast, at]))
        bottom.plot(plan.frequencies[at] / 1e6, phase, marker, label=f"mast {mast + 1}")
    bottom.set(xlabel="frequency [MHz]", ylabel="phase against mast 1 [°]", ylim=(-190, 190))
    bottom.set_title("phase difference where the masts share a signal", fontsize="medium")
    bottom.legend()
    figure.savefig(path)
    plt.close(figure)


if __name__ == "__main__":
    main()
