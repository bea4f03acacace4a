"""What the optics see, and what coincidence hides."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motesim.aerosol import above
from motesim.air import AirPlan, still_air
from motesim.optics import coincident, shifted_thresholds_um, visible

EDGES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
ONES = np.ones(2)


def test_perfect_latex_eyes_see_the_geometric_counts_of_dry_latex() -> None:
    plan = AirPlan(aerosol="urban", pm2_5=20.0)
    air = still_air(plan, 0.0, 20.0)
    latex = tuple(type(mode)(mode.number, mode.diameter_um, mode.sigma, index=1.59) for mode in air.modes)
    air = type(air)(latex, air.factors, air.times, air.temperature, air.rh, air.daylight)
    between = visible(air, air.rh, EDGES_UM, ONES, 1.0)[0]
    counted = np.cumsum(between[::-1])[::-1]
    expected = np.array([above(latex, edge) for edge in EDGES_UM])
    assert counted == pytest.approx(expected, rel=1e-5)


def test_less_light_moves_every_threshold_up_and_the_large_ones_most() -> None:
    edges = (0.15, 0.35, 1.5)
    shifts = shifted_thresholds_um(edges, np.array([0.8]))[:, 0] / np.array(edges)
    # local exponents of the Mie response of latex: 5.9, 2.7 (with its flat part to 0.5 um) and 1.7 or less
    assert shifts[0] == pytest.approx(0.8 ** (-1 / 5.9), rel=5e-3)
    assert 1.0 < shifts[0] < shifts[1] < shifts[2]


@settings(max_examples=50, deadline=None)
@given(st.floats(0.2, 12.0), st.floats(0.3, 3.0))
def test_a_gain_and_its_inverse_bring_a_threshold_back(edge: float, gain: float) -> None:
    there = float(shifted_thresholds_um((edge,), np.array([gain]))[0, 0])
    back = float(shifted_thresholds_um((there,), np.array([1.0 / gain]))[0, 0])
    assert back == pytest.approx(edge, rel=1e-9)


def test_humidity_moves_counts_up_the_channels() -> None:
    plan = AirPlan(aerosol="rural", pm2_5=8.0, kappa=0.4)
    dry, humid = (
        visible(still_air(plan, rh, 10.0), np.full(2, rh), EDGES_UM, ONES, 1.15)[0].cumsum() for rh in (30.0, 90.0)
    )
    assert humid[0] > 1.5 * dry[0]


def test_of_crowded_pulses_the_paralysable_share_remains() -> None:
    # N exp(-N Q t) at N Q t = 0.1: 0.09048374 (Jaenicke 1972)
    rates = np.array([[900.0, 80.0, 15.0, 4.0, 0.9, 0.1]])
    kept = coincident(rates, np.array([1000.0]), 1e-4)
    assert kept.sum() == pytest.approx(10_000.0 * 0.09048374, rel=1e-7)


def test_ten_per_cent_are_lost_at_the_known_point() -> None:
    kept = coincident(np.array([[50.0, 0.0]]), np.array([0.1053605]), 1.0)
    assert kept.sum() == pytest.approx(45.0, rel=1e-6)  # N Q t = 0.1053605, ISO 21501-4 clause 3.6 limit


def test_small_particles_hide_behind_large_ones_and_not_the_other_way_round() -> None:
    rates = np.array([[1000.0, 10.0]])
    kept = coincident(rates, np.array([1000.0]), 5e-4)
    assert kept[0, 0] < 0.65 * rates[0, 0]
    assert kept[0, 1] == pytest.approx(rates[0, 1], rel=0.02)


@settings(max_examples=50, deadline=None)
@given(st.lists(st.floats(0.0, 1e4), min_size=2, max_size=6), st.floats(0.0, 2e-3))
def test_coincidence_never_makes_pulses(rates: list[float], volume: float) -> None:
    total = sum(rates)
    kept = coincident(np.array([rates]), np.array([total]), volume)
    assert np.all(kept >= 0.0)
    assert kept.sum() <= total * (1.0 + 1e-9)
