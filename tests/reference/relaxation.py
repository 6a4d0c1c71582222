"""A reference relaxation: the moment matrix as it stands, not split by parity, in a general modelling layer with other people's solvers.

    python3 -m venv VENV && VENV/bin/pip install -r tests/reference/requirements.txt
    VENV/bin/python tests/reference/relaxation.py                          solves every case again and writes relaxation.json
    VENV/bin/python tests/reference/relaxation.py --case 2to1-standard --solver CLARABEL --time       one case, its value and its seconds

The value of a case is the largest guessing probability of the target's outcome, with the behaviour given exactly. Its words follow
tests/reference/checker/words.py, the other implementation of the algebra. The solver asks 1e-8 of itself, but the larger cases have almost no interior,
where its values moved by up to 2e-7 with its regularisation; "accuracy" in relaxation.json leaves room for that.
"""

import argparse
import json
import sys
import time
from math import sqrt
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parent / "checker"))

import cvxpy as cp
import numpy as np
import scipy.sparse as sp

from words import Algebra

RESULTS = Path(__file__).parent / "relaxation.json"
ACCURACY = 5e-7


def code(visibility):
    """The 2->1 random access code: preparation x encodes the bits of x, measurement y asks for bit y."""
    right = (1 + visibility / sqrt(2)) / 2
    return [[[right, 1 - right] if not x >> y & 1 else [1 - right, right] for y in range(2)] for x in range(4)]


def two_states(success):
    return [[[success, 1 - success]], [[1 - success, success]]]


def unambiguous(overlap, visibility):
    noise = (1 - visibility) / 3
    right, none = visibility * (1 - overlap) + noise, visibility * overlap + noise
    return [[[right, noise, none]], [[noise, right, none]]]


def three_states(success):
    return [[[success if x == b else (1 - success) / 2 for b in range(3)]] for x in range(3)]


def cases():
    """name: (dimension, leakage per preparation, reading, level, target, behaviour)"""
    found = {}

    def add(name, dimension, leakage, reading, level, behaviour, target=(0, 0)):
        rounded = [[[round(p, 6) for p in row[:-1]] for row in rows] for rows in behaviour]
        rounded = [[row + [round(1 - sum(row), 6)] for row in rows] for rows in rounded]
        leakage = leakage if isinstance(leakage, list) else [leakage] * len(behaviour)
        found[name] = dict(dimension=dimension, leakage=leakage, reading=reading, level=level, target=list(target), behaviour=rounded)

    average, every = "on-average", "every-emission"
    add("2to1-standard", 2, 0.001, average, "standard", code(0.99))
    for level in ("lean", "standard"):
        for leakage in (0, 0.001, 0.01, 0.1):
            add(f"2to1-{level}-{leakage}", 2, leakage, average, level, code(0.98))
    add("2to1-sharp-0.001", 2, 0.001, average, "sharp", code(0.98))
    for leakage in (0.001, 0.01, 0.1):
        add(f"2to1-lean-{leakage}-every", 2, leakage, every, "lean", code(0.98))
    for leakage, success in ((0.01, 0.59), (0.05, 0.7), (0.1, 0.75), (0.1, 0.79)):
        for reading in (average, every):
            for level in ("lean", "sharp"):
                add(f"two-states-{level}-{leakage}-{success}-{reading}", 1, leakage, reading, level, two_states(success))
    for overlap in (0.8, 0.9):
        for level in ("lean", "standard"):
            add(f"unambiguous-{level}-{overlap}", 1, round((1 - overlap) / 2, 6), every, level, unambiguous(overlap, 0.99))
    for leakage, success in ((0.05, 0.51), (0.1, 0.6)):
        for reading in (average, every):
            add(f"three-states-{leakage}-{reading}", 1, leakage, reading, "lean", three_states(success), (1, 0))
    for leakage, reading in ((0.003, average), (0.01, every)):
        add(f"three-of-the-code-keen-{leakage}-{reading}", 2, leakage, reading, "keen", code(0.99)[:3], (0, 1))
    add("three-of-the-code-keen-mixed-leakages", 2, [0.003, 0, 0.005], average, "keen", code(0.99)[:3], (0, 1))
    add("2to1-mixed-leakages", 2, [0, 0.001, 0.003, 0], average, "standard", code(0.98), (2, 0))
    add("2to1-mixed-leakages-every", 2, [0, 0.001, 0.003, 0], every, "lean", code(0.98), (2, 1))
    return found


def monomials(level, preparations, measurements, outcomes):
    """A level's monomials with their adjoints, all of them rows of one matrix."""
    states = [("R", x) for x in range(preparations)]
    letters = [("M", b, y) for y in range(measurements) for b in range(outcomes - 1)]
    words = [(r,) for r in states] + [(("V",),)]
    words += [(("V",), m) for m in letters] + [(r, m) for r in states for m in letters] + [(("N",), r) for r in states]
    if level in ("standard", "sharp", "keen"):
        words += [(one, two) for one in states for two in states if one != two]
    if level in ("sharp", "keen"):
        words += [(r, one, two) for r in states for one in letters for two in letters if one[2] != two[2]]
    if level == "keen":
        words += [(r, ("N",), m) for r in states for m in letters]
        words += [word for one in states for two in states if one != two for word in ((("N",), one, two), (one, ("N",), two))]
    return sorted(set(words) | {word[::-1] for word in words})


class Moments:
    """The matrix of all <u* v>, as a sparse map from the moments to its entries. Moment 0 is the weight of the group: <R_x> for every x, and <V>/d."""

    def __init__(self, algebra, words, dimension):
        self.algebra, self.dimension, self.numbers = algebra, dimension, {"weight": 0}
        # Rows that vanish, or that the algebra does not tell apart, are left out.
        kept, seen = [], set()
        for word in words:
            diagonal = algebra.trace(word[::-1] + word)
            row = tuple(sorted((k, tuple(sorted(algebra.trace(word[::-1] + other).items()))) for k, other in enumerate(words)))
            if diagonal and row not in seen:
                seen.add(row)
                kept.append(word)
        self.side = len(kept)
        rows, columns, values = [], [], []
        for i, u in enumerate(kept):
            for j, v in enumerate(kept):
                for moment, c in self.form(algebra.trace(u[::-1] + v)).items():
                    rows.append(i * self.side + j)
                    columns.append(moment)
                    values.append(c)
        self.entries = rows, columns, values

    def form(self, polynomial):
        """A polynomial as coefficients of the moments."""
        form = {}
        for word, c in polynomial.items():
            if word == (("V",),):
                moment, c = 0, c * self.dimension
            elif len(word) == 1:
                moment = 0
            else:
                moment = self.numbers.setdefault(word, len(self.numbers))
            form[moment] = form.get(moment, 0) + c
        return form

    def matrix(self):
        rows, columns, values = self.entries
        return sp.csr_matrix((values, (rows, columns)), shape=(self.side**2, len(self.numbers)))


def solve(case, solver, seconds=float("inf")):
    """Value, status, seconds of modelling and solving, by the clock or of the processor, whichever is less, and the side of the matrix.

    A solver that runs out of time says so in its status.
    """
    behaviour = case["behaviour"]
    x_size, y_size, b_size = len(behaviour), len(behaviour[0]), len(behaviour[0][0])
    exact = [leakage == 0 for leakage in case["leakage"]]
    algebra = Algebra(dict(preparations=x_size, measurements=y_size, outcomes=b_size), exact)
    moments = Moments(algebra, monomials(case["level"], x_size, y_size, b_size), case["dimension"])
    probabilities = {(x, y, b): moments.form(algebra.probability(x, y, b)) for x in range(x_size) for y in range(y_size) for b in range(b_size)}
    leaks = [moments.form(algebra.trace((("N",), ("R", x)))) for x in range(x_size)]
    groups = range(b_size)
    matrix = moments.matrix()
    begun = time.perf_counter(), time.process_time()
    m = [cp.Variable(len(moments.numbers)) for _ in groups]
    at = lambda form, e: sum(c * m[e][k] for k, c in form.items()) if form else 0
    constraints = [sum(m[e][0] for e in groups) == 1]
    for e in groups:
        gamma = cp.reshape(matrix @ m[e], (moments.side, moments.side), order="C")
        constraints.append((gamma + gamma.T) / 2 >> 0)
    for (x, y, b), form in probabilities.items():
        if b < b_size - 1:
            constraints.append(sum(at(form, e) for e in groups) == behaviour[x][y][b])
    for x, form in enumerate(leaks):
        if form and case["reading"] == "on-average":
            constraints.append(sum(at(form, e) for e in groups) <= case["leakage"][x])
        elif form:
            constraints += [at(form, e) <= case["leakage"][x] * m[e][0] for e in groups]
    problem = cp.Problem(cp.Maximize(sum(at(probabilities[*case["target"], e], e) for e in groups)), constraints)
    # Without the regularisation Clarabel stops a few 1e-6 above the value on the larger cases, which have almost no interior.
    clarabel = dict(tol_gap_abs=1e-8, tol_gap_rel=1e-8, tol_feas=1e-8, static_regularization_constant=1e-6, static_regularization_proportional=0.0)
    scs = dict(eps_abs=1e-7, eps_rel=1e-7, max_iters=200000)
    if seconds < float("inf"):
        clarabel["time_limit"], scs["time_limit_secs"] = seconds, seconds
    settings = {"CLARABEL": clarabel, "SCS": scs}
    problem.solve(solver=solver, **settings[solver])
    value = float("nan") if problem.value is None else float(problem.value)
    return value, problem.status, min(time.perf_counter() - begun[0], time.process_time() - begun[1]), moments.side


def main():
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--case", choices=sorted(cases()), metavar="NAME")
    parser.add_argument("--solver", choices=["CLARABEL", "SCS"], default="CLARABEL")
    parser.add_argument("--time", action="store_true", help="say how many seconds modelling and solving took")
    options = parser.parse_args()
    chosen = {options.case: cases()[options.case]} if options.case else cases()
    solved = []
    for name, case in chosen.items():
        value, status, seconds, side = solve(case, options.solver)
        print(name, f"{value:.9f}", status, f"side {side}", *([f"{seconds:.3f} s"] if options.time else []), flush=True)
        solved.append(dict(name=name, **case, value=round(value, 9), status=status))
    if not options.case and options.solver == "CLARABEL":
        document = dict(generator="relaxation.py", cvxpy=cp.__version__, numpy=np.__version__, solver=options.solver, accuracy=ACCURACY)
        lines = ",\n  ".join(json.dumps(case) for case in solved)
        head = json.dumps(document)[1:-1]
        RESULTS.write_text("{" + head + ', "cases": [\n  ' + lines + "\n]}\n")


if __name__ == "__main__":
    main()
