"""Exact phases: exp(-2j pi step t) at any absolute t, the phase reduced in integers."""

import numpy as np

__all__ = ["Rotor", "times", "unit_circle"]

_PERIOD_LIMIT = 1 << 14
_BLOCK = 1 << 12


def unit_circle(numerators, denominator):
    """exp(-2j pi numerator / denominator) for an iterable of Python integers, reduced first."""
    half = denominator // 2
    turns = np.array(
        [((n + half) % denominator - half) / denominator for n in numerators], np.float64
    )
    return np.cos(2 * np.pi * turns) - 1j * np.sin(2 * np.pi * turns)


def times(left, right, out):
    """out = left * right for complex arrays, in real products that round alike everywhere.

    NumPy's own complex product fuses a multiplication and an addition in its vector body and not
    in the tail, so its bits depend on where in an array a sample stands.
    """
    a, b, c, d = left.real, left.imag, right.real, right.imag
    real = a * c
    real -= b * d
    imag = a * d
    imag += b * c
    out.real[...] = real
    out.imag[...] = imag


class Rotor:
    """exp(-2j pi step t) for consecutive t, `step` an exact Fraction.

    A short period is one table. Otherwise t = block * 4096 + rest: the block's phase comes from
    Python integers, the rest from a table, and the value is their product. Either way it depends
    on t alone, so a stream gives the same bits however it is cut, and after 10^12 samples the
    phase is as exact as after ten.
    """

    def __init__(self, step):
        self.numerator, self.denominator = step.numerator, step.denominator
        self.periodic = self.denominator <= _PERIOD_LIMIT
        size = self.denominator if self.periodic else _BLOCK
        self.table = unit_circle((self.numerator * t for t in range(size)), self.denominator)

    def values(self, start, count):
        """The values at t = start .. start + count - 1, complex128."""
        if self.periodic:
            return self.table[(start % self.denominator + np.arange(count)) % self.denominator]
        result = np.empty(count, np.complex128)
        done = 0
        while done < count:
            block, rest = divmod(start + done, _BLOCK)
            take = min(_BLOCK - rest, count - done)
            head = unit_circle([self.numerator * _BLOCK * block], self.denominator)[0]
            times(self.table[rest : rest + take], head, result[done : done + take])
            done += take
        return result
