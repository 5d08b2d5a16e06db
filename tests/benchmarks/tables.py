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

    def cells(name, found, key=None, form=".2f"):
        """A row of `found`, by size, or by size and a key."""
        values = (found.get(size if key is None else (size, key)) for size in sizes)
        return [name, *("" if value is None else f"{value:{form}}" for value in values)]

    def slower(name, route, form=".1f"):
        return cells(f"{name}: times slower", routes, route, form)

    window = "`scipy.signal.ShortTimeFFT`, same window"
    mixers = "a mixer and `upfirdn` per channel, all channels"
    _print(
        ["against, in the same run (hop M)", f"M = {sizes[0]}", *map(str, sizes[1:])],
        [
            slower("`einsum` over a strided view, then `scipy.fft.fft`", "einsum + scipy.fft"),
            slower("this library's NumPy engine", "numpy engine"),
            slower(window, "ShortTimeFFT", ".0f"),
            slower(mixers, "mixer + upfirdn", ",.0f"),
            cells("int16 samples: time over complex64's", formats, "int16"),
            cells("channel-major frames: time over frame-major", formats, "channel-major"),
            cells("two workers: time over one", formats, "two workers"),
            cells("synthesis, ratio to the batched inverse DFT", whole),
            cells("push of 4096 samples, ratio to its DFTs alone", pushes),
        ],
    )


def main(path):
    with open(path) as file:
        results = json.load(file)
    bank_table(results)
    other_table(results)


if __name__ == "__main__":
    main(*sys.argv[1:])
