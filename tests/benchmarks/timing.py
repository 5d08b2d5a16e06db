"""Interleaved timing: what is compared takes turns, so that a busy moment hits all of it alike."""

import time
import tracemalloc

import numpy as np

__all__ = ["compare", "peak_bytes", "ratio", "summary"]


def compare(routes, repeats):
    """Seconds of every repeat, {name: array}, of callables {name: function} taking turns.

    The order turns round in every other repeat. One untimed call of each goes first.
    """
    for function in routes.values():
        function()
    taken = {name: [] for name in routes}
    for repeat in range(repeats):
        names = list(routes) if repeat % 2 == 0 else list(routes)[::-1]
        for name in names:
            start = time.perf_counter()
            routes[name]()
            taken[name].append(time.perf_counter() - start)
    return {name: np.array(seconds) for name, seconds in taken.items()}


def summary(seconds, samples):
    """Nanoseconds per input sample: best, median, and the spread between the quartiles."""
    per_sample = seconds / samples * 1e9
    low, middle, high = np.percentile(per_sample, [25, 50, 75])
    return {
        "best_ns": float(per_sample.min()),
        "median_ns": float(middle),
        "spread_ns": float(high - low),
    }


def ratio(seconds, reference):
    """One route over another: best over best, and the median over repeats with its quartiles."""
    pairs = seconds / reference
    low, middle, high = np.percentile(pairs, [25, 50, 75])
    return {
        "best": float(seconds.min() / reference.min()),
        "median": float(middle),
        "low": float(low),
        "high": float(high),
    }


def peak_bytes(function):
    """The most that Python and NumPy held at once while `function` ran, above the start."""
    tracemalloc.start()
    try:
        before = tracemalloc.get_traced_memory()[0]
        tracemalloc.reset_peak()
        function()
        return tracemalloc.get_traced_memory()[1] - before
    finally:
        tracemalloc.stop()
