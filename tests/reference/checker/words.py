"""Words of projectors under the trace.

A letter is a tuple: ("R", x) a state, ("M", b, y) an outcome with b < B - 1, ("V",) the carrier, ("N",) what lies outside it. A word is a
tuple of letters and stands for the real part of its trace, so it may be turned round and read backwards. A polynomial is a dictionary from words
to integers.

The normal form: with a state in the word, V is written 1 - N; without one, N is written 1 - V. Where all leakages are exactly zero and there
are two outcomes, extremal measurements are projective on the carrier itself: V is the identity there and N is zero, and a word without
a state stands for its trace over the carrier (kept under a leading V).
"""

from functools import lru_cache
from itertools import product


class Refused(Exception):
    """Why something is not believed."""


def require(condition, reason):
    if not condition:
        raise Refused(reason)


def is_natural(text, below):
    return text.isascii() and text.isdigit() and str(int(text)) == text and int(text) < below


def parse(text, geometry):
    """The letters of a monomial such as "R0 M0|1"."""
    letters = []
    parts = text.split(" ")
    require(len(parts) <= 4, "a monomial has more than four letters")
    for part in parts:
        if part in ("V", "N"):
            letters.append((part,))
        elif part.startswith("R") and is_natural(part[1:], geometry["preparations"]):
            letters.append(("R", int(part[1:])))
        else:
            outcome, bar, measurement = part[1:].partition("|")
            exists = bar and is_natural(outcome, geometry["outcomes"] - 1) and is_natural(measurement, geometry["measurements"])
            require(part.startswith("M") and exists, f'there is no letter "{part}" in this geometry')
            letters.append(("M", int(outcome), int(measurement)))
    return tuple(letters)


class Algebra:
    """The rules of one geometry, with the preparations whose leakage is exactly zero."""

    def __init__(self, geometry, exact):
        self.outcomes = geometry["outcomes"]
        self.exact = tuple(exact)
        self.flat = self.outcomes == 2 and all(exact)
        self.trace = lru_cache(maxsize=None)(self._trace)

    def vanishes(self, left, right):
        if left[0] == "M" == right[0]:
            return left[2] == right[2] and left[1] != right[1]
        kinds = {left[0], right[0]}
        if kinds == {"V", "N"}:
            return True
        if kinds == {"R", "N"}:
            state = left if left[0] == "R" else right
            return self.exact[state[1]]
        return False

    def shorten(self, word):
        """A word as a necklace without repeated neighbours; None if it is zero."""
        stack = []
        for letter in word:
            if stack and stack[-1] == letter:
                continue
            if stack and self.vanishes(stack[-1], letter):
                return None
            stack.append(letter)
        while len(stack) > 1 and stack[0] == stack[-1]:
            stack.pop()
        if len(stack) > 1 and self.vanishes(stack[-1], stack[0]):
            return None
        return tuple(stack)

    @staticmethod
    def necklace(word):
        """One representative of all turns of a word and of its reversal."""
        turns = [word[i:] + word[:i] for i in range(len(word))] or [word]
        return min(min(turn, turn[::-1]) for turn in turns)

    def _trace(self, word):
        has_state = any(letter[0] == "R" for letter in word)
        require(has_state or ("V",) in word, "a word holds neither a state nor the carrier")
        total = {}
        if self.flat:
            if ("N",) in word:
                return total
            inner = self.shorten(tuple(letter for letter in word if letter[0] != "V"))
            if inner is not None:
                turned = self.necklace(inner)
                total[turned if has_state else (("V",),) + turned] = 1
            return total
        rewritten, other = (("V",), ("N",)) if has_state else (("N",), ("V",))
        places = [i for i, letter in enumerate(word) if letter == rewritten]
        # Every occurrence is either the identity, or minus the other letter.
        for swapped in product((False, True), repeat=len(places)):
            choice = dict(zip(places, swapped))
            letters = tuple(other if i in choice else letter for i, letter in enumerate(word) if choice.get(i, True))
            short = self.shorten(letters)
            if short is not None:
                key = self.necklace(short)
                total[key] = total.get(key, 0) + (-1) ** sum(swapped)
        return {key: c for key, c in total.items() if c}

    @staticmethod
    def element(word, sign):
        """u + u* or u - u*."""
        total = {}
        for letters, c in ((word, 1), (word[::-1], sign)):
            total[letters] = total.get(letters, 0) + c
        return {letters: c for letters, c in total.items() if c}

    def product(self, left, right):
        """The trace of the product of the first element's adjoint with the second element."""
        total = {}
        for u, a in left.items():
            for v, b in right.items():
                for word, c in self.trace(u[::-1] + v).items():
                    total[word] = total.get(word, 0) + a * b * c
        return {word: c for word, c in total.items() if c}

    def probability(self, x, y, b):
        """R_x M_b|y, the last outcome being R_x minus the others."""
        state = ("R", x)
        if b < self.outcomes - 1:
            return self.trace((state, ("M", b, y)))
        total = dict(self.trace((state,)))
        for other in range(self.outcomes - 1):
            for word, c in self.trace((state, ("M", other, y))).items():
                total[word] = total.get(word, 0) - c
        return total
