"""Wisdom: kept in the cache folder, shared between processes, never in the way."""

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

import chanbank

ROOT = str(Path(chanbank.__file__).parents[1])

_RUN = """
import hashlib, sys
import numpy as np
sys.path.insert(0, sys.argv[1])
from chanbank import AnalysisBank, ChannelPlan, Prototype
bank = AnalysisBank(ChannelPlan(1.0, 360, 360), Prototype(np.ones(720), 360))
samples = np.random.default_rng(0).standard_normal(2 * 36000).view(complex).astype("complex64")
print(hashlib.sha256(bank(samples).tobytes()).hexdigest())
"""


def run(folder, engine=""):
    done = subprocess.run(
        [sys.executable, "-c", _RUN, ROOT],
        capture_output=True,
        text=True,
        env=os.environ | {"CHANBANK_CACHE": str(folder), "CHANBANK_ENGINE": engine},
    )
    assert done.returncode == 0, done.stderr
    return done.stdout


@pytest.mark.parametrize("engine", ["", "numpy"])
def test_processes_share_wisdom_and_bits(tmp_path, engine):
    folder = tmp_path / "deep" / "cache"
    first = run(folder, engine)
    (file,) = folder.iterdir()
    wisdom = json.loads(file.read_text())
    assert len(wisdom) == 3 and any("fftwf" in part for part in wisdom)
    before = file.stat().st_mtime_ns
    # The second process finds its plan there: the same bits, nothing to write.
    assert run(folder, engine) == first
    assert file.stat().st_mtime_ns == before
    assert [path.name for path in folder.iterdir()] == [file.name]


def test_a_broken_file_is_replaced(tmp_path):
    run(tmp_path)
    (file,) = tmp_path.iterdir()
    for text in ("", "not json", "[1, 2, 3]", '["a", "b", "c"]', '{"a": 1}'):
        file.write_text(text)
        run(tmp_path)
        assert any("fftwf" in part for part in json.loads(file.read_text()))


def test_no_cache_wanted_or_possible(tmp_path):
    run("off")
    blocked = tmp_path / "file"
    blocked.write_text("in the way")
    run(blocked)
    assert blocked.read_text() == "in the way"
