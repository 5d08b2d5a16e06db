"""Coefficients for hardware: CSV, NPY, JSON and C, branch by branch."""

import io
import json
import os
import re

import numpy as np

from chanbank._checks import (
    Boolean,
    Choice,
    Optional,
    OwnCheck,
    PathLike,
    checked,
    wrong_type,
    wrong_value,
)
from chanbank._files import refuse_existing, whole_file
from chanbank.fixedpoint.quantise import QuantisedPrototype
from chanbank.prototype.prototype import Prototype

__all__ = ["COMMUTATOR_ORDER", "export_coefficients"]

COMMUTATOR_ORDER = (
    "Row m is branch m: taps h[m], h[m + M], h[m + 2M], ...; branch m of frame n filters the "
    "samples x[nD - m - rM], r = 0, 1, ... The newest sample x[nD] goes to branch 0, the one "
    "before it to branch 1: in order of arrival the commutator runs from branch M-1 down to "
    "branch 0. Channel k is sum over m of branch[m] exp(+2j pi k m / M)."
)

_NAME = re.compile(r"[A-Za-z_][A-Za-z0-9_]*")

_SUFFIXES = {".csv": "csv", ".npy": "npy", ".json": "json", ".h": "c"}

_COEFFICIENTS = "a QuantisedPrototype or a Prototype"


@checked(
    coefficients=OwnCheck(_COEFFICIENTS, (3, TypeError), ([0.5], TypeError)),
    path=PathLike(),
    format=Optional(Choice("csv", "npy", "json", "c")),
    name=OwnCheck("a name that C accepts", (3, TypeError), ("no good", ValueError)),
    overwrite=Boolean(),
)
def export_coefficients(coefficients, path, *, format=None, name="prototype", overwrite=False):
    """Write the polyphase coefficients to a file, whole or not at all.

    The file holds the M x P matrix whose row m is the branch h[m], h[m + M], h[m + 2M] ..., zero
    where the last column is not filled: integers of a quantised prototype, else float64.

    - CSV: comment lines that begin with "#" (sizes, step, commutator order), then one line per
      branch; ``numpy.loadtxt(path, delimiter=",")`` reads it.
    - NPY: the matrix alone, in the smallest integer type that holds the word length.
    - JSON: an object with ``channels``, ``taps_per_branch``, ``length``, ``bits``, ``step``,
      ``commutator`` and ``branches``.
    - C: a header with the sizes and the step as macros and ``static const`` matrix of int8_t,
      int16_t, int32_t or double.

    The commutator order is `COMMUTATOR_ORDER`: in order of arrival the samples go to branches
    M-1 down to 0.

    Parameters
    ----------
    coefficients : QuantisedPrototype or Prototype
    path : path
        File to write.
    format : {"csv", "npy", "json", "c"}, optional
        By default from the suffix: .csv, .npy, .json or .h.
    name : str, default "prototype"
        Name of the matrix in C.
    overwrite : bool, default False
        Replace a file that exists.

    Returns
    -------
    str
        The path written.

    Raises
    ------
    TypeError, ValueError
        A parameter of the wrong type; a suffix that names no format; a name that C does not
        accept.
    FileExistsError
        The file exists and `overwrite` is False.
    OSError
        The folder cannot be written; nothing is left behind.

    References
    ----------
    R. E. Crochiere and L. R. Rabiner, Multirate Digital Signal Processing, 1983, ch. 7 (polyphase
    branches and commutators).

    Examples
    --------
    >>> import tempfile, os, numpy
    >>> from chanbank import boxcar_prototype
    >>> from chanbank.fixedpoint.export import export_coefficients
    >>> from chanbank.fixedpoint.quantise import quantised
    >>> q = quantised(boxcar_prototype(4), 8)
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     path = export_coefficients(q, os.path.join(folder, "taps.npy"))
    ...     numpy.load(path).tolist()
    [[127], [127], [127], [127]]
    """
    if not isinstance(coefficients, (QuantisedPrototype, Prototype)):
        raise wrong_type("coefficients", _COEFFICIENTS, coefficients)
    if not isinstance(name, str):
        raise wrong_type("name", "a name that C accepts", name)
    if not _NAME.fullmatch(name):
        raise wrong_value("name", "a name that C accepts", name)
    if format is None:
        suffix = os.path.splitext(path)[1].lower()
        if suffix not in _SUFFIXES:
            raise wrong_value(
                "path", "one that ends in .csv, .npy, .json or .h (or give format)", path
            )
        format = _SUFFIXES[suffix]
    refuse_existing(path, overwrite)
    table = _Table(coefficients)
    content = {"csv": table.csv, "npy": table.npy, "json": table.json}.get(format)
    data = table.c(name) if format == "c" else content()
    with whole_file(path, overwrite=overwrite) as file:
        file.write(data)
    return os.fspath(path)


class _Table:
    def __init__(self, coefficients):
        whole = isinstance(coefficients, QuantisedPrototype)
        prototype = coefficients.prototype if whole else coefficients
        self.bits = coefficients.bits if whole else None
        self.step = coefficients.step if whole else 1.0
        self.length, self.label = prototype.length, prototype.label
        self.matrix = coefficients.branches()
        if whole:
            width = 8 if self.bits <= 8 else 16 if self.bits <= 16 else 32
            self.matrix = self.matrix.astype(f"int{width}")
            self.c_type = f"int{width}_t"
        else:
            self.c_type = "double"
        self.channels, self.branch = self.matrix.shape

    def _facts(self):
        word = "float64" if self.bits is None else f"signed integers of {self.bits} bits"
        return [
            f"{self.label or 'prototype'}: {self.channels} branches of {self.branch} taps, "
            f"length {self.length}, {word}",
            f"tap = entry * {self.step!r}",
            COMMUTATOR_ORDER,
        ]

    def _cells(self, row):
        return [repr(value) for value in row.tolist()]

    def csv(self):
        lines = [f"# {fact}" for fact in self._facts()]
        lines += [",".join(self._cells(row)) for row in self.matrix]
        return ("\n".join(lines) + "\n").encode()

    def npy(self):
        file = io.BytesIO()
        np.save(file, self.matrix, allow_pickle=False)
        return file.getvalue()

    def json(self):
        held = {
            "channels": self.channels,
            "taps_per_branch": self.branch,
            "length": self.length,
            "label": self.label,
            "bits": self.bits,
            "step": self.step,
            "commutator": COMMUTATOR_ORDER,
            "branches": self.matrix.tolist(),
        }
        return (json.dumps(held, allow_nan=False) + "\n").encode()

    def c(self, name):
        guard = name.upper()
        comment = "\n".join(f" * {line}" for fact in self._facts() for line in _wrapped(fact))
        rows = ",\n".join("    {" + ", ".join(self._cells(row)) + "}" for row in self.matrix)
        text = (
            f"/*\n{comment.replace('*/', '* /')}\n */\n"
            f"#ifndef {guard}_H\n#define {guard}_H\n\n#include <stdint.h>\n\n"
            f"#define {guard}_BRANCHES {self.channels}\n"
            f"#define {guard}_TAPS_PER_BRANCH {self.branch}\n"
            f"#define {guard}_STEP {self.step!r}\n\n"
            f"static const {self.c_type} {name}[{guard}_BRANCHES][{guard}_TAPS_PER_BRANCH] = {{\n"
            f"{rows}\n}};\n\n#endif\n"
        )
        return text.encode()


def _wrapped(text, width=92):
    lines, line = [], ""
    for word in text.split():
        if line and len(line) + 1 + len(word) > width:
            lines.append(line)
            line = word
        else:
            line = f"{line} {word}".strip()
    return [*lines, line]
