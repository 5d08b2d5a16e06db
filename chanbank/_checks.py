"""Parameter rules and their error messages.

Each public parameter is given its rule once, by the `checked` decorator on the callable that
takes it. A rule names what it accepts, turns an accepted value into its canonical form, and can
list values that it must refuse, so that one test sweeps every public parameter.

A wrong type raises `TypeError`, a wrong value `ValueError`; both name the parameter, what is
accepted and what was given.
"""

import functools
import inspect
import math
import numbers
import operator
import os
from fractions import Fraction

import numpy as np

__all__ = [
    "Array",
    "Boolean",
    "Choice",
    "Frequency",
    "Instance",
    "Integer",
    "Optional",
    "OwnCheck",
    "PathLike",
    "Rational",
    "Real",
    "Text",
    "checked",
    "exact_number",
    "message",
    "wrong_type",
    "wrong_value",
]


def message(name, accepted, given):
    """One sentence for every refusal: the parameter, what is accepted, what came."""
    return f"{name} must be {accepted}; got {_shown(given)}"


def wrong_type(name, accepted, given):
    """The TypeError for a parameter of the wrong type (returned, to be raised by the caller)."""
    return TypeError(message(name, accepted, given) + f" ({type(given).__name__})")


def wrong_value(name, accepted, given):
    """The ValueError for a parameter of the right type and a wrong value."""
    return ValueError(message(name, accepted, given))


def _shown(value):
    if isinstance(value, np.ndarray):
        return f"an array of shape {value.shape} and dtype {value.dtype}"
    text = repr(value)
    return text if len(text) <= 120 else text[:117] + "..."


def exact_number(value):
    """A float, integer, Fraction, decimal or "a/b" text as the Fraction it stands for.

    Returns None where the value is not a finite number of one of these types.
    """
    if isinstance(value, (bool, np.bool_)):
        return None
    if isinstance(value, str):
        try:
            return Fraction(value)
        except (ValueError, ZeroDivisionError):
            return None
    if isinstance(value, numbers.Rational):
        return Fraction(int(value.numerator), int(value.denominator))
    if isinstance(value, numbers.Real):
        number = float(value)
        return Fraction(number) if math.isfinite(number) else None
    return None


class Rule:
    """What a parameter accepts: `check` returns the canonical value or raises."""

    accepted = ""

    def check(self, name, value):
        raise NotImplementedError

    def violations(self):
        """Pairs (value, exception class) that the rule must refuse."""
        return []


class Integer(Rule):
    """A whole number from `low` to `high`, both included (None: no bound)."""

    def __init__(self, low=None, high=None):
        self.low, self.high = low, high
        if low is not None and high is not None:
            self.accepted = f"an integer from {low} to {high}"
        elif low is not None:
            self.accepted = f"an integer of {low} or more"
        else:
            self.accepted = "an integer"

    def check(self, name, value):
        if isinstance(value, (bool, np.bool_)):
            raise wrong_type(name, self.accepted, value)
        try:
            number = operator.index(value)
        except TypeError:
            raise wrong_type(name, self.accepted, value) from None
        if (self.low is not None and number < self.low) or (
            self.high is not None and number > self.high
        ):
            raise wrong_value(name, self.accepted, value)
        return number

    def violations(self):
        bad = [(value, TypeError) for value in (1.5, "3", True, np.zeros(2), [1], math.nan, 1j)]
        if self.low is not None:
            bad.append((self.low - 1, ValueError))
        if self.high is not None:
            bad.append((self.high + 1, ValueError))
        return bad


class Real(Rule):
    """A finite real number within bounds, returned as a float."""

    def __init__(self, low=None, high=None, *, above=None, below=None, unit=""):
        self.low, self.high, self.above, self.below = low, high, above, below
        bounds = []
        if above is not None:
            bounds.append(f"above {above:g}")
        if low is not None:
            bounds.append(f"of at least {low:g}")
        if below is not None:
            bounds.append(f"below {below:g}")
        if high is not None:
            bounds.append(f"of at most {high:g}")
        words = "a finite number" + (f" of {unit}" if unit else "")
        self.accepted = words + (" " + " and ".join(bounds) if bounds else "")

    def check(self, name, value):
        if isinstance(value, (bool, np.bool_)) or not isinstance(value, numbers.Real):
            raise wrong_type(name, self.accepted, value)
        number = float(value)
        if not math.isfinite(number) or not self._inside(number):
            raise wrong_value(name, self.accepted, value)
        return number

    def _inside(self, number):
        return not (
            (self.low is not None and number < self.low)
            or (self.high is not None and number > self.high)
            or (self.above is not None and number <= self.above)
            or (self.below is not None and number >= self.below)
        )

    def violations(self):
        bad = [(value, TypeError) for value in ("3", True, [1.0], 1j)]
        bad += [(value, ValueError) for value in (math.nan, math.inf, -math.inf)]
        if self.low is not None:
            bad.append((self.low - 1, ValueError))
        if self.above is not None:
            bad.append((self.above, ValueError))
        if self.high is not None:
            bad.append((self.high + 1, ValueError))
        if self.below is not None:
            bad.append((self.below, ValueError))
        return bad


class Rational(Rule):
    """A finite number kept exactly: float, integer, Fraction or text such as "25000/3"."""

    def __init__(self, *, above=None, unit=""):
        self.above = above
        words = "a finite number" + (f" of {unit}" if unit else "")
        words += f" above {above}" if above is not None else ""
        self.accepted = words + ' (a float, an integer, a Fraction or text such as "25000/3")'

    def check(self, name, value):
        if isinstance(value, (bool, np.bool_)) or not isinstance(value, (numbers.Real, str)):
            raise wrong_type(name, self.accepted, value)
        number = exact_number(value)
        if number is None or (self.above is not None and number <= self.above):
            raise wrong_value(name, self.accepted, value)
        return number

    def violations(self):
        bad = [(value, TypeError) for value in (True, [1.0], 1j, None)]
        bad += [(value, ValueError) for value in (math.nan, math.inf, "fast", "1/0")]
        if self.above is not None:
            bad += [(self.above, ValueError), (self.above - 1, ValueError)]
        return bad


class Frequency(Rational):
    """A frequency in hertz, kept exactly; any sign."""

    def __init__(self):
        super().__init__(unit="hertz")


class Boolean(Rule):
    """True or False, and nothing that merely counts as one."""

    accepted = "True or False"

    def check(self, name, value):
        if not isinstance(value, (bool, np.bool_)):
            raise wrong_type(name, self.accepted, value)
        return bool(value)

    def violations(self):
        return [(value, TypeError) for value in (1, "yes", None, 0.0)]


class Choice(Rule):
    """One of a few words."""

    def __init__(self, *words):
        self.words = words
        self.accepted = "one of " + ", ".join(repr(word) for word in words)

    def check(self, name, value):
        if not isinstance(value, str):
            raise wrong_type(name, self.accepted, value)
        if value not in self.words:
            raise wrong_value(name, self.accepted, value)
        return value

    def violations(self):
        return [(3, TypeError), (None, TypeError), ("no such word", ValueError)]


class Text(Rule):
    """Any text."""

    accepted = "text"

    def check(self, name, value):
        if not isinstance(value, str):
            raise wrong_type(name, self.accepted, value)
        return value

    def violations(self):
        return [(3, TypeError), (None, TypeError), (b"x", TypeError)]


class PathLike(Rule):
    """The path of a file or folder, as text or os.PathLike."""

    accepted = "a path (text or os.PathLike)"

    def check(self, name, value):
        if not isinstance(value, (str, os.PathLike)):
            raise wrong_type(name, self.accepted, value)
        if os.fspath(value) == "":
            raise wrong_value(name, "a path that is not empty", value)
        return os.fspath(value)

    def violations(self):
        return [(3, TypeError), (None, TypeError), ("", ValueError)]


# What makes an object that is not made by calling its class.
_MAKERS = {
    "Activity": "measure_activity(recording, bank)",
    "BankReport": "bank_report(plan, prototype)",
    "Prototype": "kaiser_prototype(...) or Prototype.load(path)",
    "QuantisedPrototype": "quantised(prototype, bits)",
    "Recording": "open_recording(path)",
}


class Instance(Rule):
    """An object of a class of this library (or one of several)."""

    def __init__(self, *classes):
        self.classes = classes
        names = [cls.__name__ for cls in classes]
        self.accepted = "a " + " or a ".join(names)
        if len(names) == 1 and names[0] in _MAKERS:
            self.accepted += f", as {_MAKERS[names[0]]} returns it"

    def check(self, name, value):
        if not isinstance(value, self.classes):
            raise wrong_type(name, self.accepted, value)
        return value

    def violations(self):
        return [(value, TypeError) for value in (3, "plan", object())]


class Array(Rule):
    """Numbers in an array of `ndim` dimensions, finite unless told otherwise.

    `kinds` holds the accepted NumPy dtype kinds; the canonical form is a read-only float64 or
    complex128 copy, so that a later change of the caller's array cannot reach the object.
    """

    def __init__(self, ndim=1, *, kinds="fiu", finite=True, empty=False):
        self.ndim, self.kinds, self.finite, self.empty = ndim, kinds, finite, empty
        what = "complex or real" if "c" in kinds else "real"
        size = "" if empty else "non-empty "
        shape = f"{ndim}-dimensional " if ndim is not None else ""
        self.accepted = f"a {size}{shape}array of {'finite ' if finite else ''}{what} numbers"

    def check(self, name, value):
        try:
            array = np.asarray(value)
        except (TypeError, ValueError):
            raise wrong_type(name, self.accepted, value) from None
        if array.dtype.kind not in self.kinds:
            raise wrong_type(name, self.accepted, value)
        if self.ndim is not None and array.ndim != self.ndim:
            raise wrong_value(name, self.accepted, value)
        if not self.empty and array.size == 0:
            raise wrong_value(name, self.accepted, value)
        array = array.astype(np.complex128 if array.dtype.kind == "c" else np.float64)
        if self.finite and not np.isfinite(array).all():
            where = int(np.flatnonzero(~np.isfinite(array.ravel()))[0])
            raise ValueError(
                f"{name} must be {self.accepted}; element {where} is {array.ravel()[where]}"
            )
        array.flags.writeable = False
        return array

    def violations(self):
        bad = [("taps", TypeError), (None, TypeError), ([object()], TypeError)]
        if self.ndim is not None:
            bad.append((np.ones((2,) * (self.ndim + 1)), ValueError))
        if not self.empty:
            bad.append((np.zeros((0,) * (self.ndim or 1)), ValueError))
        if self.finite:
            bad.append((np.full((2,) * (self.ndim or 1), math.nan), ValueError))
        return bad


class Optional(Rule):
    """None, or what the inner rule accepts."""

    def __init__(self, rule):
        self.rule = rule
        self.accepted = f"None or {rule.accepted}"

    def check(self, name, value):
        if value is None:
            return None
        try:
            return self.rule.check(name, value)
        except (TypeError, ValueError) as error:
            text = str(error).replace(self.rule.accepted, self.accepted, 1)
            raise type(error)(text) from None

    def violations(self):
        return [pair for pair in self.rule.violations() if pair[0] is not None]


class OwnCheck(Rule):
    """A parameter that its callable checks in its own code.

    `accepted` says what it takes; `bad` lists pairs (value, exception class) for the sweep test.
    """

    def __init__(self, accepted, *bad):
        self.accepted, self._bad = accepted, list(bad)

    def check(self, name, value):
        return value

    def violations(self):
        return self._bad


def checked(*, call=True, **rules):
    """Declare the rule of every parameter of a callable, and check them on each call.

    With ``call=False`` the rules are only declared (for hot methods, which check in their own
    code). The decorated callable carries them as ``parameter_rules``.
    """

    def decorate(function):
        signature = inspect.signature(function)
        names = [name for name in signature.parameters if name not in ("self", "cls")]
        if set(names) != set(rules):
            raise TypeError(f"{function.__qualname__}: rules for {sorted(rules)}, has {names}")
        if not call:
            function.parameter_rules = rules
            return function

        @functools.wraps(function)
        def wrapper(*args, **kwargs):
            bound = signature.bind(*args, **kwargs)
            bound.apply_defaults()
            for name in names:
                bound.arguments[name] = rules[name].check(name, bound.arguments[name])
            return function(*bound.args, **bound.kwargs)

        wrapper.parameter_rules = rules
        return wrapper

    return decorate
