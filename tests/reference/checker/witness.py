"""A witness: integers that prove an affine bound for every behaviour and every leakage.

For each group e of a model, with the moments <w>_e = Re tr(w) summed over the group, let

    s_e = sum nu [R M] + sum mu [N R] - c_e - sum_ij Z_ij [(u_i + u_i*)* (u_j + u_j*)]        (and the same with u - u*)

as a combination of words. Z = L L^T with a real L, so x^T Z x = |L^T x|^2 is never negative, and the sum with Z is the trace of a sum of
squares: it is not negative in any model. Hence c_e <= nu.p_e + mu.leak_e - s_e. Every product of projectors that holds a state has a trace of at
most q_e in size, one that holds the carrier of at most d q_e, while <R_x> = q_e and <V> = d q_e exactly; so -s_e <= kappa_e q_e with the
kappa that is computed below, and because the q_e add up to 1,

    sum_e c_e <= max_e (kappa_e + mu_e.eps) + nu.p.
"""

from decimal import Decimal
from fractions import Fraction
from functools import lru_cache
from itertools import product

from figures import compact, digest, real
from words import Algebra, parse, require

FORMAT = "bitassay witness 1"
MEMBERS = ["format", "geometry", "exact", "leakage_holds", "claim", "multiplier_bits", "behaviour", "leakage", "chords", "factor_bits", "constants",
           "remainders", "bases", "factors"]
SIZES = ["preparations", "measurements", "outcomes", "carrier_dimension"]
LARGEST = {"preparations": 32, "measurements": 8, "outcomes": 8, "carrier_dimension": 1024}
POWER_BITS, CUT_BITS, MAX_CELLS = 30, 12, 64


def is_integer(value, low=-(2**53) + 1, high=2**53 - 1):
    return type(value) is int and low <= value <= high


def flat(table):
    return [leaf for item in table for leaf in flat(item)] if isinstance(table, list) else [table]


def is_table(value, *sizes):
    if not sizes:
        return not isinstance(value, (list, dict))
    return isinstance(value, list) and len(value) == sizes[0] and all(is_table(item, *sizes[1:]) for item in value)


def check_geometry(geometry):
    require(list(geometry) == SIZES, "a geometry has four sizes")
    for size in SIZES:
        require(is_integer(geometry[size], 2 if size == "outcomes" else 1, LARGEST[size]), f"{size} is out of range")


def settings(geometry):
    return list(product(range(geometry["preparations"]), range(geometry["measurements"])))


def power_value(power):
    return Fraction(power, 2**POWER_BITS)


def power_entropy(distribution, power):
    """(1 - sum p^(1+beta)) / beta, in nats."""
    beta = real(power_value(power))
    return (1 - sum(((1 + beta) * real(p).ln()).exp() for p in distribution if p > 0)) / beta


def cover(outcomes, cuts):
    """The cells of a cover, each a list of vertices. Cells are cut in two along an edge, in preorder; null closes one."""
    whole = [[Fraction(int(b == j)) for b in range(outcomes)] for j in range(outcomes)]
    waiting, closed = [whole], []
    for cut in cuts:
        require(waiting, "the cuts go on after the cover is complete")
        cell = waiting.pop()
        if cut is None:
            closed.append(cell)
            continue
        require(is_table(cut, 3) and all(is_integer(n, 0) for n in cut), "a cut has three integers")
        first, second, at = cut
        require(first != second and max(first, second) < outcomes and 0 < at < 2**CUT_BITS, "a cut does not lie inside an edge")
        share = Fraction(at, 2**CUT_BITS)
        point = [(1 - share) * a + share * b for a, b in zip(cell[first], cell[second])]
        replaced = lambda which: [point if j == which else vertex for j, vertex in enumerate(cell)]
        waiting += [replaced(second), replaced(first)]
    require(not waiting and 0 < len(closed) <= MAX_CELLS, "the cuts do not make a cover")
    # The volumes of the cells add up to that of the simplex.
    require(sum(abs(determinant(cell)) for cell in closed) == 1, "the cells do not fill the simplex")
    return closed


def solve(matrix, right):
    """A solution of a positive semidefinite system of equations; unknowns that the others make superfluous are zero."""
    rows = [[Fraction(a) for a in row] + [Fraction(b)] for row, b in zip(matrix, right)]
    pivots = []
    for j in range(len(rows)):
        pivot = next((i for i in range(len(rows)) if i not in pivots and rows[i][j]), None)
        if pivot is None:
            continue
        pivots.append(pivot)
        for i, row in enumerate(rows):
            if i != pivot and row[j]:
                times = row[j] / rows[pivot][j]
                rows[i] = [a - times * b for a, b in zip(row, rows[pivot])]
    solution = [Fraction(0)] * len(rows)
    for pivot in pivots:
        j = next(j for j, a in enumerate(rows[pivot]) if a)
        solution[j] = rows[pivot][-1] / rows[pivot][j]
    return solution


def determinant(rows):
    if len(rows) == 1:
        return rows[0][0]
    minor = lambda j: [row[:j] + row[j + 1:] for row in rows[1:]]
    return sum((-1) ** j * rows[0][j] * determinant(minor(j)) for j in range(len(rows)) if rows[0][j])


@lru_cache(maxsize=64)
def grams(geometry, exact, bases):
    """The algebra of a geometry, and for each basis the entries of its Gram matrix as lists of words with coefficients."""
    geometry = dict(zip(SIZES, geometry))
    algebra = Algebra(geometry, exact)
    blocks = []
    for parity, monomials in bases:
        sign = {"even": 1, "odd": -1}.get(parity)
        require(sign, "a parity is even or odd")
        elements = [algebra.element(parse(text, geometry), sign) for text in monomials]
        blocks.append([[list(algebra.product(u, v).items()) for v in elements[: i + 1]] for i, u in enumerate(elements)])
    return algebra, blocks


def is_positive(matrix):
    """Whether a symmetric integer matrix is positive semidefinite, by elimination in integers: dividing by the pivot before leaves minors."""
    matrix, before = [row[:] for row in matrix], 1
    while matrix:
        pivot = max(range(len(matrix)), key=lambda i: matrix[i][i])
        top = matrix[pivot][pivot]
        if top <= 0:
            return top == 0 and not any(map(any, matrix))
        rest = [i for i in range(len(matrix)) if i != pivot]
        matrix = [[(top * matrix[i][j] - matrix[i][pivot] * matrix[pivot][j]) // before for j in rest] for i in rest]
        before = top
    return True


class Witness:
    """A witness that was confirmed; the constructor refuses any other."""

    def __init__(self, document, eliminate=False):
        require([m for m in MEMBERS if m in document] == list(document), "the members of a witness are not those of the format, in order")
        require(set(MEMBERS) - set(document) <= {"chords"}, "a witness lacks a member")
        self.document, self.geometry, self.claim = document, document["geometry"], document["claim"]
        require(document["format"] == FORMAT, "the format is another one")
        check_geometry(self.geometry)
        x_size, y_size, b_size, self.dimension = (self.geometry[size] for size in SIZES)
        self.exact, self.nu, self.mu = document["exact"], document["behaviour"], document["leakage"]
        require(is_table(self.exact, x_size) and all(type(e) is bool for e in self.exact), "exact has one truth value per preparation")
        require(is_table(self.nu, x_size, y_size, b_size) and all(map(is_integer, flat(self.nu))), "the multipliers of the behaviour")
        self.kind = self.claim["kind"]
        require(self.kind in ("guess", "score", "power", "contradiction"), "the claim is of no known kind")
        self.target = self.claim.get("target")
        if self.kind in ("guess", "power"):
            require(is_table(self.target, 2) and tuple(self.target) in settings(self.geometry), "there is no such target")
        chords = document.get("chords", [])
        if self.kind == "power":
            require(is_integer(self.claim["power"], 1, 2**POWER_BITS), "the power is out of range")
            cells = cover(b_size, self.claim["cuts"])
            require(is_table(chords, len(cells), b_size) and all(map(is_integer, flat(chords))), "one chord for each cell")
            self.groups = len(cells)
        else:
            require(not chords, "only a power has chords")
            self.groups = b_size if self.kind == "guess" else 1
        self.reading = document["leakage_holds"]
        require(self.reading in ("on-average", "every-emission"), "the leakage is read in one of two ways")
        rows = 1 if self.reading == "on-average" else self.groups
        require(is_table(self.mu, rows, x_size) and all(is_integer(m, 0) for m in flat(self.mu)), "the multipliers of the leakage")
        require(not any(m and e for row in self.mu for m, e in zip(row, self.exact)), "a leakage of exactly zero has no multiplier")
        multiplier_bits, factor_bits = document["multiplier_bits"], document["factor_bits"]
        require(is_integer(multiplier_bits, 0, 52) and is_integer(factor_bits, 0, 52) and 2 * factor_bits >= multiplier_bits, "the scales")
        self.unit, self.one = Fraction(1, 2**multiplier_bits), 4**factor_bits
        if self.kind == "power":
            self.check_chords(cells, chords)
        bases = tuple((span["parity"], tuple(span["monomials"])) for span in document["bases"])
        algebra, blocks = grams(tuple(self.geometry[size] for size in SIZES), tuple(self.exact), bases)
        self.bases, self.algebra = bases, algebra
        require(len(document["factors"]) == self.groups, "factors for each group")
        kappas, paid = [], []
        for e in range(self.groups):
            kappa, part = self.constant(self.remainder(e, blocks, self.one // 2**multiplier_bits, chords, eliminate))
            kappas.append(kappa)
            paid.append(part)
        require(document["constants"] == [str(k) for k in kappas], "the constants do not follow")
        require(document["remainders"] == [str(k) for k in paid], "the remainders do not follow")
        self.kappas = [Fraction(k, self.one) for k in kappas]
        self.rounding_cost = Fraction(max(paid), self.one)
        self.digest = digest(document)

    def check_chords(self, cells, chords):
        """The entropy is concave, a chord is affine: below at the vertices is below in the cell."""
        for cell, chord in zip(cells, chords):
            for vertex in cell:
                value = sum(l * self.unit * p for l, p in zip(chord, vertex))
                require(real(value) <= power_entropy(vertex, self.claim["power"]), "a chord lies above the entropy")

    def remainder(self, e, blocks, unit, chords, eliminate):
        """s_e, in units of 4^-factor_bits."""
        s = {}

        def add(polynomial, times):
            for word, c in polynomial.items() if isinstance(polynomial, dict) else polynomial:
                s[word] = s.get(word, 0) + times * c

        factors = self.document["factors"][e]
        require(len(factors) == len(blocks), "a factor for each basis")
        for rows, block in zip(factors, blocks):
            require(len(rows) == len(block) and all(is_table(row, i + 1) for i, row in enumerate(rows)), "a factor is lower triangular")
            require(all(map(is_integer, flat(rows))), "an integer of a factor is out of range")
            z = [[sum(a * b for a, b in zip(left, right)) for right in rows] for left in rows]
            require(not eliminate or is_positive(z), "a multiplier is not positive semidefinite")
            for i, entries in enumerate(block):
                for j, terms in enumerate(entries):
                    add(terms, -z[i][j] * (1 if i == j else 2))
        for x, y in settings(self.geometry):
            for b, nu in enumerate(self.nu[x][y]):
                add(self.algebra.probability(x, y, b), nu * unit)
        for x, mu in enumerate(self.mu[e if self.reading == "every-emission" else 0]):
            if mu:
                add(self.algebra.trace((("N",), ("R", x))), mu * unit)
        if self.kind == "guess":
            add(self.algebra.probability(*self.target, e), -self.one)
        elif self.kind == "power":
            # c_e is minus the chord.
            for b, l in enumerate(chords[e]):
                add(self.algebra.probability(*self.target, b), l * unit)
        elif self.kind == "score":
            coefficients = self.claim["coefficients"]
            require(is_table(coefficients, *(self.geometry[size] for size in SIZES[:3])), "the coefficients of the score")
            require(all(map(is_integer, flat(coefficients))), "a coefficient of the score is out of range")
            for x, y in settings(self.geometry):
                for b, c in enumerate(coefficients[x][y]):
                    add(self.algebra.probability(x, y, b), -c * self.one)
        return s

    def constant(self, s):
        kappa, paid = 0, 0
        for word, value in s.items():
            weight = 1 if any(letter[0] == "R" for letter in word) else self.dimension
            if word == (("V",),) or (len(word) == 1 and word[0][0] == "R"):
                kappa -= weight * value
            else:
                paid += weight * abs(value)
        return kappa + paid, paid

    def applies(self, scenario):
        """Whether the leakage of a scenario is one that the witness speaks of."""
        require(self.geometry == scenario.geometry, "a witness is for another geometry")
        require(self.reading == scenario.reading or self.reading == "on-average", "a witness needs every emission to leak little")
        require(all(not e or eps == 0 for e, eps in zip(self.exact, scenario.leakage)), "a witness takes a leakage for zero that is not")

    def offset(self, leakage):
        """max_e (kappa_e + mu_e.eps)"""
        rows = self.mu if self.reading == "every-emission" else self.mu * self.groups
        return max(k + sum(m * self.unit * eps for m, eps in zip(row, leakage)) for k, row in zip(self.kappas, rows))

    def worst(self, place):
        """The largest nu.p over the place. A linear function is largest at a vertex, where all probabilities but one are at an end."""
        if place.scores:
            return self.worst_of_scores(place.scores)
        total = Fraction(0)
        for x, y in settings(self.geometry):
            vertices = place.vertices(x, y)
            require(vertices, "the intervals of a setting hold no distribution")
            total += max(sum(nu * p for nu, p in zip(self.nu[x][y], vertex)) for vertex in vertices) * self.unit
        return total

    def worst_of_scores(self, scores):
        """For every lambda >= 0, and all p whose scores S are at least s, nu.p <= nu.p + lambda (S - s) <= sum max_b (nu + lambda c) - lambda s.
        The lambda that is best for a nu made of scores solves nu + lambda c = 0, here by the normal equations.
        """
        nu = [n * self.unit for n in flat(self.nu)]
        rows = [flat(score["coefficients"]) for score in scores]
        dot = lambda u, v: sum(a * b for a, b in zip(u, v))
        chosen = [max(value, Fraction(0)) for value in solve([[dot(u, v) for v in rows] for u in rows], [-dot(u, nu) for u in rows])]
        mixed = [n + sum(value * row[i] for value, row in zip(chosen, rows)) for i, n in enumerate(nu)]
        outcomes = self.geometry["outcomes"]
        largest = sum(max(mixed[i:i + outcomes]) for i in range(0, len(mixed), outcomes))
        return largest - sum(value * score["at_least"] for value, score in zip(chosen, scores))

    def bound(self, scenario, place):
        self.applies(scenario)
        return self.offset(scenario.leakage) + self.worst(place)

    def is_of_level(self, level):
        """Whether the bases are those of a named level; a monomial stands for its adjoint as well."""
        x_size, y_size, b_size = (self.geometry[size] for size in SIZES[:3])
        V, N, states = ("V",), ("N",), [("R", x) for x in range(x_size)]
        outcomes = [("M", b, y) for y in range(y_size) for b in range(b_size - 1)]
        if level == "sparse":
            shared = [(r,) for r in states] + [(V,)] + [(V, m) for m in outcomes] + [(V, m, V) for m in outcomes]
            shared += [(V, one, two) for one in outcomes for two in outcomes if one[2] != two[2]]
            inside = lambda r: () if self.exact[r[1]] else ((N,),)
            own = lambda r: [(r, *n, *m) for n in ((), *inside(r)) for m in ((), *((m,) for m in outcomes))]
            families = [shared] + [own(r) for r in states]
        else:
            wanted = [(r,) for r in states] + [(V,)] + [(V, m) for m in outcomes] + [(r, m) for r in states for m in outcomes]
            wanted += [(N, r) for r in states if not self.exact[r[1]]]
            if level in ("standard", "sharp", "keen"):
                wanted += [(one, two) for one in states for two in states if one < two]
            if level in ("sharp", "keen"):
                wanted += [(r, one, two) for r in states for one in outcomes for two in outcomes if one[2] != two[2]]
            if level == "keen":
                leaking = [r for r in states if not self.exact[r[1]]]
                wanted += [(r, N, m) for r in leaking for m in outcomes] + [(N, r, other) for r in leaking for other in states if r != other]
                wanted += [(one, N, two) for one in leaking for two in leaking if one < two]
            families = [wanted]
        # In the flat algebra the carrier is the identity.
        inner = lambda word: tuple(letter for letter in word if letter != V) if self.algebra.flat else word
        one_of_two = lambda word: min(inner(word), inner(word)[::-1])
        expected = []
        for family in families:
            even = sorted(set(map(one_of_two, family)))
            odd = [word for word in even if word != word[::-1]]
            expected += [("even", even)] + [("odd", odd)] * bool(odd)
        found = [(parity, sorted(one_of_two(parse(text, self.geometry)) for text in monomials)) for parity, monomials in self.bases if monomials]
        return found == expected
