"""Watch a band live: samples come through a pipe, and channels are named as they open and close.

Memory stays constant and the delay bounded however long it runs: every piece of samples is pushed
through the bank as it arrives, into the same arrays.

    python examples/live_stream.py                     a made receiver at Grauwiek, three seconds
    receiver | python examples/live_stream.py -        your own: 16-bit I/Q on standard input
"""

import argparse
import resource
import subprocess
import sys
import time

import numpy as np

from chanbank import AnalysisBank, ChannelPlan, kaiser_prototype

RATE, CENTER, SPACING = 1.2e6, 156.6e6, 25e3
PIECE = 12_000  # samples of one push: 10 ms


def receiver(seconds, out):
    """The made receiver: noise, and two ships that call in turn; paced like a real one."""
    rng = np.random.default_rng(1)
    started = time.monotonic()
    for number in range(round(seconds * RATE / PIECE)):
        index = number * PIECE + np.arange(PIECE)
        seconds_in = index / RATE
        x = rng.normal(0, 60, (PIECE, 2)).astype(np.float32).view(np.complex64)[:, 0]
        for opens, closes, frequency in ((0.2, 0.6, 156.300e6), (0.4, 0.9, 156.800e6)):
            phase = np.mod((frequency - CENTER) / RATE * index, 1.0)
            on = (seconds_in % 1.0 >= opens) & (seconds_in % 1.0 < closes)
            x += 80 * on * np.exp(2j * np.pi * phase)
        time.sleep(max(0.0, started + (number + 1) * PIECE / RATE - time.monotonic()))
        out.write(x.view(np.float32).round().astype("<i2").tobytes())
        out.flush()


def make_bank():
    plan = ChannelPlan.from_spacing(RATE, SPACING, oversampling=1.5, center_frequency=CENTER)
    prototype = kaiser_prototype(plan.channels, stopband_db=70, passband=0.4, stopband=0.6)
    return AnalysisBank(plan, prototype)


def watch(stream, bank):
    """Push what the stream brings until it ends; returns the figures of the run."""
    plan = bank.plan
    raw = bytearray(4 * PIECE)
    samples = np.frombuffer(raw, "<i2")
    frames = np.empty((bank.frame_count(PIECE) + 1, plan.channels), bank.dtype)
    is_open = np.zeros(plan.channels, bool)
    slowest, memory_early, opened = 0.0, None, 0
    while True:
        got = read_fully(stream, raw)
        if got == 0:
            break
        arrived = time.perf_counter()
        first, count = bank.next_frame, bank.frame_count(got // 4)
        bank.push(samples[: 2 * (got // 4)], out=frames[:count])
        power = np.mean(np.abs(frames[:count]) ** 2, axis=0)
        slowest = max(slowest, time.perf_counter() - arrived)
        above = 10 * np.log10(power / np.median(power))
        now_open = above > np.where(is_open, 6, 12)
        for channel in np.flatnonzero(now_open != is_open):
            what = "opens" if now_open[channel] else "closes"
            when = bank.frame_times(first, 1)[0]
            print(f"{when:7.3f} s  {plan.frequencies[channel] / 1e6:.3f} MHz {what}", flush=True)
        opened += int((now_open & ~is_open).sum())
        is_open = now_open
        if memory_early is None and bank.next_sample > 20 * PIECE:
            memory_early = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    return {
        "seconds": bank.next_sample / RATE,
        "opened": opened,
        "bank delay [ms]": 1e3 * bank.delay / RATE,
        "piece [ms]": 1e3 * PIECE / RATE,
        "slowest push [ms]": 1e3 * slowest,
        "memory growth [KiB]": memory - (memory_early or memory),
    }


def read_fully(stream, raw):
    """Fill `raw`, since a pipe brings pieces of any size; fewer bytes only at the end."""
    view, got = memoryview(raw), 0
    while got < len(raw) and (count := stream.readinto(view[got:])):
        got += count
    return got


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("input", nargs="?", help="- reads 16-bit I/Q from standard input")
    parser.add_argument("--seconds", type=float, default=3.0, help="how long the receiver runs")
    parser.add_argument("--receiver", action="store_true", help=argparse.SUPPRESS)
    options = parser.parse_args(arguments)
    if options.receiver:
        return receiver(options.seconds, sys.stdout.buffer)
    bank = make_bank()
    bank(np.zeros(2 * PIECE, "<i2"))  # so that whatever is compiled or planned at first, is
    if options.input == "-":
        figures = watch(sys.stdin.buffer, bank)
    else:
        command = [sys.executable, __file__, "--receiver", "--seconds", str(options.seconds)]
        with subprocess.Popen(command, stdout=subprocess.PIPE, bufsize=0) as process:
            figures = watch(process.stdout, bank)
    for name, value in figures.items():
        print(f"{name:>20}: {value:.4g}")
    latency = sum(figures[f"{part} [ms]"] for part in ("bank delay", "piece", "slowest push"))
    print(f"A signal is seen at most {latency:.1f} ms after it reached the antenna.")
    return figures


if __name__ == "__main__":
    main()
