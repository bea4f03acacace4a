"""Counting statistics and mass from counts, against published intervals and formulas."""

from itertools import pairwise
from math import sqrt

import pytest
from scipy.stats import chi2, gamma

from intervals import SIZES
from motekeep.measure.closure import (
    Assumptions,
    Diameter,
    bin_diameter_um,
    mass_from_counts,
    mass_median_um,
    sphere_mass,
    volume_mean_um,
)
from motekeep.measure.counting import garwood, lower_gamma


# Garwood 1936, Biometrika 28:437: halves of chi-square quantiles; values computed with scipy.
@pytest.mark.parametrize(
    ("n", "low", "high"),
    [
        (0, 0.0, 3.6889),
        (1, 0.0253, 5.5716),
        (4, 1.0899, 10.2416),
        (10, 4.7954, 18.3904),
        (100, 81.364, 121.627),
        (400, 361.756, 441.187),
    ],
)
def test_exact_poisson_intervals_of_garwood(n: int, low: float, high: float) -> None:
    assert garwood(n) == pytest.approx((low, high), abs=1e-3)


@pytest.mark.parametrize("n", [0, 1, 7, 60, 1200, 30000])
def test_the_interval_agrees_with_scipy_at_any_size(n: int) -> None:
    low, high = garwood(n, 0.9)
    assert low == pytest.approx(chi2.ppf(0.05, 2 * n) / 2 if n else 0.0, rel=1e-8)
    assert high == pytest.approx(chi2.ppf(0.95, 2 * n + 2) / 2, rel=1e-8)


@pytest.mark.parametrize(("shape", "x"), [(0.5, 0.1), (1.0, 3.0), (10.0, 4.0), (300.0, 310.0), (5.0, 60.0)])
def test_the_incomplete_gamma_function_agrees_with_scipy(shape: float, x: float) -> None:
    assert lower_gamma(shape, x) == pytest.approx(gamma.cdf(x, shape), rel=1e-10)


def test_product_rule_of_the_gum() -> None:
    """JCGM 100:2008, 5.1.6, eq. 12 (from memory): 5 % counting (n = 400), 10 % flow, 3 x 5 % diameter -> 18.7083 %."""
    assumed = Assumptions(u_density=0.0, u_flow=0.1, u_diameter=0.05)
    mass = mass_from_counts((0.5, 1.0), (400.0, 0.0), assumed, [400.0])["pm1"]
    assert 100.0 * mass.u / mass.mass == pytest.approx(18.7083, abs=1e-3)


def test_mass_from_counts_with_geometric_diameters() -> None:
    """Computed from M = sum (pi/6) rho d^3 N (from memory): 1200/340/62/8/2/1 per 0.1 L, last bin dropped."""
    counts = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)
    at_165 = mass_from_counts(SIZES, counts)
    assert [m.mass for m in at_165.values()] == pytest.approx([1.2808, 3.1249, 8.4702], abs=1e-4)
    at_1 = mass_from_counts(SIZES, counts, Assumptions(density=1.0))
    assert [m.mass for m in at_1.values()] == pytest.approx([0.7762, 1.8939, 5.1335], abs=1e-4)


def test_diameters_that_stand_for_a_bin() -> None:
    """Computed: geometric means, and (b^3 - a^3) / (3 ln(b/a)) to the third for a flat dN/dlogD."""
    edges = list(pairwise(SIZES))
    geometric = [bin_diameter_um(a, b) for a, b in edges]
    volume = [bin_diameter_um(a, b, Diameter.VOLUME_MEAN) for a, b in edges]
    assert geometric == pytest.approx([0.38730, 0.70711, 1.58114, 3.53553, 7.07107], abs=1e-5)
    assert volume == pytest.approx([0.3999, 0.7494, 1.7457, 3.7468, 7.4935], abs=1e-4)
    ratio = [(g / v) ** 3 for g, v in zip(geometric, volume, strict=True)]
    assert ratio == pytest.approx([0.909, 0.840, 0.743, 0.840, 0.840], abs=1e-3)


def test_one_coarse_count_is_three_micrograms() -> None:
    assert sphere_mass(bin_diameter_um(5.0, 10.0), 1.65, 1.0) == pytest.approx(3.05448, abs=1e-5)


def test_a_hundred_spheres_of_one_micrometre() -> None:
    """100 per cm3 of 1 um at 1.65 g/cm3: 86.3938 ug/m3."""
    assert sphere_mass(1.0, 1.65, 100.0 * 100.0) == pytest.approx(86.3938, abs=1e-4)


def test_conversion_of_hatch_and_choate() -> None:
    """Hatch and Choate 1929 (from memory): CMD 1, sg 2 -> MMD 4.226436; mean volume lies half-way on a log scale."""
    assert mass_median_um(1.0, 2.0) == pytest.approx(4.226436, abs=1e-6)
    assert volume_mean_um(1.0, 2.0) == pytest.approx(sqrt(mass_median_um(1.0, 2.0)), rel=1e-12)
