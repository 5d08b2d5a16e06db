"""A telescope recording through the bank: two polarisations of a 16 MHz band, 32 channels each.

The samples come from the `baseband` package (pip install baseband), which reads the formats of
radio telescopes and brings small real recordings. Any array (..., samples) goes into a bank in the
same way; here the polarisations are its leading axis.

    python examples/telescope.py [--save picture.png]
"""

import argparse

import numpy as np
from baseband import dada, vdif
from baseband.data import SAMPLE_DADA, SAMPLE_VDIF

from chanbank import AnalysisBank, ChannelPlan, kaiser_prototype


def channel_powers(plan, prototype, samples, piece=4096):
    """Mean power of every channel, (..., channels), piece by piece."""
    bank = AnalysisBank(plan, prototype, dtype="complex128")
    energy = 0.0
    for start in range(0, samples.shape[-1], piece):
        out = bank.push(samples[..., start : start + piece])
        energy = energy + np.sum(np.abs(out) ** 2, axis=-2)
    energy = energy + np.sum(np.abs(bank.finish()) ** 2, axis=-2)
    return energy / (samples.shape[-1] / plan.hop)


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--save", help="where to save the picture (PNG or PDF)")
    options = parser.parse_args(arguments)
    bands, kept = [], []

    with dada.open(SAMPLE_DADA, "rs") as stream:  # complex, 8 bits, two polarisations
        rate, center = stream.sample_rate.to_value("Hz"), stream.header0["FREQ"] * 1e6
        samples = np.ascontiguousarray(stream.read().T)
    plan = ChannelPlan(rate, 32, 24, center_frequency=center)
    bands.append(("complex, two polarisations", plan, samples))

    with vdif.open(SAMPLE_VDIF, "rs") as stream:  # real, 2 bits, eight threads
        samples = np.ascontiguousarray(stream.read().T)
        rate = stream.sample_rate.to_value("Hz")
    # Real samples: only the channels from 0 to half the sample rate carry anything of their own.
    bands.append(("real, eight threads", ChannelPlan(rate, 64, 48, real=True), samples))

    results = []
    for name, plan, samples in bands:
        prototype = kaiser_prototype(plan.channels, stopband_db=60, passband=0.4, stopband=0.6)
        power = channel_powers(plan, prototype, samples)
        # Power over noise bandwidth is a density; all densities add up to the whole.
        density = power / (prototype_enbw(prototype) * plan.spacing)
        sides = np.where(plan.frequencies % (plan.sample_rate / 2) == 0, 1, 2) if plan.real else 1
        whole = np.sum(density * plan.spacing * sides, axis=-1)
        kept.append(whole / np.mean(np.abs(samples) ** 2, axis=-1))
        results.append((name, plan, density))
        print(f"{name}: {samples.shape} samples at {plan.sample_rate / 1e6:g} MS/s")
        print(f"  {plan.output_channels} channels of {plan.spacing / 1e3:g} kHz")
        print("  channel power over sample power:", np.round(kept[-1], 4))
    if options.save:
        draw(options.save, results)
    return kept


def prototype_enbw(prototype):
    """Noise bandwidth in channel spacings: M sum(h^2) / sum(h)^2."""
    return prototype.channels * np.sum(prototype.taps**2) / np.sum(prototype.taps) ** 2


def draw(path, results):
    import matplotlib.pyplot as plt

    figure, axes = plt.subplots(len(results), figsize=(8, 6), layout="constrained")
    for ax, (name, plan, density) in zip(axes, results, strict=True):
        order = np.argsort(plan.frequencies)
        for stream in 10 * np.log10(density / density.max()):
            ax.step(plan.frequencies[order] / 1e6, stream[order], where="mid", lw=1)
        ax.set(title=name, xlabel="frequency [MHz]", ylabel="density [dB]")
    figure.savefig(path)
    plt.close(figure)


if __name__ == "__main__":
    main()
