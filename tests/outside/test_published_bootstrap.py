"""The moving-block bootstrap where the answer is known: the mean of an AR(1) series."""

import numpy as np
import pytest
from scipy.signal import lfilter

from moteferry.fit.bootstrap import covariance, drawn, lag1, replicates, run_length
from moteferry.fit.record import Floats

PHI, N = 0.9, 2000
# Variance of the mean of an AR(1) series with unit innovations, for n far beyond its memory (Priestley 1981, Spectral
# Analysis and Time Series; from memory).
TRUTH = 1.0 / (1.0 - PHI) / np.sqrt(N)


def series(seed: int) -> Floats:
    noise = np.random.default_rng(seed).standard_normal(N + 500)
    return np.asarray(lfilter([1.0], [1.0, -PHI], noise)[500:])


def ratio(length: int) -> float:
    """Of the bootstrap's standard deviation of the mean to the true one, over a few series."""
    found = []
    for seed in range(8):
        x = series(seed)
        means = replicates(lambda rows, x=x: np.array([x[rows].mean()]), N, length, count=120, seed=seed)
        found.append(float(np.sqrt(covariance(means)[0, 0])) / TRUTH)
    return float(np.mean(found))


def test_single_hours_make_the_mean_look_four_times_as_sure_as_it_is() -> None:
    assert ratio(1) == pytest.approx(0.24, rel=0.2)  # computed apart from this code


def test_runs_of_a_hundred_come_near_the_truth() -> None:
    assert ratio(100) == pytest.approx(0.93, rel=0.2)  # computed apart from this code


def test_the_length_that_is_chosen_comes_near_the_truth() -> None:
    length = run_length(series(1), 48)

    assert 48 <= length <= N // 6
    assert ratio(length) == pytest.approx(1.0, rel=0.2)


def test_intervals_of_two_standard_deviations_hold_the_true_mean_as_often_as_they_say() -> None:
    inside = 0
    for seed in range(100, 160):
        x = series(seed)
        means = replicates(lambda rows, x=x: np.array([x[rows].mean()]), N, 64, count=50, seed=seed)
        inside += abs(float(x.mean())) <= 2.0 * float(np.sqrt(covariance(means)[0, 0]))

    assert 51 <= inside <= 60  # 95 % is promised: 57, and of 60 that is 51 or more in 99.5 of 100 draws


def test_lag_one_of_a_known_series() -> None:
    assert lag1(series(3)) == pytest.approx(PHI, abs=0.03)
    assert lag1(np.ones(50)) == 0.0


def test_what_is_drawn_are_runs_of_neighbours() -> None:
    rows = drawn(100, 10, np.random.default_rng(1))

    assert len(rows) == 100
    assert rows.min() >= 0
    assert rows.max() <= 99
    assert all((np.diff(run) == 1).all() for run in rows.reshape(10, 10))


def test_a_statistic_that_refuses_too_often_is_no_statistic() -> None:
    def fussy(rows: np.ndarray) -> Floats:
        if rows[0] % 2:
            raise ValueError("odd")
        return np.array([1.0])

    with pytest.raises(ValueError, match="could not be fitted"):
        replicates(fussy, 100, 10)
