"""The first step of a long DFT, taken while its input is still in cache.

A DFT of M = R * C points whose arrays outgrow the second-level cache costs far more than one that
fits. With t = t1*C + t2 and k = k1 + R*k2 (J. W. Cooley and J. W. Tukey, Math. Comp. 19, 1965),

    X[k1 + R*k2] = sum_t2 W_C^(t2*k2) { W_M^(t2*k1) sum_t1 W_R^(t1*k1) x[t1*C + t2] },

the braces are R-point DFTs across the R pieces of a row, column by column. They can be done in
registers while a tile of the row has just been folded; what is left are R short DFTs, piece by
piece, whose results are interleaved on their way out. The inverse runs the other way round: short
DFTs first, then the factors and the R-point DFTs.

A long row of real samples is taken as complex ones of half the length, two by two, so that all this
serves it too; a last pass makes the spectrum of the real row from that of the complex one.
"""

import cmath
import math

from llvmlite import ir
from numba import types
from numba.core import cgutils
from numba.extending import intrinsic

from chanbank._engine.lanes import VECTOR_BYTES, Lanes

__all__ = ["join_pieces", "real_spectrum", "split_pieces"]


@intrinsic
def split_pieces(typingctx, variant, row, stride, factors, factor_stride, vectors):
    """R-point DFTs across the pieces of a row, times the factors, in place.

    The pieces lie `stride` bytes apart. Of each, `vectors` vectors are taken, from `row` on;
    `factors` is where those columns' factors W_M^(t2*k1) for k1 = 1 begin, a row for every k1.
    """

    def codegen(context, builder, signature, args):
        lanes = Lanes(builder, variant.lane)
        _, row, stride, factors, factor_stride, vectors = args
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            pieces = _Pieces(lanes, lanes.add(row, along), stride)
            weights = _Pieces(lanes, lanes.add(factors, along), factor_stride)
            values = _transform(lanes, [pieces.load(r) for r in range(variant.radix)], -1)
            for k, value in enumerate(values):
                pieces.store(k, _product(lanes, value, weights.load(k - 1)) if k else value)
        return context.get_dummy_value()

    return types.void(variant, *[types.int64] * 5), codegen


@intrinsic
def join_pieces(typingctx, variant, source, stride, factors, factor_stride, target, apart, vectors):
    """The inverse of `split_pieces`: times the factors (conjugate to those), R-point inverse DFTs.

    From pieces `stride` bytes apart to pieces `apart` bytes apart.
    """

    def codegen(context, builder, signature, args):
        lanes = Lanes(builder, variant.lane)
        _, source, stride, factors, factor_stride, target, apart, vectors = args
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            given = _Pieces(lanes, lanes.add(source, along), stride)
            made = _Pieces(lanes, lanes.add(target, along), apart)
            weights = _Pieces(lanes, lanes.add(factors, along), factor_stride)
            values = [given.load(0)]
            for k in range(1, variant.radix):
                values.append(_product(lanes, given.load(k), weights.load(k - 1)))
            for r, value in enumerate(_transform(lanes, values, 1)):
                made.store(r, value)
        return context.get_dummy_value()

    return types.void(variant, *[types.int64] * 7), codegen


@intrinsic
def real_spectrum(typingctx, variant, source, factors, target, points):
    """The DFT of M real numbers from that of the same taken as H = M/2 complex ones, Z.

        X[k], conj(X[H - k]) = E + F, E - F,
        E = (Z[k] + conj(Z[H - k])) / 2,   F = factor[k] (Z[k] - conj(Z[H - k])) / 2,

    with factor[k] = -1j W_M^k, for k = 0 .. H/2 (J. W. Cooley, P. A. W. Lewis and P. D. Welch, J.
    Sound Vib. 12, 1970). `points` is H, a multiple of a vector's; `source` holds Z[H] = Z[0] too.
    """

    def codegen(context, builder, signature, args):
        lanes = Lanes(builder, variant.lane)
        _, source, factors, target, points = args
        size, side = 2 * variant.lane, lanes.width // 2
        vectors = lanes.add(builder.udiv(points, lanes.index(2 * side)), 1)
        mirrored = [2 * (side - 1 - lane // 2) + lane % 2 for lane in range(lanes.width)]
        conjugate, half = _constant(lanes, (1.0, -1.0)), _constant(lanes, (0.5, 0.5))
        with cgutils.for_range(builder, vectors) as loop:
            along = lanes.times(loop.index, VECTOR_BYTES)
            last = builder.sub(lanes.times(points, size), along)
            behind = builder.sub(last, lanes.index((side - 1) * size))
            upper = lanes.load(lanes.add(source, along))
            lower = lanes.load(lanes.add(source, behind))
            lower = builder.fmul(lanes.pick(lower, lower, mirrored), conjugate)
            even = builder.fmul(builder.fadd(upper, lower), half)
            odd = builder.fmul(builder.fsub(upper, lower), half)
            odd = _product(lanes, odd, lanes.load(lanes.add(factors, along)))
            lanes.store(builder.fadd(even, odd), lanes.add(target, along))
            rest = builder.fmul(builder.fsub(even, odd), conjugate)
            lanes.store(lanes.pick(rest, rest, mirrored), lanes.add(target, behind))
        return context.get_dummy_value()

    return types.void(variant, *[types.int64] * 4), codegen


class _Pieces:
    """The same column's vectors of rows some bytes apart."""

    def __init__(self, lanes, start, stride):
        self.lanes, self.start, self.stride = lanes, start, stride

    def load(self, number):
        return self.lanes.load(self._place(number))

    def store(self, number, value):
        self.lanes.store(value, self._place(number))

    def _place(self, number):
        return self.lanes.add(self.start, self.lanes.times(self.stride, number))


def _constant(lanes, pair):
    """A vector of one pair of numbers over and over: what to multiply I and Q by."""
    return ir.Constant(lanes.full, [pair[lane % 2] for lane in range(lanes.width)])


def _crossed(lanes, value):
    """(I, Q, ...) as (Q, I, ...)."""
    return lanes.pick(value, value, [lane ^ 1 for lane in range(lanes.width)])


def _product(lanes, value, factor):
    """The product of complex vectors, two roundings a part."""
    builder = lanes.builder
    real = lanes.pick(factor, factor, [lane & ~1 for lane in range(lanes.width)])
    imaginary = lanes.pick(factor, factor, [lane | 1 for lane in range(lanes.width)])
    imaginary = builder.fmul(imaginary, _constant(lanes, (-1.0, 1.0)))
    return lanes.fma(value, real, builder.fmul(_crossed(lanes, value), imaginary))


def _transform(lanes, values, sign):
    """The DFT across a list of vectors, by halves; `sign` is that of the exponent."""
    count = len(values)
    if count == 1:
        return values
    even = _transform(lanes, values[::2], sign)
    odd = _transform(lanes, values[1::2], sign)
    pairs = [_butterfly(lanes, even[k], odd[k], sign * k, count) for k in range(count // 2)]
    return [upper for upper, _ in pairs] + [lower for _, lower in pairs]


def _butterfly(lanes, left, right, turns, count):
    """left + w right and left - w right, w = exp(2j pi turns / count)."""
    builder = lanes.builder
    if turns == 0:
        return builder.fadd(left, right), builder.fsub(left, right)
    crossed = _crossed(lanes, right)
    if 4 * abs(turns) == count:
        s = math.copysign(1.0, turns)
        return tuple(lanes.fma(crossed, _constant(lanes, (-part, part)), left) for part in (s, -s))
    w = cmath.exp(2j * math.pi * turns / count)
    results = []
    for c, s in ((w.real, w.imag), (-w.real, -w.imag)):
        partial = lanes.fma(right, _constant(lanes, (c, c)), left)
        results.append(lanes.fma(crossed, _constant(lanes, (-s, s)), partial))
    return tuple(results)
