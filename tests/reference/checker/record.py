"""A record: everything in it follows from the counts, the declaration and the witnesses.

A claim has to be one that is proved; and it may fall short of what is proved by no more than rounding takes, which is how an error in the
harmless direction is told as well. Members that the checker does not know say nothing about bits and are passed over.
"""

import hashlib
from decimal import Decimal
from fractions import Fraction
from itertools import product
from math import comb

from figures import LN2, at_least, at_most, digest, ln, log2, real, shown
from intervals import confirm
from witness import SIZES, Witness, check_geometry, flat, is_integer, is_table, power_entropy, power_value, settings
from words import Refused, require

# What a double's rounding may cost, relatively; a few dozen units in the last place.
ROUNDING = Fraction(1, 10**13)
# Assumed variance of ln p from which the power of independent rounds is chosen. Any value would do that does not depend on the outcomes.
VARIANCE = Decimal("0.4")
# The power is one of sixteen in a factor of two.
POWER_STEPS = 16
DISTRIBUTION_BITS = 38
# The power of a diagnostic: the entropy is Shannon's up to a millionth.
SMALL_POWER = 2**10


class Scenario:
    def __init__(self, document):
        self.geometry = {size: document[size] for size in SIZES}
        check_geometry(self.geometry)
        leakage, count = document["leakage"], self.geometry["preparations"]
        self.leakage = leakage if isinstance(leakage, list) else [leakage] * count
        require(len(self.leakage) == count and all(0 <= eps <= 1 for eps in self.leakage), "one leakage, from 0 to 1, for each preparation")
        self.reading = document.get("leakage_holds", "on-average")
        require(self.reading in ("on-average", "every-emission"), "the leakage is read in one of two ways")
        self.targets = [tuple(target) for target in document["targets"]]
        require(self.targets and len(set(self.targets)) == len(self.targets), "targets are settings, each once")
        require(set(self.targets) <= set(settings(self.geometry)), "a target is no setting")
        self.document = document


class Point:
    """A behaviour; the last outcome has what the others leave."""

    scores = None

    def __init__(self, table):
        self.table = table

    def vertices(self, x, y):
        first = self.table[x][y][:-1]
        return [first + [1 - sum(first)]]

    def likeliest(self, x, y):
        return max(self.vertices(x, y)[0])

    def largest_power_entropy(self, x, y, power):
        return power_entropy(self.vertices(x, y)[0], power)


class Scores:
    """All behaviours that reach some scores."""

    def __init__(self, scores, outcomes):
        self.scores, self.outcomes = scores, outcomes

    def likeliest(self, x, y):
        return Fraction(1, self.outcomes)

    def largest_power_entropy(self, x, y, power):
        return power_entropy([Fraction(1, self.outcomes)] * self.outcomes, power)


class Region:
    """Intervals for all probabilities."""

    scores = None

    def __init__(self, table):
        self.table = table

    def vertices(self, x, y):
        intervals, found = self.table[x][y], []
        for free, (low, high) in enumerate(intervals):
            for ends in product(*(interval if b != free else [0] for b, interval in enumerate(intervals))):
                vertex = list(ends)
                vertex[free] = 1 - sum(ends)
                if low <= vertex[free] <= high:
                    found.append(vertex)
        return found

    def likeliest(self, x, y):
        return max(low for low, _ in self.table[x][y])

    def largest_power_entropy(self, x, y, power):
        """The entropy is concave and symmetric: it is largest where all probabilities inside their intervals are equal."""
        intervals = [[real(end) for end in interval] for interval in self.table[x][y]]
        low, high = Decimal(0), Decimal(1)
        for _ in range(150):
            level = (low + high) / 2
            total = sum(min(max(level, a), b) for a, b in intervals)
            low, high = (level, high) if total < 1 else (low, level)
        return power_entropy([Fraction(min(max(high, a), b)) for a, b in intervals], power)


def counts_digest(counts):
    sizes = [len(counts), len(counts[0]), len(counts[0][0])]
    numbers = b"".join(n.to_bytes(8, "big") for n in sizes + flat(counts))
    return "sha256:" + hashlib.sha256(b"bitassay counts 1\n" + numbers).hexdigest()


def publication_cost(rounds, outcomes):
    return log2(Fraction(comb(rounds + outcomes - 1, outcomes - 1)))


def whole_bits(claimed, exact, what):
    """Whole bits: the floor of what is proved, or of a little less."""
    require(is_integer(claimed, 0), f"{what} is no number of bits")
    room = abs(exact) * real(ROUNDING) + Decimal("1e-9")
    floors = {max(int((exact - less).to_integral_value("ROUND_FLOOR")), 0) for less in (0, room)}
    require(claimed in floors, f"{what}: {claimed} bits are recorded, {max(floors)} follow")


class Bundle:
    def __init__(self, document, eliminate=False):
        self.record, self.commitment = document["record"], document.get("commitment")
        self.witnesses, self.eliminate = document["witnesses"], eliminate
        for name, witness in self.witnesses.items():
            require(digest(witness) == name, f"the witness {name} is filed under another's digest")
        self.scenario = Scenario(self.record["scenario"])
        self.failure = self.record["failure"]

    def witness(self, name):
        require(name in self.witnesses, f"the witness {name} is missing")
        return Witness(self.witnesses[name], self.eliminate)

    def check(self):
        record, scenario = self.record, self.scenario
        require(record["rounds"] in ("plug-in", "independent", "memory"), "rounds are accounted for in one of three ways")
        require(record.get("entropy", "auto") in ("auto", "guessing", "power"), "the entropy is one of three")
        require(isinstance(record["assumptions"], list) and record["assumptions"], "the assumptions are missing")
        counts, sizes = record["counts"], [scenario.geometry[size] for size in SIZES[:3]]
        self.total = None
        if counts is not None:
            require(is_table(counts, *sizes) and all(is_integer(n, 0) for n in flat(counts)), "counts have the shape of the scenario")
            require(all(sum(counts[x][y]) for x, y in settings(scenario.geometry)), "a setting has no rounds")
            self.total = sum(flat(counts))
            require(counts_digest(counts) == record["counts_digest"], "the digest of the counts is another one")
        require(record["total_rounds"] == self.total, "the rounds do not add up")
        self.check_failure()
        if record["rounds"] == "memory":
            self.check_memory()
        else:
            self.place = self.known()
            self.check_single_rounds()
        self.check_total()

    def check_failure(self):
        if self.record["rounds"] == "plug-in":
            require(self.failure is None, "a plug-in figure claims no confidence")
            return
        estimation, hashing = self.failure["estimation"], self.failure["hashing"]
        require(all(Fraction(1, 10**100) <= f <= Fraction(1, 2) for f in (estimation, hashing)), "a failure probability is out of range")
        at_least(self.failure["total"], estimation + hashing, (estimation + hashing) * ROUNDING, "/failure/total")

    def known(self):
        """What is known of the behaviour, after the region was confirmed."""
        record, geometry = self.record, self.scenario.geometry
        counts, behaviour, region = record["counts"], record["behaviour"], record["region"]
        sizes = [geometry[size] for size in SIZES[:3]]
        scores = record.get("scores")
        require([counts, behaviour, scores].count(None) == 2, "either counts or a behaviour or scores")
        if record["rounds"] == "plug-in":
            require(region is None, "a plug-in figure has no region")
            if scores is not None:
                tables = [score["coefficients"] for score in scores]
                require(all(is_table(table, *sizes) and all(map(is_integer, flat(table))) for table in tables), "coefficients are integers")
                require(scores and all(isinstance(score["at_least"], (int, Fraction)) for score in scores), "a score has a least value")
                return Scores(scores, geometry["outcomes"])
            if behaviour is None:
                return Point([[[shown(Fraction(n, sum(row))) for n in row] for row in rows] for rows in counts])
            require(is_table(behaviour, *sizes) and all(0 <= p <= 1 for p in flat(behaviour)), "a behaviour holds probabilities")
            for x, y in settings(geometry):
                require(abs(sum(behaviour[x][y]) - 1) <= Fraction(1001, 10**9), "probabilities of a setting do not add up to 1")
            return Point(behaviour)
        require(counts is not None and is_table(region, *sizes, 2), "independent rounds need counts and a region")
        outcomes = geometry["outcomes"]
        share = 1 if record.get("entropy") == "guessing" else Fraction(1, 2)
        alpha = real(self.failure["estimation"] * share / (len(settings(geometry)) * (1 if outcomes == 2 else outcomes)))
        # Two outcomes have one event: both intervals hold the exact one of the first outcome or its mirror image, which misses the probability
        # with alpha at most. So they count once.
        for x, y in settings(geometry):
            n = sum(counts[x][y])
            for b, interval in enumerate(region[x][y]):
                confirm(tuple(interval), counts[x][y][b], n, alpha, f"/region/{x}/{y}/{b}")
        return Region(region)

    def check_single_rounds(self):
        record, scenario = self.record, self.scenario
        require(record.get("block") is None, "only rounds with memory have a block")
        if record["outside_model"] is not None:
            self.check_outside()
            return
        require([(t["preparation"], t["measurement"]) for t in record["targets"]] == scenario.targets, "the targets are not those declared")
        for i, target in enumerate(record["targets"]):
            self.check_target(target, f"/targets/{i}")

    def check_target(self, target, here):
        record, scenario = self.record, self.scenario
        x, y = setting = target["preparation"], target["measurement"]
        rounds = sum(record["counts"][x][y]) if record["counts"] is not None else None
        require(target["rounds"] == rounds, f"{here}/rounds is another number")
        if target["witness"] is None:
            require(all(target.get(m) is None for m in ("guessing_probability_bound", "min_entropy", "power", "level")), f"{here} has no witness")
            require(target["certified_bits"] == 0 == target["min_entropy_per_round"], f"{here} has no witness")
            return
        witness = self.witness(target["witness"])
        require(witness.kind == "guess" and tuple(witness.target) == setting, f"{here}/witness bounds something else")
        require(witness.is_of_level(target["level"]), f"{here}/level is another one")
        exact = witness.bound(scenario, self.place)
        require(exact >= self.place.likeliest(x, y), f"{here}: the bound is below the likeliest outcome's probability, so there is no model")
        bound = target["guessing_probability_bound"]
        require(0 < bound <= 1, f"{here}/guessing_probability_bound is no probability")
        at_least(bound, min(exact, Fraction(1)), 2 * ROUNDING, f"{here}/guessing_probability_bound")
        cost = witness.rounding_cost
        require(abs(target["rounding_cost"] - cost) <= cost / 10**9, f"{here}/rounding_cost is another one")
        per_round = -log2(bound)
        at_most(target["min_entropy_per_round"], per_round, real(ROUNDING), f"{here}/min_entropy_per_round")
        if target.get("power") is not None:
            self.check_power(target["power"], setting, rounds, f"{here}/power")
        if record["rounds"] == "plug-in":
            require(all(target.get(m) is None for m in ("min_entropy", "publication_cost", "hashing_cost")), f"{here} has no rounds")
            require(target["certified_bits"] == 0, f"{here}: no bits come from a plug-in figure")
            return
        best = rounds * per_round
        if target.get("power") is not None and target["power"]["min_entropy"] is not None:
            best = max(best, real(target["power"]["min_entropy"]))
        room = rounds * real(ROUNDING) + real(ROUNDING) * best
        at_most(target["min_entropy"], best, room, f"{here}/min_entropy")
        publication = publication_cost(rounds, scenario.geometry["outcomes"])
        hashing = 2 * log2(len(scenario.targets) / self.failure["hashing"])
        at_least(target["publication_cost"], publication, Decimal("1e-9"), f"{here}/publication_cost")
        at_least(target["hashing_cost"], hashing, Decimal("1e-9"), f"{here}/hashing_cost")
        whole_bits(target["certified_bits"], best - publication - hashing, f"{here}/certified_bits")

    def check_power(self, power, setting, rounds, here):
        """Min-entropy of the string that follows from a power entropy, by Markov's inequality."""
        if self.record["rounds"] == "plug-in":
            require(power["power"] == SMALL_POWER, f"{here}/power is not the one of a diagnostic")
            share = None
        else:
            # With "guessing" the whole failure is spent on the region, and no bits are drawn from a power entropy.
            drawn = self.record.get("entropy", "auto") != "guessing"
            share = self.failure["estimation"] / (len(self.scenario.targets) * (2 if drawn else 1))
            # The power may depend on the number of rounds and on nothing else that was observed.
            steps = min(log2(2 * -ln(share) / (rounds * VARIANCE)) / 2, Decimal(0)) * POWER_STEPS
            # Doubles may take a number that is almost a whole one for its neighbour.
            floors = {(steps + error).to_integral_value("ROUND_FLOOR") for error in (Decimal("-1e-9"), Decimal("1e-9"))}
            chosen = [max((floor / POWER_STEPS * LN2).exp() * 2**30, Decimal(1)) for floor in floors]
            require(any(abs(power["power"] - value) <= 1 for value in chosen), f"{here}/power was not chosen ahead")
            share = share if drawn else None
        require((power["failure"] is None) == (power["min_entropy"] is None) == (share is None), f"{here}: bits are drawn at a failure probability")
        witness = self.witness(power["witness"])
        require(witness.kind == "power" and tuple(witness.target) == setting, f"{here}/witness bounds something else")
        # The entropy falls as the power rises, so a witness for a larger power will do.
        require(is_integer(power["power"], 1, witness.claim["power"]), f"{here}/witness is for a smaller power")
        require(witness.is_of_level(power["level"]), f"{here}/level is another one")
        entropy = -witness.bound(self.scenario, self.place)
        most = self.place.largest_power_entropy(*setting, power["power"])
        require(real(entropy) <= most * (1 + Decimal("1e-9")), f"{here}: an entropy above the largest one, so there is no model")
        at_most(power["entropy_per_round"], max(real(entropy) / LN2, Decimal(0)), real(ROUNDING), f"{here}/entropy_per_round")
        cost = witness.rounding_cost
        require(abs(power["rounding_cost"] - cost) <= cost / 10**9, f"{here}/rounding_cost is another one")
        if share is None:
            return
        at_most(power["failure"], share, share * ROUNDING, f"{here}/failure")
        beta = power_value(power["power"])
        proved = max(-rounds * log2(1 - beta * entropy) + log2(power["failure"]), Decimal(0)) / real(beta)
        at_most(power["min_entropy"], proved, (rounds * real(ROUNDING) / 100 + Decimal("1e-12")) / real(beta), f"{here}/min_entropy")

    def check_outside(self):
        record, outside = self.record, self.record["outside_model"]
        require(record["reason"] == "outside-model" and record["verdict"] == "refused" and not record["targets"], "numbers without a model")
        witness = self.witness(outside["witness"])
        bound = witness.bound(self.scenario, self.place)
        if witness.kind == "guess":
            require(bound < self.place.likeliest(*witness.target), "/outside_model: there is no contradiction")
        else:
            require(witness.kind == "contradiction" and bound < 0, "/outside_model: there is no contradiction")
        name, claimed = outside["smallest_uniform_leakage_witness"], outside["smallest_uniform_leakage"]
        require((name is None) == (claimed is None), "/outside_model: a leakage and its witness go together")
        if name is None:
            return
        witness = self.witness(name)
        require(witness.geometry == self.scenario.geometry, "/outside_model: the leakage's witness is for another geometry")
        usable = witness.kind == "contradiction" and witness.reading == "on-average" and not any(witness.exact)
        require(usable, "/outside_model: the leakage's witness says nothing of leakages")
        # 0 <= kappa + nu.p + eps sum mu.
        slope = sum(witness.mu[0]) * witness.unit
        require(slope > 0, "/outside_model: no leakage explains the numbers")
        least = -(witness.kappas[0] + witness.worst(self.place)) / slope
        at_most(claimed, least, 2 * ROUNDING, "/outside_model/smallest_uniform_leakage")

    def check_memory(self):
        record, commitment = self.record, self.commitment
        require(commitment is not None, "rounds with memory need their commitment")
        require(record["region"] is None and record["behaviour"] is None and record["outside_model"] is None, "rounds with memory have no region")
        require(record["counts"] is not None and not record["targets"], "rounds with memory are accounted for as a block")
        require(record["scenario"] == commitment["scenario"], "the commitment is for another scenario")
        require(self.failure == commitment["failure"], "the commitment is for other failure probabilities")
        require(commitment["rounds"] == self.total, "the commitment is for another number of rounds")
        self.check_factors()
        block = record.get("block")
        if record["reason"] == "uncommitted":
            require(block is None, "nothing comes of a batch that began too early")
            return
        counts, factors, outcomes = record["counts"], commitment["factors"], self.scenario.geometry["outcomes"]
        require(block["commitment"] == digest(commitment), "/block/commitment is another one")
        require(block["target_rounds"] == sum(sum(counts[x][y]) for x, y in self.scenario.targets), "/block/target_rounds is another number")
        terms = [n * log2(f) for n, f in zip(flat(counts), flat(factors)) if n]
        product_of = sum(terms)
        room = sum(map(abs, terms)) * real(ROUNDING) + self.total * real(ROUNDING) / 100
        at_most(block["log2_product"], product_of, room, "/block/log2_product")
        beta = real(power_value(commitment["power"]))
        proved = max((product_of + log2(self.failure["estimation"])) / beta, Decimal(0))
        at_most(block["min_entropy"], proved, (room + Decimal("1e-12")) / beta, "/block/min_entropy")
        publication = sum(publication_cost(sum(counts[x][y]), outcomes) for x, y in settings(self.scenario.geometry))
        hashing = -2 * log2(self.failure["hashing"])
        at_least(block["publication_cost"], publication, Decimal("1e-9"), "/block/publication_cost")
        at_least(block["hashing_cost"], hashing, Decimal("1e-9"), "/block/hashing_cost")
        require(block["min_entropy"] >= 0, "/block/min_entropy is negative")
        whole_bits(block["certified_bits"], real(block["min_entropy"]) - publication - hashing, "/block/certified_bits")
        cost = commitment["setting_cost_per_round"]
        require(block["setting_cost_per_round"] == cost, "/block/setting_cost_per_round is another one")
        net = Fraction(block["certified_bits"], self.total) - cost
        require(abs(block["net_bits_per_round"] - net) <= 10 * ROUNDING, "/block/net_bits_per_round is another one")

    def check_factors(self):
        """The factors F of a block. Over a round with the behaviour p, with tau = pi(t), L = sum_t tau_t nu_t and

            g = sum_t tau_t / sum_t (tau_t nu0_t + m sum_b max(L_bt, 0)),

        F = g (1 - L/tau) at the targets and 1 - g L/pi elsewhere have E[F p^(beta at the targets)] <= 1 for the declared leakage, if for every
        target sum_b p(b|t)^(1+beta) <= nu0_t + nu_t.p. A power witness for the same or a larger power gives that, because the entropy
        falls as the power rises.
        """
        commitment, scenario = self.commitment, self.scenario
        geometry, expected, pi = scenario.geometry, commitment["expected_behaviour"], commitment["setting_distribution"]
        sizes = [geometry[size] for size in SIZES[:3]]
        require(is_table(pi, *sizes[:2]) and all(0 < p <= 1 for p in flat(pi)), "every setting has a positive probability")
        require(abs(sum(flat(pi)) - 1) <= Fraction(2, 10**12), "the setting probabilities do not add up to 1")
        require(is_table(expected, *sizes) and all(0 <= p <= 1 for p in flat(expected)), "the expected behaviour holds probabilities")
        power = commitment["power"]
        require(is_integer(power, 1, 2**30), "the power is out of range")
        named = [(t["preparation"], t["measurement"]) for t in commitment["targets"]]
        require(named == scenario.targets, "the targets of the commitment are not those declared")
        beta, constants = power_value(power), []
        mixed = {setting: [Fraction(0)] * geometry["outcomes"] for setting in settings(geometry)}
        for target in commitment["targets"]:
            setting = target["preparation"], target["measurement"]
            witness = self.witness(target["witness"])
            require(witness.kind == "power" and tuple(witness.target) == setting, "a committed witness bounds something else")
            require(witness.claim["power"] >= power, "a committed witness is for a smaller power")
            witness.applies(scenario)
            constant, tau = 1 + beta * witness.offset(scenario.leakage), pi[setting[0]][setting[1]]
            for x, y in settings(geometry):
                nu = [beta * n * witness.unit for n in witness.nu[x][y]]
                mean = sum(n * p for n, p in zip(nu, expected[x][y])) / sum(expected[x][y])
                constant += mean
                mixed[x, y] = [old + tau * (n - mean) for old, n in zip(mixed[x, y], nu)]
            constants.append(tau * constant)
        exponent = 1 + 1 / real(beta)
        excess = Fraction(real(beta) / (exponent * (1 + real(beta)).ln()).exp())
        positive = sum(max(l, 0) for t in scenario.targets for l in mixed[t])
        g = sum(pi[x][y] for x, y in scenario.targets) / (sum(constants) + excess * positive)
        require(g > 0, "the factors have no scale")
        require(is_table(commitment["factors"], *sizes), "one factor for each outcome")
        for x, y in settings(geometry):
            for b, weight in enumerate(mixed[x, y]):
                factor = (g if (x, y) in scenario.targets else 1) - g * weight / pi[x][y]
                # Settings may be drawn a little off, since decimals rarely add up to 1.
                factor *= 1 - Fraction(1, 2**DISTRIBUTION_BITS)
                require(commitment["factors"][x][y][b] > 0, "a factor is not positive")
                at_most(commitment["factors"][x][y][b], factor, 10 * ROUNDING, f"/commitment/factors/{x}/{y}/{b}")
        cost = -sum(real(p) * log2(p) for p in flat(pi))
        at_least(commitment["setting_cost_per_round"], cost, real(ROUNDING), "/commitment/setting_cost_per_round")

    def check_total(self):
        record = self.record
        block = record.get("block")
        bits = block["certified_bits"] if block is not None else sum(t["certified_bits"] for t in record["targets"])
        require(record["certified_bits"] == bits, "/certified_bits is another number")
        rate = Fraction(bits, self.total) if bits else Fraction(0)
        at_most(record["bits_per_round"], rate, rate * ROUNDING, "/bits_per_round")
        if record["outside_model"] is not None:
            return
        if record["rounds"] == "memory":
            reasons = {"uncommitted"} if block is None else {None if bits else "zero-bound"}
        elif any(t["guessing_probability_bound"] is not None for t in record["targets"]):
            random = any(t["min_entropy_per_round"] > 0 for t in record["targets"]) if record["rounds"] == "plug-in" else bits > 0
            reasons = {None if random else "zero-bound"}
        else:
            reasons = {"unverified"}
        require(record["reason"] in reasons, "/reason is another one")
        verdict = "refused" if record["reason"] else "estimate" if record["rounds"] == "plug-in" else "certified"
        require(record["verdict"] == verdict, "/verdict is another one")


def problem(document, eliminate=False):
    """Why a bundle is not believed; None if it is."""
    try:
        Bundle(document, eliminate).check()
    except Refused as refusal:
        return str(refusal)
    except (KeyError, TypeError, IndexError, ValueError, AttributeError, ArithmeticError, OverflowError) as error:
        return f"malformed: {type(error).__name__}: {error}"
    return None
