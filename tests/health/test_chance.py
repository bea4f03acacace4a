"""Tails and bounds against closed forms and published tables."""

from math import comb, exp, factorial

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motekeep.health.chance import binomial_at_least, poisson_at_least, poisson_at_most, rate_lower_bound


@given(n=st.integers(1, 60), k=st.integers(-1, 62), p=st.floats(0.001, 0.999))
def test_the_binomial_tail_is_the_sum_of_its_terms(n: int, k: int, p: float) -> None:
    expected = sum(comb(n, i) * p**i * (1 - p) ** (n - i) for i in range(max(k, 0), n + 1))
    assert binomial_at_least(k, n, p) == pytest.approx(expected, rel=1e-9, abs=1e-15)


@given(k=st.integers(-1, 60), mean=st.floats(0.0, 60.0))
def test_the_poisson_tails_are_the_sums_of_their_terms_and_complete_each_other(k: int, mean: float) -> None:
    expected = sum(exp(-mean) * mean**i / factorial(i) for i in range(k + 1))
    assert poisson_at_most(k, mean) == pytest.approx(expected, rel=1e-9, abs=1e-13)
    assert poisson_at_least(k + 1, mean) == pytest.approx(1.0 - expected, abs=1e-12)


@settings(max_examples=40)
@given(k=st.integers(0, 50_000), mean=st.floats(0.0, 50_000.0))
def test_tails_of_large_numbers_stay_probabilities(k: int, mean: float) -> None:
    assert 0.0 <= poisson_at_most(k, mean) <= 1.0
    assert 0.0 <= poisson_at_least(k, mean) <= 1.0


@pytest.mark.parametrize(
    ("n", "low", "high"),
    [(4, 1.0899, 10.2416), (10, 4.7954, 18.3904), (100, 81.364, 121.627), (400, 361.756, 441.187)],
)
def test_tails_agree_with_the_exact_poisson_interval(n: int, low: float, high: float) -> None:
    """Garwood 1936, Biometrika 28:437: at the limits of the 95 % interval each tail is 2.5 %."""
    assert poisson_at_least(n, low) == pytest.approx(0.025, rel=1e-3)
    assert poisson_at_most(n, high) == pytest.approx(0.025, rel=1e-3)


@pytest.mark.parametrize(("k", "n", "bound"), [(1, 10, 0.00511620), (5, 100, 0.01990556), (10, 10, 0.74113445)])
def test_the_lower_bound_is_that_of_clopper_and_pearson(k: int, n: int, bound: float) -> None:
    """Clopper and Pearson 1934, Biometrika 26:404: beta quantile of alpha, k, n - k + 1; 10 of 10 is alpha^(1/10)."""
    assert rate_lower_bound(k, n, 0.05) == pytest.approx(bound, rel=1e-5)


@given(n=st.integers(1, 500), share=st.floats(0.0, 1.0))
def test_the_lower_bound_lies_below_the_rate_and_a_truth_there_has_chance_alpha(n: int, share: float) -> None:
    k = int(n * share)
    bound = rate_lower_bound(k, n, 0.05)
    assert 0.0 <= bound <= k / n
    if k:
        assert binomial_at_least(k, n, bound) == pytest.approx(0.05, rel=1e-4)
