"""Mass from counts: spheres in bins, what is left out, and how sure it is."""

from math import sqrt

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intervals import NO_COUNTS, SIZES, interval
from motekeep.measure.closure import Assumptions, Diameter, bin_diameter_um, closure, mass_from_counts

COUNTS = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)
EXACT = Assumptions(u_density=0.0, u_flow=0.0, u_diameter=0.0)


def test_each_mass_takes_in_the_bins_below_its_cut() -> None:
    masses = mass_from_counts(SIZES, COUNTS)
    assert list(masses) == ["pm1", "pm2_5", "pm10"]
    assert masses["pm1"].mass < masses["pm2_5"].mass < masses["pm10"].mass


def test_a_dialect_with_four_sizes_has_no_mass_beyond_them() -> None:
    assert list(mass_from_counts(SIZES[:4], COUNTS[:4])) == ["pm1", "pm2_5"]


def test_a_dialect_with_a_size_at_four_has_that_mass_too() -> None:
    assert list(mass_from_counts((0.3, 0.5, 1.0, 2.5, 4.0), COUNTS[:5])) == ["pm1", "pm2_5", "pm4"]


def test_a_censored_count_takes_all_masses_that_need_it() -> None:
    assert mass_from_counts(SIZES, (None, *COUNTS[1:])) == {}
    assert list(mass_from_counts(SIZES, (*COUNTS[:3], None, *COUNTS[4:]))) == ["pm1"]


def test_counts_that_rise_with_size_make_no_negative_mass() -> None:
    masses = mass_from_counts(SIZES, (100.0, 200.0, 0.0, 0.0, 0.0, 0.0), EXACT)
    assert masses["pm1"].mass == mass_from_counts(SIZES[1:], (200.0, 0.0, 0.0, 0.0, 0.0), EXACT)["pm1"].mass


def test_errors_of_density_flow_and_diameter_are_common_to_all_bins() -> None:
    masses = mass_from_counts(SIZES, COUNTS)
    relative = sqrt(0.1**2 + 0.1**2 + (3 * 0.05) ** 2)
    assert [m.u / m.mass for m in masses.values()] == pytest.approx([relative] * 3)


def test_counting_adds_in_quadrature_over_the_bins() -> None:
    one = mass_from_counts(SIZES, COUNTS, EXACT, [1.0, 0.0, 0.0, 0.0, 0.0])["pm10"].u
    other = mass_from_counts(SIZES, COUNTS, EXACT, [0.0, 0.0, 1.0, 0.0, 0.0])["pm10"].u
    both = mass_from_counts(SIZES, COUNTS, EXACT, [1.0, 0.0, 1.0, 0.0, 0.0])["pm10"].u
    assert both == pytest.approx(sqrt(one**2 + other**2))


def test_an_interval_closes_with_its_noise_scale_and_without() -> None:
    with_scale, without = closure(interval(), 60.0), closure(interval())
    assert {n: m.mass for n, m in with_scale.items()} == {n: m.mass for n, m in without.items()}
    assert all(with_scale[n].u > without[n].u for n in without)
    assert closure(interval(layout=None)) == {}
    assert closure(interval(mass=(1.0, 2.0), layout=NO_COUNTS)) == {}
    assert closure(interval(censored=1), 60.0) == {}


@settings(max_examples=40, deadline=None)
@given(st.floats(0.1, 10.0), st.floats(1.01, 5.0))
def test_the_diameter_of_a_bin_lies_in_it_and_that_of_mean_volume_above_the_geometric_one(
    low: float, ratio: float
) -> None:
    high = low * ratio
    geometric = bin_diameter_um(low, high)
    volume = bin_diameter_um(low, high, Diameter.VOLUME_MEAN)
    assert low < geometric < volume < high
