"""Exact chances of small counts: what a check compares its evidence with.

Owns binomial and Poisson tails in the standard library alone, as the device carries no scipy. Sums run from the
largest term outwards in logarithms of the first term, so that no argument overflows.
"""

from math import exp, lgamma, log

_NEGLIGIBLE = 1e-17  # of the sum so far: below what a float of it can hold


def binomial_at_least(k: int, n: int, p: float) -> float:
    """P(X >= k) for X ~ Binomial(n, p)."""
    if k <= 0:
        return 1.0
    if k > n or p <= 0.0:
        return 0.0
    if p >= 1.0:
        return 1.0
    if k <= n * p:  # the other tail is the shorter one
        return 1.0 - _binomial_down(k - 1, n, p)
    term = total = exp(_log_binomial(k, n, p))
    odds = p / (1.0 - p)
    for i in range(k, n):
        term *= (n - i) / (i + 1) * odds
        total += term
        if term < total * _NEGLIGIBLE:
            break
    return min(total, 1.0)


def _binomial_down(k: int, n: int, p: float) -> float:
    """P(X <= k) by the terms from k downwards, which must fall."""
    term = total = exp(_log_binomial(k, n, p))
    odds = (1.0 - p) / p
    for i in range(k, 0, -1):
        term *= i / (n - i + 1) * odds
        total += term
        if term < total * _NEGLIGIBLE:
            break
    return min(total, 1.0)


def _log_binomial(k: int, n: int, p: float) -> float:
    return lgamma(n + 1) - lgamma(k + 1) - lgamma(n - k + 1) + k * log(p) + (n - k) * log(1.0 - p)


def rate_lower_bound(k: int, n: int, alpha: float) -> float:
    """One-sided lower confidence bound of a rate from k of n (Clopper and Pearson 1934): the p at which k or more
    would have the chance `alpha`. 0 for k = 0."""
    if k <= 0:
        return 0.0
    low, high = 0.0, k / n
    for _ in range(30):
        middle = (low + high) / 2.0
        if binomial_at_least(k, n, middle) < alpha:
            low = middle
        else:
            high = middle
    return low


def poisson_at_most(k: int, mean: float) -> float:
    """P(X <= k) for X ~ Poisson(mean)."""
    if k < 0:
        return 0.0
    if mean <= 0.0:
        return 1.0
    if k >= mean:  # the other tail is the shorter one
        return 1.0 - poisson_at_least(k + 1, mean)
    term = total = exp(k * log(mean) - mean - lgamma(k + 1))
    for i in range(k, 0, -1):
        term *= i / mean
        total += term
        if term < total * _NEGLIGIBLE:
            break
    return min(total, 1.0)


def poisson_at_least(k: int, mean: float) -> float:
    """P(X >= k) for X ~ Poisson(mean)."""
    if k <= 0:
        return 1.0
    if mean <= 0.0:
        return 0.0
    if k <= mean:
        return 1.0 - poisson_at_most(k - 1, mean)
    term = total = exp(k * log(mean) - mean - lgamma(k + 1))
    i = k
    while term > total * _NEGLIGIBLE:
        i += 1
        term *= mean / i
        total += term
    return min(total, 1.0)
