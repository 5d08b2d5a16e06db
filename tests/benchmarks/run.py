"""What a bank costs: nanoseconds per input sample, and ratios to other routes in the same run.

    python tests/benchmarks/run.py [--short] [--only NAME ...] [--json FILE]

Prints Markdown tables (the README's comes from here) and writes everything as JSON on request.
Single thread unless said, complex64, P = 8 taps per branch; results go to an array given with
`out=`, whose pages have been touched. Run it on an idle machine; --short checks that it runs.
"""

import argparse
import json
import os
import platform
import subprocess
import sys
import tracemalloc
from pathlib import Path

import numpy as np
import pyfftw
import scipy.fft

sys.path[:0] = [str(Path(__file__).parent), str(Path(__file__).parents[2])]

import routes  # noqa: E402
from timing import compare, peak_bytes, ratio, summary  # noqa: E402

from chanbank import AnalysisBank, Prototype, SynthesisBank  # noqa: E402
from chanbank._engine.numpy_engine import NumpyAnalysisEngine  # noqa: E402

SIZES = (64, 256, 1024, 4096, 16384, 65536)
HOPS = {"M": (1, 1), "3M/4": (3, 4), "M/2": (1, 2)}


def geometry(settings):
    """Bank against FFTW alone, and against FFTW given the same treatment; with a reader too."""
    rows = []
    shapes = [(m, hop, 8) for hop in HOPS for m in settings.sizes]
    shapes += [(m, "M", 16) for m in settings.sizes]
    for channels, name, taps in shapes:
        up, down = HOPS[name]
        case = routes.Case(channels, channels * up // down, taps, settings.samples)
        alone = routes.fftw_batched(case)
        compared = {"bank": case.push, "fftw": alone, "bank+reader": None, "fftw+reader": None}
        compared["bank+reader"] = _with_reader(case.push, case.output)
        compared["fftw+reader"] = _with_reader(alone, case.output)
        if case.bank.engine == "numba":
            compared["treated"] = routes.fftw_in_cache(case)
        taken = compare(compared, settings.repeats)
        row = {"M": channels, "hop": name, "P": taps, **summary(taken["bank"], case.samples)}
        row["fftw_ns"] = summary(taken["fftw"], case.samples)["best_ns"]
        row["ratio"] = ratio(taken["bank"], taken["fftw"])
        if "treated" in taken:
            row["treated_ratio"] = ratio(taken["bank"], taken["treated"])
        row["reader_ratio"] = ratio(taken["bank+reader"], taken["fftw+reader"])
        row["peak_mib"] = peak_bytes(case.push) / 2**20
        row["bank_mib"] = peak_bytes(lambda: _fresh(case)) / 2**20  # noqa: B023
        row["error"] = case.error()
        rows.append(row)
    return rows


def _fresh(case):
    plan = case.bank.plan
    return AnalysisBank(plan, Prototype(case.taps, case.channels))


def _with_reader(fill, output):
    """Fill the result, then read every frame of it."""
    floats = output.view(output.real.dtype).reshape(-1)

    def run():
        fill()
        return [np.dot(part, part) for part in np.array_split(floats, len(floats) >> 16 or 1)]

    return run


def plain(settings):
    """Routes that a user has today, each on as many samples as it can afford, per sample."""
    rows = []
    for channels in (size for size in (256, 1024, 4096) if size in settings.sizes):
        case = routes.Case(channels, channels, 8, settings.samples)
        slow = AnalysisBank(case.bank.plan, case.bank.prototype)
        slow._engine = NumpyAnalysisEngine(slow._spec)
        compared = {
            "bank": case.push,
            "numpy engine": lambda: slow.push(case.input, out=case.output),  # noqa: B023
            "einsum + scipy.fft": routes.strided_einsum(case),
        }
        samples = dict.fromkeys(compared, case.samples)
        scale = dict.fromkeys(compared, 1.0)
        if channels == 256:
            few = min(case.samples, settings.few)
            compared["ShortTimeFFT"] = routes.short_time_fft(case, few)
            compared["mixer + upfirdn"] = routes.mixers(case, few, (1, 40, 200))
            samples |= {"ShortTimeFFT": few, "mixer + upfirdn": few}
            scale |= {"ShortTimeFFT": 1.0, "mixer + upfirdn": channels / 3}
        taken = compare(compared, max(3, settings.repeats // 3))
        best = {name: taken[name].min() / samples[name] * scale[name] * 1e9 for name in compared}
        for name, value in best.items():
            rows.append(
                {
                    "M": channels,
                    "route": name,
                    "ns": value,
                    "times the bank": value / best["bank"],
                    "times the numpy engine": value / best["numpy engine"],
                }
            )
    return rows


def formats(settings):
    """Integers, layouts, workers: each against the complex64, frame-major, one-worker bank."""
    rows = []
    for channels in settings.middle:
        case = routes.Case(channels, channels, 8, settings.samples)
        banks = {"complex64": case.push}
        for name in ("int16", "int8", "uint8"):
            banks[name] = _integers(case, name)
        other = routes.Case(channels, channels, 8, settings.samples, layout="channels")
        banks["channel-major"] = other.push
        crew = AnalysisBank(case.bank.plan, case.bank.prototype, workers=2)
        banks["two workers"] = lambda: crew.push(case.input, out=case.output)  # noqa: B023
        taken = compare(banks, settings.repeats)
        for name, seconds in taken.items():
            against = ratio(seconds, taken["complex64"])
            row = {"M": channels, "what": name, **summary(seconds, case.samples)}
            rows.append({**row, "ratio": against})
    return rows


def _integers(case, name):
    bank = AnalysisBank(case.bank.plan, case.bank.prototype)
    limits = np.iinfo(name)
    generator = np.random.default_rng(2)
    samples = generator.integers(limits.min, limits.max, 2 * case.samples, name, True)
    return lambda: bank.push(samples, out=case.output)


def real_input(settings):
    """Real samples against FFTW's batched real DFT."""
    rows = []
    for channels in sorted({*settings.sizes, 512}):  # from 512 up the bank should win
        case = routes.Case(channels, channels, 8, settings.samples, real=True)
        windows = case.input.reshape(-1, channels)
        held = case.input.copy()
        plan = pyfftw.FFTW(windows, case.output, axes=(1,), flags=("FFTW_MEASURE",))
        case.input[...] = held
        taken = compare({"bank": case.push, "fftw": plan.execute}, settings.repeats)
        row = {"M": channels, **summary(taken["bank"], case.samples)}
        row["fftw_ns"] = summary(taken["fftw"], case.samples)["best_ns"]
        rows.append({**row, "ratio": ratio(taken["bank"], taken["fftw"]), "error": case.error()})
    return rows


def synthesis(settings):
    """The synthesis bank against FFTW's batched inverse DFT of the same frames."""
    rows = []
    for channels in settings.sizes:
        for name, (up, down) in HOPS.items():
            hop = channels * up // down
            case = routes.Case(channels, hop, 8, settings.samples)
            case.push()
            bank = SynthesisBank(case.bank.plan, case.bank.prototype, pair_delay=len(case.taps) - 1)
            wave = routes.aligned(case.output.shape, case.dtype)
            held = case.output.copy()
            plan = pyfftw.FFTW(
                case.output,
                wave,
                axes=(1,),
                direction="FFTW_BACKWARD",
                flags=("FFTW_MEASURE", "FFTW_DESTROY_INPUT"),
            )
            case.output[...] = held
            result = routes.aligned(case.samples, case.dtype)
            push = lambda: bank.push(case.output, out=result)  # noqa: B023, E731
            taken = compare({"bank": push, "fftw": plan.execute}, settings.repeats)
            row = {"M": channels, "hop": name, **summary(taken["bank"], case.samples)}
            row["fftw_ns"] = summary(taken["fftw"], case.samples)["best_ns"]
            rows.append({**row, "ratio": ratio(taken["bank"], taken["fftw"])})
    return rows


def small_pushes(settings):
    """A stream in pushes of 4096 samples with `out=`, against the DFTs of as many frames."""
    rows = []
    for channels in settings.sizes:
        if channels > 4096:
            continue
        for name, (up, down) in HOPS.items():
            hop = channels * up // down
            case = routes.Case(channels, hop, 8, 1 << 16)
            pushes = len(case.input) // 4096
            pieces = [case.input[i * 4096 : (i + 1) * 4096] for i in range(pushes)]
            outs = [case.output[:count] for count in range(4096 // hop + 3)]
            position = [case.bank.next_sample]

            def stream(push=case.bank.push, pieces=pieces, outs=outs, hop=hop, position=position):
                here = position[0]
                for piece in pieces:
                    there = here + 4096
                    push(piece, out=outs[-(-there // hop) - -(-here // hop)])
                    here = there
                position[0] = here

            frames = -(-4096 // hop)
            given = routes.aligned((frames, channels), case.dtype)
            made = routes.aligned((frames, channels), case.dtype)
            plan = pyfftw.FFTW(given, made, axes=(1,), flags=("FFTW_MEASURE",))

            def alone(plan=plan, pushes=pushes):
                for _ in range(pushes):
                    plan.execute()

            taken = compare({"bank": stream, "fftw": alone}, 8 * settings.repeats)
            row = {"M": channels, "hop": name}
            row["push_us"] = float(taken["bank"].min() / pushes * 1e6)
            row["fftw_us"] = float(taken["fftw"].min() / pushes * 1e6)
            rows.append({**row, "ratio": ratio(taken["bank"], taken["fftw"])})
    return rows


def streaming(settings):
    """What a long stream with `out=` leaves allocated: bytes after the first and the last push."""
    case = routes.Case(1024, 1024, 8, 1 << 16)
    case.push()
    tracemalloc.start()
    case.push()
    first = tracemalloc.get_traced_memory()[0]
    tracemalloc.reset_peak()
    pushes = 20 if settings.short else 500
    for _ in range(pushes):
        case.push()
    last, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    return [{"pushes": pushes, "growth_bytes": last - first, "peak_bytes": peak - first}]


_FIRST_FRAME = """
import time
import numpy, scipy.signal, pyfftw
start = time.perf_counter()
import chanbank
imported = time.perf_counter()
taps = numpy.ones(8192)
bank = chanbank.AnalysisBank(
    chanbank.ChannelPlan(1.0, 1024, 1024), chanbank.Prototype(taps, 1024)
)
bank.push(numpy.zeros(4096, "complex64"))
print(imported - start, time.perf_counter() - imported)
"""


def first_frame(settings):
    """A new process with a warm cache: seconds from the import of chanbank to the first frame."""
    rows = []
    for _ in range(2 if settings.short else 5):
        done = subprocess.run(
            [sys.executable, "-c", _FIRST_FRAME],
            capture_output=True,
            text=True,
            check=True,
            cwd=Path(__file__).parents[2],
        )
        imported, framed = map(float, done.stdout.split())
        rows.append({"import_s": imported, "first_frame_s": framed})
    return rows


SECTIONS = {
    function.__name__: function
    for function in (
        geometry,
        plain,
        formats,
        real_input,
        synthesis,
        small_pushes,
        streaming,
        first_frame,
    )
}


def show(name, rows):
    """A section as a Markdown table."""
    print(f"\n### {name}: {SECTIONS[name].__doc__.splitlines()[0]}\n")
    columns = list(dict.fromkeys(key for row in rows for key in row))
    print("| " + " | ".join(columns) + " |")
    print("|" + " --- |" * len(columns))
    for row in rows:
        print("| " + " | ".join(_cell(row.get(key, "")) for key in columns) + " |", flush=True)


def _cell(value):
    if isinstance(value, dict):
        return (
            f"{value['best']:.2f} ({value['median']:.2f}, {value['low']:.2f}-{value['high']:.2f})"
        )
    if isinstance(value, float):
        return f"{value:.3g}"
    return str(value)


def main(arguments=None):
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--short", action="store_true", help="small sizes: checks that it runs")
    parser.add_argument("--only", nargs="+", choices=SECTIONS, metavar="NAME", default=SECTIONS)
    parser.add_argument("--json", metavar="FILE", help="also write the figures here")
    settings = parser.parse_args(arguments)
    settings.samples = 1 << 18 if settings.short else 1 << 24
    settings.few = 1 << 16 if settings.short else 1 << 18
    settings.repeats = 3 if settings.short else 11
    settings.sizes = (64, 256, 1024) if settings.short else SIZES
    settings.middle = (256,) if settings.short else (256, 1024, 4096)
    figures = {
        "machine": {
            "processor": platform.processor() or platform.machine(),
            "cores": os.cpu_count(),
            "python": platform.python_version(),
            "numpy": np.__version__,
            "scipy": scipy.__version__,
            "pyfftw": pyfftw.__version__,
        }
    }
    print("machine:", figures["machine"])
    print("ratios: best over best (median, quartiles of the repeats)")
    for name in settings.only:
        figures[name] = SECTIONS[name](settings)
        show(name, figures[name])
    if settings.json:
        path = Path(settings.json)
        part = path.with_name(path.name + ".part")
        part.write_text(json.dumps(figures, indent=1) + "\n")
        os.replace(part, path)


if __name__ == "__main__":
    main()
