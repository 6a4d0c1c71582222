"""Binomial tails, bracketed from both sides, by means that need no library function.

Up to 300 trials the tail is summed in rationals. Beyond, its terms are summed in sixty digits from the largest down, until the rest is less
than a geometric series with a negligible sum. Where that would take too many terms it is the integral

    P(Bin(n, p) <= k) = int_p^1 f(t) dt,    f(t) = n! / (k! (n-k-1)!) t^k (1-t)^(n-k-1),

of a function whose logarithm is concave: on each piece of a partition it lies below its tangent and above its chord, in the logarithm, and
both are integrated in closed form. Factorials come from Stirling's series, which is enclosing: its error is below the first term left out.
"""

from decimal import Decimal
from fractions import Fraction
from functools import lru_cache
from math import factorial

from figures import ln, real
from words import require

EXACT_TRIALS = 300
MOST_TERMS = 200_000
# More than sixty digits lose along the way.
ERROR = Decimal("1e-15")
# Pi to sixty digits (Abramowitz and Stegun, table 1.1, gives 25 of them).
PI = Decimal("3.14159265358979323846264338327950288419716939937510582097494")
# Coefficients of Stirling's series, B_2j / (2j (2j-1)): Abramowitz and Stegun 6.1.40.
STIRLING = [Fraction(1, 12), Fraction(-1, 360), Fraction(1, 1260), Fraction(-1, 1680), Fraction(1, 1188), Fraction(-691, 360360)]


@lru_cache(maxsize=None)
def ln_factorial(n):
    """Good to 1e-20."""
    if n < 2000:
        return ln(Decimal(factorial(n))) if n > 1 else Decimal(0)
    z = Decimal(n + 1)
    series = sum(real(c) / z ** (2 * j + 1) for j, c in enumerate(STIRLING))
    return (z - Decimal("0.5")) * z.ln() - z + (2 * PI).ln() / 2 + series


def exact_tail(k, n, p):
    q, total, choices = 1 - p, Fraction(0), 1
    for i in range(k + 1):
        total += choices * p**i * q ** (n - i)
        choices = choices * (n - i) // (i + 1)
    return total


def summed_tail(k, n, p):
    """Bounds on the tail from its terms; None if there are too many."""
    p = real(p)
    odds = (1 - p) / p
    term = (ln_factorial(n) - ln_factorial(k) - ln_factorial(n - k) + k * p.ln() + (n - k) * (1 - p).ln()).exp()
    total = Decimal(0)
    for i in range(min(k + 1, MOST_TERMS)):
        total += term
        if i == k:
            return total * (1 - ERROR), total * (1 + ERROR)
        # The terms fall ever faster.
        ratio = odds * (k - i) / (n - k + i + 1)
        if ratio >= 1:
            return Decimal(0), Decimal(1)
        rest = term * ratio / (1 - ratio)
        if rest < total * ERROR:
            return total * (1 - ERROR), (total + rest) * (1 + ERROR)
        term *= ratio
    return None


@lru_cache(maxsize=None)
def lower_tail(k, n, p):
    """Bounds below and above on P(Bin(n, p) <= k) for k < n and k/n <= p < 1."""
    if n <= EXACT_TRIALS:
        value = real(exact_tail(k, n, p))
        return value, value
    if k == n - 1:
        value = 1 - (n * ln(p)).exp()
        return value, value
    return summed_tail(k, n, p) or integrated_tail(k, n, p)


def integrated_tail(k, n, p):
    """Bounds on the tail from its integral; they differ by a part in ten thousand."""
    hits, misses = Decimal(k), Decimal(n - k - 1)
    constant = ln_factorial(n) - ln_factorial(k) - ln_factorial(n - k - 1)

    def height(t):
        return constant + (hits * t.ln() if k else 0) + (misses * (1 - t).ln() if misses else 0)

    def slope(t):
        return misses / (1 - t) - hits / t

    t = real(p)
    first, low, high = height(t), Decimal(0), Decimal(0)
    here = first
    while True:
        steep = slope(t)
        if steep <= 0:
            # Left of the summit, where the tail is no small one: nothing is claimed of it.
            return Decimal(0), Decimal(1)
        step = min(Decimal("0.05") / steep, (1 - t) / 2)
        # What is left beyond this point is at most the integral of the tangent.
        rest = (here - first).exp() / steep
        if rest < high / 10**6:
            high += rest
            break
        there = height(t + step)
        high += (here - first).exp() * (1 - (-steep * step).exp()) / steep
        fall = here - there
        low += (here - first).exp() * (1 - (-fall).exp()) / fall * step
        t, here = t + step, there
    return low * first.exp() * (1 - ERROR), high * first.exp() * (1 + ERROR)


def confirm(interval, k, n, alpha, what):
    """Both endpoints of a Clopper-Pearson interval: the tail beyond each is at most alpha/2, and not much less than that."""
    low, high = interval
    require(0 <= low <= high <= 1, f"{what}: {float(low)} to {float(high)} is no interval")
    # The library that made the endpoints overestimates tails by about one part in z^2 (z standard deviations away) and allows for rounding
    # in proportion to n ln n.
    z2 = max(-2 * (alpha / 2).ln() - 6, Decimal(1))
    waste = (1 + 2 / z2) * (Decimal("1e-13") * n * Decimal(n).ln()).exp() if n > 1 else Decimal(3)
    for count, end, side in ((k, Fraction(high), "upper"), (n - k, 1 - Fraction(low), "lower")):
        if count == n:
            require(end == 1, f"{what}: the {side} end of a certain outcome is not at the edge")
            continue
        if end == 1:
            inward = Fraction(1) - Fraction(1, 10**15)
            require(lower_tail(count, n, inward)[1] <= alpha / 2 or (1 - inward) * n > 1, f"{what}: the {side} end is needlessly wide")
            continue
        require(end * n > count, f"{what}: the {side} end lies inside")
        require(lower_tail(count, n, end)[1] <= alpha / 2, f"{what}: the {side} end is too close")
        inward = end - Fraction(1, 10**15)
        require(lower_tail(count, n, inward)[1] * waste >= alpha / 2 * Decimal("0.99"), f"{what}: the {side} end is needlessly wide")
