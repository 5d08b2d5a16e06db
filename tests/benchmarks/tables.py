"""The README's tables of speed, from what `run.py --json FILE` wrote.

python tests/benchmarks/tables.py FILE
"""

import json
import sys


def _print(head, rows):
    print("| " + " | ".join(head) + " |", "|---" * len(head) + "|", sep="\n")
    for row in rows:
        print("| " + " | ".join(row) + " |")
    print()


def bank_table(results):
    """Nanoseconds and ratios of every geometry, one column per number of channels."""
    found = {(row["M"], row["hop"], row["P"]): row for row in results["geometry"]}
    sizes = sorted({row["M"] for row in results["geometry"]})

    def cells(name, hop, taps, pick):
        return [name, *(f"{pick(found[size, hop, taps]):.2f}" for size in sizes)]

    def best(key):
        return lambda row: row[key]["best"]

    _print(
        ["", f"M = {sizes[0]}", *map(str, sizes[1:])],
        [
            cells("ns per input sample, hop M", "M", 8, lambda row: row["best_ns"]),
            cells("ratio to FFTW alone, hop M", "M", 8, best("ratio")),
            cells("hop 3M/4", "3M/4", 8, best("ratio")),
            cells("hop M/2", "M/2", 8, best("ratio")),
            cells("hop M, 16 taps per branch", "M", 16, best("ratio")),
            cells("hop M, with a reader of every frame", "M", 8, best("reader_ratio")),
            cells("ratio to FFTW in cache, hop M", "M", 8, best("treated_ratio")),
            cells("hop 3M/4", "3M/4", 8, best("treated_ratio")),
            cells("hop M/2", "M/2", 8, best("treated_ratio")),
        ],
    )


def other_table(results):
    """The other routes, formats and directions at hop M, for the sizes that have them."""
    routes = {(row["M"], row["route"]): row["times the bank"] for row in results["plain"]}
    sizes = sorted({row["M"] for row in results["formats"]})
    formats = {(row["M"], row["what"]): row["ratio"]["best"] for row in results["formats"]}
    whole = {row["M"]: row["ratio"]["best"] for row in results["synthesis"] if row["hop"] == "M"}
    pushes = {
        row["M"]: row["ratio"]["best"] for row in results["small_pushes"] if row["hop"] == "M"
    }

    def cells(name, pick, form=".2f"):
        values = (pick(size) for size in sizes)
        return [name, *("" if value is None else f"{value:{form}}" for value in values)]

    slower = ": times slower"
    _print(
        ["against, in the same run (hop M)", f"M = {sizes[0]}", *map(str, sizes[1:])],
        [
            cells(
                "`einsum` over a strided view, then `scipy.fft.fft`" + slower,
                lambda size: routes.get((size, "einsum + scipy.fft")),
                ".1f",
            ),
            cells(
                "this library's NumPy engine" + slower,
                lambda size: routes.get((size, "numpy engine")),
                ".1f",
            ),
            cells(
                "`scipy.signal.ShortTimeFFT`, same window" + slower,
                lambda size: routes.get((size, "ShortTimeFFT")),
                ".0f",
            ),
            cells(
                "a mixer and `upfirdn` per channel, all channels" + slower,
                lambda size: routes.get((size, "mixer + upfirdn")),
                ",.0f",
            ),
            cells("int16 samples: time over complex64's", lambda size: formats[size, "int16"]),
            cells(
                "channel-major frames: time over frame-major",
                lambda size: formats[size, "channel-major"],
            ),
            cells("two workers: time over one", lambda size: formats[size, "two workers"]),
            cells("synthesis, ratio to the batched inverse DFT", whole.get),
            cells("push of 4096 samples, ratio to its DFTs alone", pushes.get),
        ],
    )


def main(path):
    with open(path) as file:
        results = json.load(file)
    bank_table(results)
    other_table(results)


if __name__ == "__main__":
    main(*sys.argv[1:])
