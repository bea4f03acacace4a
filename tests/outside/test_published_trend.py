"""Trend and chart statistics against published examples."""

import pytest

from motekeep.health.trend import chart_began, chart_up, effective_number, mann_kendall, theil_sen

# US EPA QA/G-9S (2006), page 109
EPA = [10.0, 10.0, 10.0, 5.0, 10.0, 20.0, 18.0, 17.0, 15.0, 24.0, 15.0]

# Montgomery and Runger, Applied Statistics and Probability for Engineers, table 16-8: target 99, K 1
MONTGOMERY = [
    *[102.0, 94.8, 98.3, 98.4, 102.0, 98.5, 99.0, 97.7, 100.0, 98.1],
    *[101.3, 98.7, 101.1, 98.4, 97.0, 96.7, 100.3, 101.4, 97.2, 101.0],
]
MONTGOMERY_UP = [2, 0, 0, 0, 2, 0.5, 0, 0, 0, 0, 1.3, 0, 1.1, 0, 0, 0, 0.3, 1.7, 0, 1]


def test_mann_kendall_gives_the_statistic_of_the_epa_example() -> None:
    found = mann_kendall(EPA)
    assert found.s == 22
    assert found.variance == pytest.approx(155.3333, abs=1e-4)
    assert found.z == pytest.approx(1.684950, abs=1e-6)


def test_theil_sen_gives_the_slope_and_bounds_of_the_epa_example() -> None:
    # slope 1.0 with 0 to 2 at 95 %: scipy.stats.theilslopes on the same series
    found = theil_sen(range(len(EPA)), EPA)
    assert found is not None
    assert (found.value, found.low, found.high) == (1.0, 0.0, 2.0)


def test_theil_sen_is_not_moved_by_one_wild_value() -> None:
    # 1.011111 (0.966667 to 1.066667) by scipy.stats.theilslopes; least squares gives 1.668485
    y = [1.0, 2.1, 2.9, 4.2, 5.0, 5.9, 7.1, 30.0, 9.0, 10.1]
    found = theil_sen(range(10), y)
    assert found is not None
    assert found.value == pytest.approx(1.011111, abs=1e-6)
    assert found.low == pytest.approx(0.966667, abs=1e-6)
    assert found.high == pytest.approx(1.066667, abs=1e-6)


def test_the_chart_runs_as_the_published_one() -> None:
    chart = chart_up([value - 99.0 for value in MONTGOMERY], 1.0)
    assert chart == [pytest.approx(value, abs=0.05) for value in MONTGOMERY_UP]


def test_the_beginning_is_after_the_last_zero_of_the_published_chart() -> None:
    assert chart_began([value - 99.0 for value in MONTGOMERY[:18]], 1.0) == 16
    assert chart_began([value - 99.0 for value in MONTGOMERY[:19]], 1.0) == 19


def test_the_effective_number_falls_with_the_lag_1_autocorrelation_down_to_its_limit() -> None:
    # n (1 - r)/(1 + r), as for the mean of a first-order autoregression
    values = [1.0, 1.0, -1.0, -1.0] * 500
    assert effective_number(values) == pytest.approx(2000.0, rel=0.01)  # r is 0: neighbours agree as often as not
    rising = [float(i) for i in range(100)]
    assert effective_number(rising) == pytest.approx(100.0 * 0.1 / 1.9, rel=0.01)  # r is held at 0.9


def test_autocorrelation_takes_significance_away() -> None:
    assert mann_kendall(EPA, effective=11.0 / 4.0).z == pytest.approx(1.684950 / 2.0, abs=1e-6)
