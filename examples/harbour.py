"""A weak voice beside a strong one: a whole band recorded, split, and listened to.

The coast station of Grauwiek records ten seconds of its VHF band, 4.8 MS/s of 16-bit I/Q. The
pilot station talks; a skiff calls on the next channel, 60 dB weaker. The recording is split twice,
by the bare DFT and by a proper bank, and the skiff's call is demodulated after both.

    python examples/harbour.py [--folder here] [--seconds 10]
"""

import argparse
import pathlib
import tempfile

import numpy as np
from scipy import signal
from scipy.interpolate import CubicSpline

from chanbank import (
    AnalysisBank,
    ChannelPlan,
    SigMFWriter,
    boxcar_prototype,
    kaiser_prototype,
    open_recording,
    split_recording,
)

RATE, CENTER, SPACING = 4.8e6, 158e6, 25e3
DEVIATION = 3e3  # of the frequency modulation, in hertz at the voice's peak
NOISE = -95.0  # in a channel, dB re full scale
PILOT, SKIFF = 156.650e6, 156.675e6
# Frequency, level in dB re full scale, and when the transmitter is keyed (share of the time).
TALKERS = {
    "pilot station": (PILOT, -10.0, (0.0, 1.0)),
    "skiff": (SKIFF, -70.0, (0.0, 1.0)),
    "harbour office": (157.100e6, -45.0, (0.2, 0.6)),
    "ice patrol": (159.250e6, -60.0, (0.85, 0.9)),
}
VOICE_RATE = 48_000


def voice(seconds, seed):
    """A made-up voice at 48 kHz: harmonics of a wandering pitch, in syllables, peak 1."""
    rng = np.random.default_rng(seed)
    count = round(seconds * VOICE_RATE) + VOICE_RATE // 10
    time = np.arange(count) / VOICE_RATE
    pitch = 115 + 15 * np.sin(2 * np.pi * 0.7 * time + rng.uniform(0, 6))
    turns = np.cumsum(pitch) / VOICE_RATE
    formants = np.sin(2 * np.pi * 1.9 * time + rng.uniform(0, 6))
    sound = np.zeros(count)
    for harmonic in range(3, 24):
        frequency = harmonic * pitch
        loud = np.exp(-(((frequency - 700 - 250 * formants) / 400) ** 2))
        loud += 0.4 * np.exp(-(((frequency - 1700 + 400 * formants) / 350) ** 2))
        sound += loud * np.sin(2 * np.pi * harmonic * turns + rng.uniform(0, 6))
    sound *= 0.55 + 0.45 * np.sin(2 * np.pi * 3.3 * time + rng.uniform(0, 6))
    return sound / np.abs(sound).max()


def voice_phases(seconds):
    """The phase of each talker's carrier over time, smooth enough to be asked for anywhere."""
    phases = {}
    for seed, name in enumerate(TALKERS):
        swing = np.cumsum(voice(seconds, seed)) * 2 * np.pi * DEVIATION / VOICE_RATE
        phases[name] = CubicSpline(np.arange(len(swing)) / VOICE_RATE, swing)
    return phases


def keying(time, seconds, span):
    """The transmitter's envelope: up and down within 20 ms, so that it does not click."""
    first, last = (share * seconds for share in span)
    rise = np.clip(np.minimum(time - first, last - time) / 0.02, 0, 1)
    return rise * rise * (3 - 2 * rise)


def record(path, seconds, phases):
    """The band as the station's receiver would write it: int16 SigMF, block by block."""
    rng = np.random.default_rng(20)
    sigma = np.float32(10 ** (NOISE / 20) * np.sqrt(RATE / SPACING / 2))
    with SigMFWriter(
        path,
        "ci16_le",
        sample_rate=RATE,
        center_frequency=CENTER,
        datetime="2031-11-18T05:40:00Z",
        description="Grauwiek coast station, VHF band",
        overwrite=True,
    ) as writer:
        total = round(seconds * RATE)
        for start in range(0, total, 1 << 19):
            index = np.arange(start, min(start + (1 << 19), total))
            time = index / RATE
            band = sigma * rng.standard_normal(2 * len(index), np.float32)
            band = band.view(np.complex64)
            for name, (frequency, level, span) in TALKERS.items():
                envelope = 10 ** (level / 20) * keying(time, seconds, span)
                if envelope.any():
                    # Offsets are whole channels: their phase repeats after 192 samples.
                    offset = round((frequency - CENTER) / SPACING) * index % 192 / 192
                    angle = (2 * np.pi * offset + phases[name](time)).astype(np.float32)
                    wave = envelope.astype(np.float32)
                    band += wave * (np.cos(angle) + 1j * np.sin(angle))
            writer.write(band)
        skiff = (SKIFF - SPACING / 2, SKIFF + SPACING / 2)
        writer.annotate(0, total, lower_edge=skiff[0], upper_edge=skiff[1], label="skiff calling")


def listen(channel, bank, phase):
    """Demodulate one channel recording: its audio, the audio sent, and the ratio in dB.

    The reference is what the transmitter was fed with, at the instants that the bank's time axis
    gives; the part of the audio that follows it is the signal, the rest is noise.
    """
    with open_recording(channel.path) as recording:
        frames = recording.read()
        times = bank.frame_times(recording.segments[0].global_index, len(frames))
    heard = np.angle(frames[1:] * frames[:-1].conj())
    sent = np.diff(phase(times))
    lowpass = signal.firwin(255, 3.4e3, fs=bank.plan.channel_rate)
    heard, sent = (signal.fftconvolve(audio, lowpass, "valid") for audio in (heard, sent))
    wanted = sent * (heard @ sent) / (sent @ sent)
    ratio = 10 * np.log10(np.sum(wanted**2) / np.sum((heard - wanted) ** 2))
    to_hertz = bank.plan.channel_rate / (2 * np.pi)
    return {"ratio": ratio, "heard": heard * to_hertz, "sent": sent * to_hertz, "frames": frames}


def draw(path, banks, results, calls):
    """The picture that shows why."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(11, 8), layout="constrained")
    axes = figure.subplots(2, 2)
    offsets = np.linspace(-3, 3, 1201)
    rate = next(iter(banks.values())).plan.channel_rate
    lines = {
        "bare DFT": {"color": "tab:red", "lw": 1.0},
        "Kaiser": {"color": "tab:blue", "lw": 1.2},
    }
    for name, bank in banks.items():
        activity = results[name].activity
        order = np.argsort(activity.frequencies)
        megahertz, power = activity.frequencies[order] / 1e6, activity.mean_power_db[order]
        axes[0, 0].step(megahertz, power, where="mid", label=name, **lines[name])
        response = np.abs(bank.prototype.response(offsets)) ** 2
        level = 10 * np.log10(np.maximum(response, 1e-15))
        axes[0, 1].plot(offsets * SPACING / 1e3, level, label=name, **lines[name])
        frequency, density = signal.welch(
            calls[name]["frames"], rate, nperseg=1024, return_onesided=False, scaling="density"
        )
        shown = np.argsort(frequency)
        axes[1, 0].plot(
            frequency[shown] / 1e3, 10 * np.log10(density[shown]), label=name, **lines[name]
        )
        part = slice(4 * len(calls[name]["heard"]) // 10, None)
        audio = calls[name]["heard"][part][: round(0.03 * rate)] / 1e3
        axes[1, 1].plot(1e3 * np.arange(len(audio)) / rate, audio, label=name, **lines[name])
    sent = calls["Kaiser"]["sent"][4 * len(calls["Kaiser"]["sent"]) // 10 :][: round(0.03 * rate)]
    axes[1, 1].plot(1e3 * np.arange(len(sent)) / rate, sent / 1e3, "k--", lw=1.0, label="sent")
    axes[0, 0].axvline(SKIFF / 1e6, color="0.5", lw=0.8, ls=":")
    axes[0, 0].set(
        title="Mean power of every channel",
        xlabel="frequency [MHz]",
        ylabel="power [dB re full scale]",
        xlim=(156.2, 157.4),
        ylim=(-100, 10),
    )
    pilot = (PILOT - SKIFF) / 1e3
    axes[0, 1].axvspan(pilot - 5, pilot + 5, color="tab:orange", alpha=0.3, label="pilot station")
    axes[0, 1].axhline(-60, color="0.5", lw=0.8, ls=":")
    axes[0, 1].set(
        title="What the skiff's channel hears",
        xlabel="offset from the channel's centre [kHz]",
        ylabel="response [dB]",
        ylim=(-130, 25),
    )
    axes[1, 0].set(
        title="Spectrum in the skiff's channel",
        xlabel="offset [kHz]",
        ylabel="density [dB re full scale per hertz]",
        ylim=(-160, -60),
    )
    axes[1, 1].set(
        title="The call after demodulation",
        xlabel="time [ms]",
        ylabel="deviation [kHz]",
        ylim=(-6, 9),
    )
    for axis in axes.flat:
        axis.grid(alpha=0.3)
        axis.legend(loc="upper left", fontsize="small", ncols=3)
    figure.savefig(path, dpi=110)


def run(folder, seconds):
    """Record, split, listen and draw in `folder`; the ratios in dB by bank."""
    phases = voice_phases(seconds)
    path = folder / "grauwiek"
    record(path, seconds, phases)
    plan = ChannelPlan.from_spacing(RATE, SPACING, oversampling=1.5, center_frequency=CENTER)
    kaiser = kaiser_prototype(plan.channels, stopband_db=100, passband=0.35, stopband=0.7)
    banks = {
        "bare DFT": AnalysisBank(plan, boxcar_prototype(plan.channels)),
        "Kaiser": AnalysisBank(plan, kaiser),
    }
    results, calls = {}, {}
    with open_recording(path) as recording:
        print(recording)
        for name, bank in banks.items():
            place = folder / name.replace(" ", "_")
            results[name] = split_recording(
                recording, bank, place, frequencies=[SKIFF], overwrite=True
            )
            calls[name] = listen(results[name].channels[0], bank, phases["skiff"])
        found = split_recording(
            recording, banks["Kaiser"], folder / "active", select="active", overwrite=True
        )
    print(
        f"\nChannels more than {found.threshold_db:g} dB above the noise, one recording for each:"
    )
    print(found)
    for name, bank in banks.items():
        busy = results[name].activity.active(10)
        print(
            f"\n{name}: {bank.prototype.length} taps; {len(busy)} of {plan.channels} channels look "
            f"busy; the skiff's call comes out at {calls[name]['ratio']:.1f} dB signal to noise"
        )
    picture = folder / "harbour.png"
    draw(picture, banks, results, calls)
    print(f"\nThe picture that shows why: {picture}")
    return {name: float(call["ratio"]) for name, call in calls.items()}


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument(
        "--folder", help="where to keep the files (default: only the picture, here)"
    )
    parser.add_argument("--seconds", type=float, default=10.0, help="length of the recording")
    options = parser.parse_args(arguments)
    if options.folder:
        folder = pathlib.Path(options.folder)
        folder.mkdir(parents=True, exist_ok=True)
        return run(folder, options.seconds)
    with tempfile.TemporaryDirectory() as folder:
        ratios = run(pathlib.Path(folder), options.seconds)
        picture = pathlib.Path("harbour.png")
        picture.write_bytes((pathlib.Path(folder) / "harbour.png").read_bytes())
        print(f"kept as {picture.resolve()}")
    return ratios


if __name__ == "__main__":
    main()
