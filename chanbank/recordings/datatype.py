"""Sample encodings: how one sample is laid out in a file, and what it becomes in memory.

A name follows the grammar of SigMF: ``c`` or ``r`` (complex, real), the kind and width of one
component (``f32 f64 i32 i16 i8 u32 u16 u8``), and for components wider than a byte their order,
``_le`` or ``_be``. ``i24`` and ``u24`` exist beside it for WAV alone.
"""

import re
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from chanbank._checks import Rule, wrong_type, wrong_value

__all__ = ["Datatype", "DatatypeRule"]

GRAMMAR = (
    "a SigMF datatype: c or r, then f32, f64, i32, i16, u32 or u16 with _le or _be, or i8 or u8"
)
_PATTERN = re.compile(r"([cr])(f32|f64|i32|i24|i16|i8|u32|u16|u8)(_le|_be)?")


@dataclass(frozen=True)
class Datatype:
    """One sample's encoding in a file.

    `complex` samples are pairs of components, I before Q; a component is a float (``kind`` "f"),
    a two's complement integer ("i") or an unsigned integer with its zero level at mid-scale
    ("u"), `bits` wide.
    """

    complex: bool
    kind: str
    bits: int
    big_endian: bool = False

    @classmethod
    def parse(cls, name):
        """The datatype of a SigMF name, or None where it is not one."""
        match = _PATTERN.fullmatch(name)
        if match is None:
            return None
        prefix, component, order = match.groups()
        kind, bits = component[0], int(component[1:])
        if order is None and bits > 8:
            return None
        # Byte order means nothing for single bytes, yet files that state one are about.
        return cls(prefix == "c", kind, bits, order == "_be" and bits > 8)

    @cached_property
    def name(self):
        order = "" if self.bits == 8 else "_be" if self.big_endian else "_le"
        return f"{'c' if self.complex else 'r'}{self.kind}{self.bits}{order}"

    @property
    def components(self):
        return 2 if self.complex else 1

    @property
    def component_bytes(self):
        return self.bits // 8

    @property
    def sample_bytes(self):
        return self.components * self.component_bytes

    @property
    def integer(self):
        return self.kind != "f"

    @property
    def full_scale(self):
        """The integer that stands for 1.0; for floats 1."""
        return 2 ** (self.bits - 1) if self.integer else 1

    @property
    def zero_level(self):
        return self.full_scale if self.kind == "u" else 0

    @property
    def stored_dtype(self):
        """NumPy dtype of what one component is read as; three bytes for 24-bit integers."""
        if self.bits == 24:
            return np.dtype((np.uint8, 3))
        return np.dtype(f"{'>' if self.big_endian else '<'}{self.kind}{self.component_bytes}")

    @property
    def native_dtype(self):
        return self.stored_dtype.newbyteorder("=")

    @property
    def kept_as_stored(self):
        """Whether the analysis bank takes these samples as they are, without a conversion."""
        return (self.kind, self.bits) in {("f", 32), ("f", 64), ("i", 8), ("u", 8), ("i", 16)}

    @property
    def float_dtype(self):
        """The narrowest float that holds every value exactly."""
        return np.dtype(
            np.float64 if self.bits > 24 and (self.integer or self.bits == 64) else "f4"
        )

    def buffer(self, count, streams):
        """An empty array for `count` samples of `streams` interleaved streams, as stored."""
        return np.empty((count, streams, self.components), self.stored_dtype)

    def decode(self, stored, as_float=None):
        """Stored components (samples, streams, components) as samples with time on the last axis.

        The array is used up: the result may share its memory.
        """
        if self.kept_as_stored and as_float is None:
            if not stored.dtype.isnative:
                stored = stored.byteswap(inplace=True).view(stored.dtype.newbyteorder("="))
            values = stored
        else:
            values = self._scaled(stored, as_float)
        streams = values.shape[1]
        if self.complex and values.dtype.kind == "f":
            dtype = np.complex64 if values.dtype.itemsize == 4 else np.complex128
            values = values.view(dtype)
        if streams == 1:
            return values.reshape(-1)
        return np.ascontiguousarray(values.transpose(1, 0, 2)).reshape(streams, -1)

    def _scaled(self, stored, as_float):
        dtype = {"single": np.float32, "double": np.float64, None: self.float_dtype}[as_float]
        if self.bits == 24:
            # The three bytes become the upper ones of a 32-bit integer, which carries the sign.
            wide = np.zeros((*stored.shape[:-1], 4), np.uint8)
            wide[..., 1:] = stored
            stored = wide.view("<i4")[..., 0] >> 8
        # 32-bit integers less their zero level need more than single precision has.
        values = stored.astype(np.float64 if self.bits == 32 and self.integer else dtype)
        if self.integer:
            values -= self.zero_level
            values *= 1 / self.full_scale
        return values.astype(dtype, copy=False)

    def encode(self, samples, streams):
        """Samples as stored components (samples, streams, components), and how many clipped.

        Raises TypeError or ValueError where `samples` does not fit; see `SigMFWriter.write`.
        """
        samples = np.asarray(samples)
        raw = self.integer and samples.dtype.newbyteorder("=") == self.native_dtype
        kinds = "c" if self.complex else "f"
        if not raw and samples.dtype.kind not in kinds:
            accepted = f"an array of {'complex' if self.complex else 'real'} floats"
            if self.integer:
                accepted += (
                    f" or of {self.native_dtype} {'interleaved I/Q' if self.complex else ''}"
                )
            raise wrong_type("samples", f"{accepted.rstrip()} for {self.name}", samples)
        per_sample = self.components if raw else 1
        shape = (streams, -1) if streams > 1 else (-1,)
        if samples.ndim != len(shape) or (streams > 1 and samples.shape[0] != streams):
            wanted = f"({streams}, samples)" if streams > 1 else "(samples,)"
            raise wrong_value("samples", f"an array of shape {wanted}", samples)
        if samples.shape[-1] % per_sample:
            raise wrong_value("samples", "whole I/Q pairs along the last axis", samples)
        clipped = 0
        if not raw and self.integer:
            samples, clipped = self._quantised(samples)
        elif not raw:
            samples = self._narrowed(samples)
        values = samples.reshape(streams, -1, self.components).transpose(1, 0, 2)
        return np.ascontiguousarray(values, dtype=self.stored_dtype), clipped

    def _narrowed(self, samples):
        size = self.component_bytes * self.components
        dtype = np.dtype(f"{'c' if self.complex else 'f'}{size}")
        try:
            with np.errstate(over="raise"):
                values = samples.astype(dtype)
        except FloatingPointError:
            raise ValueError(
                f"samples must fit into {self.name}; the largest magnitude given is "
                f"{np.abs(samples[np.isfinite(samples)]).max():g}"
            ) from None
        return np.ascontiguousarray(values).view(f"f{self.component_bytes}")

    def _quantised(self, samples):
        if not np.isfinite(samples).all():
            where = int(np.flatnonzero(~np.isfinite(samples.ravel()))[0])
            raise ValueError(
                f"samples must be finite to become {self.name}; element {where} is "
                f"{samples.ravel()[where]}"
            )
        samples = np.ascontiguousarray(samples)
        wide = np.float64 if self.bits > 16 else samples.real.dtype
        values = samples.view(samples.real.dtype).astype(wide)
        values *= self.full_scale
        np.rint(values, out=values)
        low, high = -self.full_scale, self.full_scale - 1
        clipped = int(np.count_nonzero((values < low) | (values > high)))
        np.clip(values, low, high, out=values)
        values += self.zero_level
        return values.astype(self.native_dtype), clipped


class DatatypeRule(Rule):
    """A parameter that is the name of a SigMF datatype."""

    accepted = GRAMMAR

    def check(self, name, value):
        if not isinstance(value, str):
            raise wrong_type(name, self.accepted, value)
        datatype = Datatype.parse(value)
        if datatype is None or datatype.bits == 24:
            raise wrong_value(name, self.accepted, value)
        return datatype.name

    def violations(self):
        return [(3, TypeError), ("ci16", ValueError), ("float", ValueError), ("", ValueError)]
