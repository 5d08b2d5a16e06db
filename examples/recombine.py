"""Recombine neighbouring channels into one wide channel at its own rate.

At Grauwiek the band is split on a 25 kHz raster, but the harbour's data link takes 100 kHz: four
channels and a little more. Put together again, with the synthesis prototype, they carry the link
as if a receiver of that width had been there from the start.

    python examples/recombine.py [--output NAME]
"""

import argparse

import numpy as np
from scipy.signal import fftconvolve

from chanbank import AnalysisBank, ChannelCombiner, ChannelPlan, prototype_pair, write_sigmf

RATE, CENTER, SPACING = 1.6e6, 156.6e6, 25e3
LINK, SYMBOL_RATE = 156.7875e6, 100e3
BLOCK = 1 << 14


def link(rng, count):
    """The data link at baseband: four phases, root-raised-cosine pulses, 1.2 symbol rates wide."""
    per_symbol = int(RATE / SYMBOL_RATE)
    t = (np.arange(-24 * per_symbol, 24 * per_symbol) + 0.5) / per_symbol
    roll = 0.2
    top = np.sin(np.pi * t * (1 - roll)) + 4 * roll * t * np.cos(np.pi * t * (1 + roll))
    pulse = top / (np.pi * t * (1 - (4 * roll * t) ** 2)) * np.kaiser(len(t), 8)
    symbols = np.exp(0.5j * np.pi * rng.integers(0, 4, count // per_symbol))
    signal = np.zeros(count, complex)
    signal[::per_symbol] = symbols
    return 0.3 * fftconvolve(signal, pulse, "same")


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--output", help="SigMF recording to write the wide channel to")
    options = parser.parse_args(arguments)

    # The link somewhere in the band, with a stronger station close below it.
    rng = np.random.default_rng(8)
    index = np.arange(320_000)
    baseband = link(rng, index.size)
    samples = baseband * np.exp(2j * np.pi * np.mod((LINK - CENTER) / RATE * index, 1.0))
    samples += 3 * np.exp(2j * np.pi * np.mod((156.650e6 - CENTER) / RATE * index, 1.0))
    samples = samples.astype(np.complex64)

    plan = ChannelPlan.from_spacing(RATE, SPACING, oversampling=4 / 3, center_frequency=CENTER)
    h, g = prototype_pair(plan, 12, 24)
    bank = AnalysisBank(plan, h)
    lowest = plan.index_of(LINK - 2.5 * SPACING)
    wide = ChannelCombiner(plan, g, lowest, 6, spacings=8)
    low, high = wide.flat_band
    print(f"6 of {plan.channels} channels into one at {wide.sample_rate / 1e3:g} kS/s")
    print(f"centre {wide.center_frequency / 1e6:.4f} MHz, free of aliases: {wide.alias_free}")
    print(f"flat from {low / 1e6:.4f} to {high / 1e6:.4f} MHz")

    pieces = []
    for start in range(0, samples.size, BLOCK):
        pieces.append(wide.push(bank.push(samples[start : start + BLOCK])))
    pieces += [wide.push(bank.finish()), wide.finish()]
    output = np.concatenate(pieces)

    # Sample m of the wide channel stands for input sample m R: hold it against the link itself,
    # mixed down by the wide channel's own centre.
    step = int(wide.ratio)
    at = np.arange(200, samples.size // step - 200)
    shift = (LINK - wide.center_frequency) / RATE * step * at
    expected = baseband[step * at] * np.exp(2j * np.pi * np.mod(shift, 1.0))
    error = np.mean(np.abs(output[at] - expected) ** 2) / np.mean(np.abs(expected) ** 2)
    error_db = 10 * np.log10(error)
    print(f"the link comes out to {error_db:.1f} dB")
    if options.output:
        write_sigmf(
            options.output,
            output.astype(np.complex64),
            sample_rate=wide.sample_rate,
            center_frequency=wide.center_frequency,
        )
        print(f"wide channel in {options.output}")
    return {"error_db": error_db, "rate": wide.sample_rate}


if __name__ == "__main__":
    main()
