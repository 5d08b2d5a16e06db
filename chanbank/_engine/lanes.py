"""Explicit vectors for the compiled kernels: the host's width, loads, stores, fused products.

Left to itself the compiler picks half-width vectors for loops like ours, and slows down several
times where a loop's bounds are run-time values. So the kernels spell their vectors out in LLVM IR,
through the few names of this module. They pass addresses as integers: a kernel's operands are rows
of padded buffers, and one signature then serves every array a caller may bring.
"""

import os

import llvmlite.binding as llvm
from llvmlite import ir
from numba import config, types
from numba.core import cgutils
from numba.core.datamodel import models
from numba.extending import intrinsic, register_model

__all__ = [
    "INDEX",
    "VECTOR_BYTES",
    "Lanes",
    "Variant",
    "address_as_pointer",
    "as_lane",
    "fence",
    "is_real",
    "lane_bytes",
    "lane_type",
    "make_variant",
    "pieces_of",
    "plain",
]

INDEX = ir.IntType(64)
_LANE_INDEX = ir.IntType(32)


def _host_vector_bytes():
    asked = os.environ.get("CHANBANK_VECTOR_BYTES")  # narrower vectors, for tests
    if asked in ("16", "32", "64"):
        return int(asked)
    if config.CPU_NAME == "generic":
        return 16
    features = llvm.get_host_cpu_features()
    if features.get("avx512f"):
        return 64
    return 32 if features.get("avx") and features.get("fma") else 16


VECTOR_BYTES = _host_vector_bytes()


class Variant(types.Opaque):
    """A type that carries what a kernel is specialised on; its value is empty.

    `lane` is the bytes of one float (4 or 8); `real` says that samples are single floats, not I/Q
    pairs; `step` is the distance in rows between frames that are folded together (0: not known to
    the compiler, so that rows are not shared between frames); `radix` is the number of pieces that
    a long DFT is split into (1: not split).
    """

    def __init__(self, lane, real, step, radix):
        self.lane, self.real, self.step, self.radix = lane, real, step, radix
        super().__init__(f"Variant(lane={lane}, real={real}, step={step}, radix={radix})")


register_model(Variant)(models.OpaqueModel)


@intrinsic(prefer_literal=True)
def make_variant(typingctx, lane, real, step, radix):
    """The (empty) value of a Variant, from integers known to the compiler."""
    lane_value, real_value = lane.literal_value, bool(real.literal_value)
    variant = Variant(lane_value, real_value, step.literal_value, radix.literal_value)

    def codegen(context, builder, signature, args):
        return context.get_dummy_value()

    return variant(lane, real, step, radix), codegen


@intrinsic
def plain(typingctx, variant):
    """The variant that says no more than the size of a float.

    Kernels that need no more are given this one: compiled once, they serve all variants.
    """

    def codegen(context, builder, signature, args):
        return context.get_dummy_value()

    return Variant(variant.lane, False, 0, 1)(variant), codegen


@intrinsic
def address_as_pointer(typingctx, address):
    """An integer address as a pointer, for numba.carray."""

    def codegen(context, builder, signature, args):
        return builder.inttoptr(args[0], cgutils.voidptr_t)

    return types.voidptr(types.int64), codegen


@intrinsic
def is_real(typingctx, variant):
    """Whether a variant's samples are single floats; a constant to the compiler."""

    def codegen(context, builder, signature, args):
        return context.get_constant(types.boolean, variant.real)

    return types.boolean(variant), codegen


@intrinsic
def lane_bytes(typingctx, variant):
    """The bytes of one float of a variant; a constant to the compiler."""

    def codegen(context, builder, signature, args):
        return context.get_constant(types.int64, variant.lane)

    return types.int64(variant), codegen


@intrinsic
def pieces_of(typingctx, variant):
    """How many pieces a variant's DFTs are split into; a constant to the compiler."""

    def codegen(context, builder, signature, args):
        return context.get_constant(types.int64, variant.radix)

    return types.int64(variant), codegen


@intrinsic
def fence(typingctx):
    """Order non-temporal stores before anything another thread may see afterwards."""

    def codegen(context, builder, signature, args):
        builder.fence("seq_cst")
        return context.get_dummy_value()

    return types.void(), codegen


@intrinsic
def lane_type(typingctx, variant):
    """The float type of a variant, for arrays over its buffers."""

    def codegen(context, builder, signature, args):
        return context.get_dummy_value()

    return types.DType(_lane(variant))(variant), codegen


@intrinsic
def as_lane(typingctx, variant, number):
    """A number as a float of the variant's type, rounded once."""

    def codegen(context, builder, signature, args):
        return context.cast(builder, args[1], number, _lane(variant))

    return _lane(variant)(variant, number), codegen


def _lane(variant):
    return types.float32 if variant.lane == 4 else types.float64


class Lanes:
    """Writes the vector instructions of one kernel: `width` floats of `lane` bytes each."""

    def __init__(self, builder, lane):
        self.builder, self.lane = builder, lane
        self.width = VECTOR_BYTES // lane
        self.float = ir.FloatType() if lane == 4 else ir.DoubleType()
        self.full = ir.VectorType(self.float, self.width)
        self.half = ir.VectorType(self.float, self.width // 2)
        name = f"llvm.fma.v{self.width}f{8 * lane}"
        kind = ir.FunctionType(self.full, [self.full] * 3)
        self._fma = cgutils.get_or_insert_function(builder.module, kind, name)

    def index(self, number):
        return ir.Constant(INDEX, number)

    def add(self, left, right):
        right = self.index(right) if isinstance(right, int) else right
        return self.builder.add(left, right)

    def times(self, left, right):
        right = self.index(right) if isinstance(right, int) else right
        return self.builder.mul(left, right)

    def parts(self, pair):
        """The members of a tuple operand."""
        return [self.builder.extract_value(pair, i) for i in range(pair.type.count)]

    def zero(self):
        return ir.Constant(self.full, [0.0] * self.width)

    def load(self, address, kind=None, align=None):
        kind = kind or self.full
        pointer = self.builder.inttoptr(address, kind.as_pointer())
        return self.builder.load(pointer, align=align or self.lane)

    def store(self, value, address, *, align=None, stream=False):
        """`stream` writes past the caches (the address must be aligned to the value's size)."""
        pointer = self.builder.inttoptr(address, value.type.as_pointer())
        done = self.builder.store(value, pointer, align=align or self.lane)
        if stream:
            one = self.builder.module.add_metadata([ir.Constant(_LANE_INDEX, 1)])
            done.set_metadata("nontemporal", one)

    def fma(self, left, right, addend):
        return self.builder.call(self._fma, [left, right, addend])

    def pick(self, left, right, lanes):
        """Lanes of two vectors by number, those of `right` counted on from those of `left`."""
        mask = ir.Constant(ir.VectorType(_LANE_INDEX, len(lanes)), list(lanes))
        return self.builder.shuffle_vector(left, right, mask)

    def doubled(self, half):
        """(a, b, ...) as (a, a, b, b, ...): one real tap for I and Q."""
        undefined = ir.Constant(half.type, ir.Undefined)
        return self.pick(half, undefined, [lane // 2 for lane in range(self.width)])
