"""Prototypes in integers: best scaling, published rounding formulas, word lengths, export."""

import json
import os
import re
import shutil
import subprocess
from pathlib import Path

import numpy as np
import pytest

from chanbank.fixedpoint.export import COMMUTATOR_ORDER, export_coefficients
from chanbank.fixedpoint.quantise import quantised, rounding_floor_db, word_length
from chanbank.plan import ChannelPlan
from chanbank.prototype.kaiser import kaiser_prototype
from chanbank.prototype.prototype import Prototype
from chanbank.prototype.window import window_prototype


def stopband(taps, channels, edge):
    """Peak of abs(H) beyond the edge over abs(H(0)), dB, on 32 points a lobe."""
    spectrum = np.abs(np.fft.rfft(taps, 32 * len(taps)))
    f = np.arange(len(spectrum)) * channels / (32 * len(taps))
    return 20 * np.log10(spectrum[f >= edge].max() / spectrum[0])


@pytest.mark.parametrize("bits", [2, 5, 8, 12, 16, 24, 32])
def test_integers_of_the_word_and_taps_of_the_step(bits):
    h = window_prototype(16, 8, ("kaiser", 8.0))
    q = quantised(h, bits)
    assert q.integers.min() >= -(2 ** (bits - 1))
    assert q.integers.max() <= 2 ** (bits - 1) - 1
    assert np.abs(q.integers).max() > 2 ** (bits - 2) * 0.49
    assert np.array_equal(q.prototype.taps, q.integers * q.step) or np.allclose(
        q.prototype.taps, q.integers * q.step, rtol=1e-15, atol=0
    )
    # Rounding to nearest: no tap is off by more than half a step.
    assert np.abs(q.prototype.taps - h.taps).max() <= q.step / 2 * (1 + 1e-9)
    assert np.array_equal(q.integers, q.integers[::-1])
    assert not q.integers.flags.writeable
    assert np.array_equal(q.branches()[3, :8], q.integers[3::16])


def test_best_common_scaling_is_no_worse_than_any_other():
    h = window_prototype(4, 5, "hann")
    q = quantised(h, 6)
    error = ((q.prototype.taps - h.taps) ** 2).sum()
    top = 31 / h.taps.max()
    for scale in np.linspace(0.5, 1, 23) * top:
        other = np.rint(h.taps * scale) / scale
        # 257 scalings were tried; in between the error may dip by the last of them.
        assert error <= ((other - h.taps) ** 2).sum() * 1.2
    full = np.rint(h.taps * top) / top
    assert error <= ((full - h.taps) ** 2).sum()
    by_stop = quantised(h, 6, stopband=1.5)
    assert stopband(by_stop.prototype.taps, 4, 1.5) <= stopband(q.prototype.taps, 4, 1.5) + 1e-6


# rms stopband floors of a Kaiser (beta 10) prototype, 64 channels, 16 taps a branch, cut off at
# 0.375 spacings: bits, what the formula says, what was measured independently.
FLOORS = [(8, -61.4, -63.3), (12, -85.5, -86.0), (16, -109.6, -109.9), (20, -133.7, -133.5)]


@pytest.mark.parametrize("bits,formula,measured", FLOORS)
def test_rounding_floor_of_the_published_formula(bits, formula, measured):
    """Chan and Rabiner 1973 (from memory): the rms error of H is q sqrt(L/12), 6.02 dB a bit."""
    h = window_prototype(64, 16, ("kaiser", 10.0), cutoff=0.375)
    rms, bound = rounding_floor_db(h, bits)
    assert rms == pytest.approx(formula, abs=0.1)
    scale = (2 ** (bits - 1) - 1) / h.taps.max()
    error = np.rint(h.taps * scale) / scale - h.taps
    spectrum = np.abs(np.fft.rfft(error, 8 * len(error)))
    found = 20 * np.log10(np.sqrt((spectrum**2).mean()))
    assert found == pytest.approx(measured, abs=1.2)
    # 1024 roundings at most half alike (symmetry): the sum scatters by a decibel or so; coarse
    # words round many small taps to zero and stay below.
    assert found == pytest.approx(rms, abs=2.5)
    assert 20 * np.log10(spectrum.max()) < bound


def test_reports_stand_side_by_side():
    h = kaiser_prototype(16, stopband_db=80, passband=0.4, stopband=1.0)
    q = quantised(h, 8)
    plan = ChannelPlan(16e3, 16, 12)
    ideal, coarse = q.reports(plan, stopband_edge=1.0)
    assert ideal.prototype is h and coarse.prototype is q.prototype
    assert coarse["stopband_level"].worst > ideal["stopband_level"].worst + 10
    assert "8 bits" in str(q.compare(plan))


@pytest.mark.parametrize("stopband_db", [40, 60, 75])
def test_shortest_word_that_keeps_a_stopband(stopband_db):
    h = kaiser_prototype(64, stopband_db=90, passband=0.4, stopband=1.0)
    q = word_length(h, stopband=1.0, stopband_db=stopband_db)
    assert stopband(q.prototype.taps, 64, 1.0) <= -stopband_db + 0.01
    shorter = quantised(h, q.bits - 1, stopband=1.0)
    assert stopband(shorter.prototype.taps, 64, 1.0) > -stopband_db
    # The formula's rms floor and 9 to 13 dB for the peak above it (extreme values).
    rms, _ = rounding_floor_db(h, q.bits)
    assert rms + 5 < -stopband_db < rms + 6.02 + 16


def test_exports_agree(tmp_path):
    h = kaiser_prototype(8, stopband_db=60, passband=0.4, stopband=1.0)
    q = quantised(h, 12)
    paths = {s: export_coefficients(q, tmp_path / f"taps.{s}") for s in ("csv", "npy", "json", "h")}
    matrix = np.load(paths["npy"])
    assert matrix.dtype == np.int16 and matrix.shape == (8, h.taps_per_branch)
    # Branch m is every M-th tap from the m-th on.
    flat = np.zeros(matrix.size)
    flat[: h.length] = q.integers
    assert all(np.array_equal(matrix[m], flat[m::8]) for m in range(8))
    assert np.array_equal(np.loadtxt(paths["csv"], delimiter=","), matrix)
    held = json.loads(Path(paths["json"]).read_text())
    assert held["branches"] == matrix.tolist() and held["commutator"] == COMMUTATOR_ORDER
    assert held["bits"] == 12 and held["step"] == q.step
    text = Path(paths["h"]).read_text()
    body = text.split("= {")[1]
    numbers = [int(word) for word in re.findall(r"-?\d+", body.split("};")[0])]
    assert numbers == matrix.ravel().tolist()
    for path in paths.values():
        if not path.endswith(".npy"):
            joined = re.sub(r"[\s*#]+", " ", Path(path).read_text())
            assert "commutator runs from branch M-1 down to branch 0" in joined


@pytest.mark.skipif(shutil.which("cc") is None, reason="no C compiler here")
def test_the_header_compiles(tmp_path):
    q = quantised(kaiser_prototype(4, stopband_db=40, passband=0.4, stopband=1.0), 16)
    export_coefficients(q, tmp_path / "taps.h", name="lowpass")
    (tmp_path / "main.c").write_text(
        '#include <stdio.h>\n#include "taps.h"\nint main(void) { long sum = 0;\n'
        "for (int m = 0; m < LOWPASS_BRANCHES; m++)\n"
        "for (int p = 0; p < LOWPASS_TAPS_PER_BRANCH; p++) sum += lowpass[m][p];\n"
        'printf("%ld %.17g", sum, LOWPASS_STEP); return 0; }\n'
    )
    subprocess.run(
        ["cc", "-Wall", "-Werror", "-std=c99", "-o", "run", "main.c"], cwd=tmp_path, check=True
    )
    out = subprocess.run([tmp_path / "run"], capture_output=True, text=True, check=True).stdout
    total, step = out.split()
    assert int(total) == q.integers.sum() and float(step) == q.step


def test_export_of_a_prototype_in_floating_point(tmp_path):
    h = window_prototype(4, 3, "hann")
    path = export_coefficients(h, tmp_path / "taps.csv")
    assert np.array_equal(np.loadtxt(path, delimiter=","), h.branches())
    assert "double prototype" in Path(export_coefficients(h, tmp_path / "x.h")).read_text()


def test_export_refuses(tmp_path):
    q = quantised(window_prototype(4, 3, "hann"), 8)
    path = tmp_path / "taps.csv"
    export_coefficients(q, path)
    before = path.read_bytes()
    with pytest.raises(FileExistsError, match="overwrite=True"):
        export_coefficients(q, path)
    assert path.read_bytes() == before
    export_coefficients(q, path, overwrite=True)
    with pytest.raises(ValueError, match="ends in"):
        export_coefficients(q, tmp_path / "taps.txt")
    with pytest.raises(ValueError, match="name must be"):
        export_coefficients(q, tmp_path / "taps.h", name="2nd")
    with pytest.raises(TypeError, match="coefficients must be"):
        export_coefficients([1, 2], tmp_path / "new.csv")
    with pytest.raises(OSError):
        export_coefficients(q, tmp_path / "nowhere" / "taps.csv")
    assert sorted(os.listdir(tmp_path)) == ["taps.csv"]


@pytest.mark.parametrize(
    "call,error,words",
    [
        (lambda h: quantised(h, 1), ValueError, "bits must be"),
        (lambda h: quantised(h, 33), ValueError, "bits must be"),
        (lambda h: quantised(h, 8.0), TypeError, "bits must be"),
        (lambda h: quantised(h.taps, 8), TypeError, "prototype must be"),
        (lambda h: quantised(Prototype([0.0, 0.0], 1), 8), ValueError, "other than zero"),
        (lambda h: quantised(h, 8, stopband=3.0), ValueError, "3 > 2"),
        (lambda h: word_length(h, stopband=1.0, stopband_db=200), ValueError, "that the prototype"),
        (lambda h: word_length(h, stopband=1.0, stopband_db=-1), ValueError, "stopband_db must be"),
        (lambda h: rounding_floor_db(h, 0), ValueError, "bits must be"),
    ],
)
def test_bad_input_is_named(call, error, words):
    with pytest.raises(error, match=words):
        call(window_prototype(4, 5, "hann"))
