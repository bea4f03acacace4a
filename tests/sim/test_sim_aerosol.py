"""Populations, growth and settling against published values."""

from math import erfc as exact_erfc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motesim.aerosol import CATALOGUE, Mode, above, erfc, mass_below
from motesim.humidity import growth_factor, mass_factor, optical_factor, warmed
from motesim.settling import settling_m_s, slip

EDGES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)


@settings(deadline=None)
@given(st.floats(-8.0, 25.0))
def test_erfc_keeps_its_relative_error_far_out_in_the_tail(x: float) -> None:
    assert float(erfc(np.array([x]))[0]) == pytest.approx(exact_erfc(x), rel=1.3e-7)


# Jaenicke 1993 and Whitby 1978 parameters; cumulative numbers computed from them with scipy's erfc
@pytest.mark.parametrize(
    ("aerosol", "per_dl"),
    [
        ("average-urban", (42_040, 6570, 470.2, 49.19, 7.144, 0.5335)),
        ("urban", (40_650, 6561, 504.2, 40.91, 7.028, 1.014)),
        ("rural", (5081, 964.6, 173.2, 20.49, 3.047, 0.3439)),
        ("remote-continental", (8325, 528.9, 24.83, 10.61, 3.644, 0.7503)),
        ("marine", (3020, 853.3, 114.1, 17.68, 2.916, 0.2904)),
        ("desert", (1408, 850.5, 389, 121.3, 50.24, 23.37)),
    ],
)
def test_cumulative_counts_of_published_aerosols(aerosol: str, per_dl: tuple[float, ...]) -> None:
    counts = [100.0 * above(CATALOGUE[aerosol], edge) for edge in EDGES_UM]
    assert counts == pytest.approx(per_dl, rel=1e-3)


def test_volumes_of_the_average_urban_aerosol() -> None:
    # Whitby 1978, in Hinds table 14.3: accumulation 38.4, coarse 30.8 um3/cm3
    _, accumulation, coarse = CATALOGUE["average-urban"]
    assert accumulation.volume == pytest.approx(38.4, rel=0.015)
    assert coarse.volume == pytest.approx(30.8, rel=0.015)


def test_mass_median_by_hatch_and_choate() -> None:
    assert Mode(1.0, 1.0, 2.0).mass_median_um == pytest.approx(4.226436, rel=1e-6)  # Hatch and Choate 1929


def test_masses_of_published_aerosols_below_geometric_cuts() -> None:
    # computed from Jaenicke 1993 at 1.65 g/cm3
    masses = [mass_below(CATALOGUE["urban"], cut, aerodynamic=False) for cut in (1.0, 2.5, 10.0)]
    assert masses == pytest.approx([59.7, 71.2, 98.9], rel=2e-3)


def test_an_aerodynamic_cut_admits_smaller_geometric_particles_of_dense_matter() -> None:
    dust = Mode(1.0, 2.0, 2.0, density=2.6)
    assert dust.mass_below(2.5) < dust.mass_below(2.5, aerodynamic=False)
    assert dust.mass_below(1e6) == pytest.approx(2.6 * dust.volume, rel=1e-6)


@pytest.mark.parametrize(
    ("kappa", "rh", "growth"), [(0.61, 90.0, 1.86529), (1.28, 90.0, 2.32203), (0.3, 80.0, 1.30059)]
)
def test_growth_by_humidity(kappa: float, rh: float, growth: float) -> None:
    # Petters and Kreidenweis 2007, without the Kelvin term
    assert float(growth_factor(kappa, np.array([rh]))[0]) == pytest.approx(growth, abs=1e-5)


@pytest.mark.parametrize(("rh", "factor"), [(50.0, 1.242424), (80.0, 1.969697), (90.0, 3.181818), (95.0, 5.606061)])
def test_mass_growth_by_humidity(rh: float, factor: float) -> None:
    # form of Crilley et al. 2018, kappa 0.4, 1.65 g/cm3
    assert float(mass_factor(0.4, np.array([rh]))[0]) == pytest.approx(factor, abs=1e-6)


def test_wet_mass_of_one_population_grows_as_the_mass_factor_says() -> None:
    kappa, density, rh = 0.4, 1.65, np.array([85.0])
    volume_ratio = float(growth_factor(kappa, rh)[0]) ** 3
    wet_over_dry = (density + volume_ratio - 1.0) / density
    assert wet_over_dry == pytest.approx(float(mass_factor(kappa, rh, density)[0]), rel=1e-9)


def test_water_dims_a_particle_as_it_swells_it() -> None:
    growth = np.array([1.0, 1.3, 2.0])
    factor = optical_factor(1.59, growth)
    assert factor[0] == pytest.approx(1.0)
    assert np.all(np.diff(factor) < 0.0)
    assert np.all(np.diff(factor * growth) > 0.0)


def test_a_warm_enclosure_is_drier_by_the_vapour_pressure() -> None:
    # 3 degC of warmth take 10 to 25 % RH: common practice, no source
    drier = 90.0 - float(warmed(np.array([90.0]), np.array([15.0]), 3.0)[0])
    assert 10.0 < drier < 25.0


@pytest.mark.parametrize(("diameter", "published"), [(0.01, 22.2), (0.1, 2.85), (1.0, 1.164), (10.0, 1.016)])
def test_slip_correction(diameter: float, published: float) -> None:
    assert slip(diameter) == pytest.approx(published, rel=5e-3)  # Seinfeld and Pandis 2006, table 9.3


@pytest.mark.parametrize(("diameter", "metres_per_second"), [(0.1, 8.82e-7), (1.0, 3.48e-5), (10.0, 3.06e-3)])
def test_settling_velocity(diameter: float, metres_per_second: float) -> None:
    assert settling_m_s(diameter) == pytest.approx(metres_per_second, rel=5e-3)  # Hinds table A11, from memory


@pytest.mark.parametrize(("diameter", "seconds"), [(10.0, 3.27), (2.5, 50.0), (0.3, 2375.0)])
def test_time_to_fall_one_centimetre(diameter: float, seconds: float) -> None:
    assert 0.01 / settling_m_s(diameter) == pytest.approx(seconds, rel=0.01)  # computed from the same
