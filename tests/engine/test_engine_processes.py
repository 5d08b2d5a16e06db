"""Threads, forked children and narrower vectors."""

import multiprocessing
import os
import subprocess
import sys
import threading

import numpy as np
import pytest

from chanbank import AnalysisBank, ChannelPlan, Prototype
from chanbank._engine import numba_engine


def make_bank(workers=1, channels=48):
    taps = np.random.default_rng(0).standard_normal(6 * channels)
    return AnalysisBank(ChannelPlan(1.0, channels, 36), Prototype(taps, channels), workers=workers)


SIGNAL = np.random.default_rng(1).standard_normal(2 * 30000).view(np.complex128)
SIGNAL = SIGNAL.astype(np.complex64)


def test_banks_built_and_run_on_many_threads():
    wanted = make_bank()(SIGNAL)
    results = [None] * 8

    def work(index):
        # Sizes of their own as well, so that planning happens on all threads at once.
        make_bank(channels=40 + index)(SIGNAL[:2000])
        results[index] = make_bank(workers=1 + index % 2)(SIGNAL)

    threads = [threading.Thread(target=work, args=(index,)) for index in range(8)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert all(np.array_equal(result, wanted) for result in results)


@pytest.mark.skipif(not hasattr(os, "fork"), reason="no fork on this platform")
@pytest.mark.filterwarnings("ignore:.*multi-threaded.*:DeprecationWarning")
def test_a_forked_child_carries_the_stream_on(monkeypatch):
    # The parent's workers are threads that the child does not have.
    monkeypatch.setattr(numba_engine, "WORKER_SAMPLES", 1000)
    bank = make_bank(workers=2)
    bank.push(SIGNAL[:15000])
    context = multiprocessing.get_context("fork")
    receive, send = context.Pipe(duplex=False)
    child = context.Process(target=_carry_on, args=(bank, send))
    child.start()
    assert receive.poll(60), "the child hangs"
    received = receive.recv()
    child.join(60)
    assert child.exitcode == 0
    assert np.array_equal(received, bank.push(SIGNAL[15000:]))


def _carry_on(bank, send):
    frames = bank.push(SIGNAL[15000:])
    make_bank(channels=52)(SIGNAL[:500])  # planning works in the child too
    send.send(frames)


_NARROW = """
import numpy as np, sys
sys.path.insert(0, sys.argv[1])
from chanbank import AnalysisBank, ChannelPlan, Prototype, SynthesisBank
from chanbank._engine.lanes import VECTOR_BYTES
from chanbank._engine.numpy_engine import NumpyAnalysisEngine
assert VECTOR_BYTES == int(sys.argv[2])
generator = np.random.default_rng(0)
x = generator.standard_normal(2 * 4000).view(complex).astype("complex64")
for layout in ("frames", "channels"):
    plan = ChannelPlan(1.0, 20, 15)
    prototype = Prototype(generator.standard_normal(150), 20)
    bank = AnalysisBank(plan, prototype, layout=layout)
    assert bank.engine == "numba"
    frames = bank.push(x)
    other = AnalysisBank(plan, prototype, layout=layout)
    other._engine = NumpyAnalysisEngine(other._spec)
    scale = np.abs(prototype.taps).sum() * np.abs(x).max()
    error = np.abs(frames - other.push(x)).max() / scale
    assert 0 <= error < 5e-7, error
print("done")
"""


@pytest.mark.parametrize("width", [16, 32])
def test_narrower_vectors(width):
    # Machines without 64-byte vectors run the same kernels, narrower.
    root = str(numba_engine.__file__).rsplit("chanbank", 1)[0]
    environment = os.environ | {"CHANBANK_VECTOR_BYTES": str(width), "CHANBANK_ENGINE": ""}
    done = subprocess.run(
        [sys.executable, "-c", _NARROW, root, str(width)],
        capture_output=True,
        text=True,
        env=environment,
    )
    assert done.returncode == 0 and done.stdout == "done\n", done.stderr
