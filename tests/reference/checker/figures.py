"""Numbers of a document, and logarithms with sixty digits.

A decimal in a document means what is written. Sixty digits are some forty more than any figure of a document has, so comparisons with them
are made as if they were exact.
"""

import hashlib
import json
from decimal import Context, Decimal, setcontext
from fractions import Fraction

from words import require

setcontext(Context(prec=60, Emin=-999999999, Emax=999999999))
LN2 = Decimal(2).ln()


class Real(Fraction):
    """A number with a decimal point, its text kept for digests."""

    def __new__(cls, text):
        number = super().__new__(cls, text)
        number.text = text
        return number

    def __deepcopy__(self, memo):
        return self


def unique(pairs):
    names = [name for name, _ in pairs]
    require(len(set(names)) == len(names), "a member occurs twice")
    return dict(pairs)


def no_constant(name):
    require(False, f"{name} is no number")


def read(text):
    return json.loads(text, parse_float=Real, parse_constant=no_constant, object_pairs_hook=unique)


def compact(value):
    """JSON without spaces, numbers as they were written."""
    if isinstance(value, Real):
        return value.text
    if isinstance(value, dict):
        return "{" + ",".join(json.dumps(name) + ":" + compact(member) for name, member in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ",".join(compact(member) for member in value) + "]"
    return json.dumps(value, ensure_ascii=False)


def digest(value):
    return "sha256:" + hashlib.sha256(compact(value).encode()).hexdigest()


def real(value):
    return Decimal(value.numerator) / Decimal(value.denominator)


def ln(value):
    return (value if isinstance(value, Decimal) else real(value)).ln()


def log2(value):
    return ln(value) / LN2


def shown(value):
    """The decimal that is written for the double nearest to a value."""
    return Fraction(repr(float(value)))


def at_most(claimed, proved, tolerance, what):
    """A claimed lower bound: not above what is proved, nor below it by more than a tolerance, which is what rounding may cost."""
    between(claimed, proved, -tolerance, what)


def at_least(claimed, proved, tolerance, what):
    """A claimed upper bound: not below what is proved, nor above it by more than a tolerance."""
    between(claimed, proved, tolerance, what)


def between(claimed, proved, room, what):
    claimed, proved, room = (n if isinstance(n, Decimal) else real(Fraction(n)) for n in (claimed, proved, room))
    low, high = min(proved, proved + room), max(proved, proved + room)
    require(low <= claimed <= high, f"{what}: {float(claimed)!r} is recorded, {float(proved)!r} is what follows")
