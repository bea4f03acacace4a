"""Printed numbers: scaling, averaging, tops, masses."""

from itertools import pairwise

import numpy as np
import pytest

from motesim.firmware import BEND_UG_M3, Firmware, mass_weights, volume_mean_um
from motesim.unit import Unit, draw

EDGES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)
MASSES = ("pm1", "pm2_5", "pm10")


def firmware(averaging: int = 1, view: float = 1.0, top: float | None = 65_535.0) -> Firmware:
    return Firmware(Unit(averaging=averaging, view=view), 1.0, EDGES_UM, MASSES, top)


def pulses(n: int, mean: float, seed: int = 2) -> np.ndarray:
    found = np.zeros((n, 6), dtype=np.int64)
    found[:, 0] = np.random.default_rng(seed).poisson(mean, n)
    return found


def running(n: int) -> np.ndarray:
    return np.full(n, 10**6)


def test_counts_of_one_second_are_scaled_to_a_tenth_of_a_litre() -> None:
    # derived: 0.1 L/min is 1.667 cm3 in a second, so one pulse stands for 60; R = 60 n, n ~ Poisson(20)
    made = firmware()
    assert made.scale == pytest.approx(60.0)
    printed = made.pool(pulses(40_000, 20.0), running(40_000))[:, 0]
    assert printed.mean() == pytest.approx(1200.0, rel=0.05)
    assert printed.var() / printed.mean() == pytest.approx(60.0, rel=0.05)
    assert printed.std() / printed.mean() == pytest.approx(0.2236, rel=0.05)
    assert np.all(printed % 60 == 0)


@pytest.mark.parametrize(("k", "fano", "lag1"), [(3, 0.333, 0.667), (10, 0.100, 0.900)])
def test_averaging_lowers_the_noise_and_ties_neighbours(k: int, fano: float, lag1: float) -> None:
    # computed for a moving mean of k Poisson frames: F = 1/k, lag-1 (k - 1)/k
    printed = firmware(averaging=k).pool(pulses(200_000, 20.0), running(200_000))[:, 0] / 60.0
    assert printed.var() / printed.mean() == pytest.approx(fano, rel=0.03)
    assert np.corrcoef(printed[:-1], printed[1:])[0, 1] == pytest.approx(lag1, rel=0.03)


def test_averaging_joins_blocks_as_if_they_were_one() -> None:
    given = pulses(50, 20.0)
    whole = firmware(averaging=5).pool(given, running(50))
    split = firmware(averaging=5)
    parts = [split.pool(given[a:b], running(b - a)) for a, b in ((0, 1), (1, 3), (3, 3), (3, 20), (20, 50))]
    assert np.concatenate(parts) == pytest.approx(whole)


def test_after_a_wake_the_mean_starts_afresh() -> None:
    made = firmware(averaging=10)
    made.pool(pulses(50, 1000.0), running(50))
    woken = made.pool(pulses(4, 1.0), np.arange(1, 5))
    assert woken[:, 0].max() < 60 * 20


def test_counts_end_at_sixteen_bits() -> None:
    made = firmware()
    printed = made.columns(made.pool(pulses(5, 5000.0), running(5)), resolution=1.0, mass_top=1000.0)
    assert np.all(printed.counts[:, 0] == 65_535)


def test_masses_are_quantised_and_end_at_their_top() -> None:
    made = firmware()
    pooled = np.full((1, 6), 123.4)
    pooled[0, 0] = 9e6
    printed = made.columns(pooled, resolution=1.0, mass_top=1000.0)
    assert printed.mass[0, 0] == 1000.0
    fine = made.columns(np.array([[4000.0, 700.0, 60.0, 4.0, 0.0, 0.0]]), resolution=0.1, mass_top=1000.0).mass[0]
    assert fine * 10 == pytest.approx(np.rint(fine * 10))
    assert fine[0] < fine[1] < fine[2]


def test_the_ambient_triple_is_the_factory_one_up_to_its_bend() -> None:
    made = firmware()
    pooled = np.array([[1000.0, 0, 0, 0, 0, 0], [60_000.0, 0, 0, 0, 0, 0]])
    printed = made.columns(pooled, resolution=0.0, mass_top=1000.0)
    assert printed.ambient[0] == pytest.approx(printed.mass[0])
    assert BEND_UG_M3 < printed.ambient[1, 0] < printed.mass[1, 0]


def test_volume_mean_diameters_of_the_channels() -> None:
    # computed for a number even in ln D: ((b^3 - a^3)/(3 ln(b/a)))^(1/3)
    means = [volume_mean_um(a, b) for a, b in pairwise(EDGES_UM)]
    assert means == pytest.approx([0.3999, 0.7494, 1.7457, 3.7468, 7.4935], abs=1e-4)


def test_coarse_counts_are_hardly_trusted() -> None:
    # field slope against reference in dust below 0.1 (Kaur and Kelly 2023); one honest count of 5-10 um per 0.1 L would
    # weigh 3.64 ug/m3 at the volume mean diameter
    weights = mass_weights(EDGES_UM, MASSES)
    assert weights[4, 2] < 0.1 * np.pi / 6 * 1.65 * 7.4935**3 / 100
    assert weights[5].sum() == 0.0


def test_units_from_one_tray_differ_and_a_seed_is_one_unit() -> None:
    assert draw(7) == draw(7)
    gains = np.array([draw(seed).gain for seed in range(300)])
    assert 0.05 < gains.std() < 0.09
    assert {draw(seed).averaging for seed in range(100)} == {1, 2, 3, 5, 10}
