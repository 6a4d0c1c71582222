"""Single mutations of a bundle: one value is changed, and whatever is only a name is put right again: digests, and where they are referred to.
So what turns a mutation away is what it says, not that a digest does not fit.
"""

from copy import copy
from fractions import Fraction
from math import inf, nextafter

from figures import Real, digest
from record import counts_digest

OTHERS = {
    "leakage_holds": ["on-average", "every-emission"],
    "rounds": ["independent", "plug-in", "memory"],
    "entropy": ["auto", "guessing", "power"],
    "verdict": ["certified", "refused", "estimate"],
    "level": ["sparse", "lean", "standard", "sharp", "keen"],
    "parity": ["even", "odd"],
    "kind": ["guess", "power", "contradiction"],
    "reason": ["zero-bound", "outside-model", "unverified", "uncommitted"],
}
# Words, names of software, and what was expected or asked for: nothing that is claimed.
SILENT = {"assumptions", "warnings", "version", "timings", "expected_bits", "expected_bits_per_target_round", "expected_bits_per_round",
          "expected_net_bits_per_round", "curve", "lost_rounds", "concerns"}


def get(document, path):
    for step in path:
        document = document[step]
    return document


def put(document, path, value):
    """The document with another value at a place; what is not on the way there is shared."""
    if not path:
        return value
    changed = copy(document)
    changed[path[0]] = put(document[path[0]], path[1:], value)
    return changed


def leaves(document, path=()):
    """Paths of everything that can be changed."""
    if isinstance(document, (dict, list)):
        for step in document if isinstance(document, dict) else range(len(document)):
            if step not in SILENT:
                yield from leaves(document[step], path + (step,))
    else:
        yield path


def section(path):
    """What a path is part of, by names alone."""
    return tuple(step for step in path if isinstance(step, str) and not step.startswith("sha256:"))


def changed(random, path, value, siblings):
    """Another value of the same type; None if there is nothing to change."""
    names = section(path)
    if isinstance(value, bool):
        return not value
    if isinstance(value, int):
        if path[-1] in ("multiplier_bits", "factor_bits", "preparations", "measurements", "outcomes"):
            return value + random.choice([-1, 1])
        choices = [value + 1, value - 1, -value, value ^ 1 << random.randrange(max(value.bit_length(), 1)), 2 * value + 1, 0]
        return random.choice([c for c in choices if c != value])
    if isinstance(value, Real):
        near = float(value)
        # One unit in the last place of an upper or lower bound, a little more, or much more.
        choices = [nextafter(near, inf), nextafter(near, -inf), near * (1 + 1e-9), near * (1 - 1e-9), near * 1.1, near * 0.9, near + 1e-6, near - 1e-6]
        texts = [text for text in map(repr, choices) if Fraction(text) != value]
        return Real(random.choice(texts))
    if isinstance(value, str):
        if path[-1] in OTHERS:
            return random.choice([other for other in OTHERS[path[-1]] if other != value])
        if names[-1] in ("constants", "remainders"):
            return str(int(value) + random.choice([1, -1, 10**6, -(10**6), 10**15, -(10**15)]))
        if names[-1] == "monomials":
            others = [other for other in siblings if other != value] + [" ".join(reversed(value.split(" ")))]
            return random.choice([other for other in others if other != value] or [None])
    return None


def put_names_right(document):
    """Files witnesses under their digests again, and the rest likewise. Returns the document and what was done to it."""
    steps = []

    def replace(path, value):
        nonlocal document
        document = put(document, path, value)
        steps.append({"path": list(path), "value": value})

    for name, witness in list(document["witnesses"].items()):
        right = digest(witness)
        if right != name:
            witnesses = {right if key == name else key: value for key, value in document["witnesses"].items()}
            document = {**document, "witnesses": witnesses}
            steps.append({"rename": name, "to": right})
            for part in ("record", "commitment"):
                for path in list(leaves(document.get(part) or {}, (part,))):
                    if get(document, path) == name:
                        replace(path, right)
    block = document["record"].get("block")
    if block is not None and digest(document["commitment"]) != block["commitment"]:
        replace(("record", "block", "commitment"), digest(document["commitment"]))
    counts = document["record"]["counts"]
    if counts is not None and all(n >= 0 for rows in counts for row in rows for n in row):
        right = counts_digest(counts)
        if right != document["record"]["counts_digest"]:
            replace(("record", "counts_digest"), right)
    return document, steps


def mutations(document, random, count):
    """`count` mutations, spread evenly over the sections of the document: (what, steps, mutated document)."""
    sections = {}
    for path in leaves(document):
        sections.setdefault(section(path), []).append(path)
    names = sorted(sections)
    made, attempt = 0, 0
    while made < count:
        name = names[attempt % len(names)]
        attempt += 1
        path = random.choice(sections[name])
        value = get(document, path)
        if value is None:
            continue
        siblings = get(document, path[:-1]) if name[-1:] == ("monomials",) else ()
        steps = []
        if name == ("record", "counts") and random.random() < 0.5:
            # Rounds that change their outcome: all totals stay.
            setting, moved = path[:-1], random.choice([1, 10, 1000])
            row = list(get(document, setting))
            other = (path[-1] + 1) % len(row)
            if row[path[-1]] < moved:
                continue
            row[path[-1]] -= moved
            row[other] += moved
            path, new = setting, row
        else:
            new = changed(random, path, value, siblings)
            if new is None or new == value:
                continue
        mutated = put(document, path, new)
        mutated, repairs = put_names_right(mutated)
        steps = [{"path": list(path), "value": new}, *repairs]
        made += 1
        yield "/".join(name), steps, mutated
