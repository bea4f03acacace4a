"""Humidity growth and linear correction against published forms and values."""

import pytest

from intervals import correction, interval
from motekeep.measure.interval import Climate
from motekeep.measure.steps.humidity_growth import HumidityGrowth, growth_factor, mass_factor
from motekeep.measure.steps.linear import Linear
from motekeep.measure.steps.step import Air


# Petters and Kreidenweis 2007, Atmos. Chem. Phys. 7:1961: gf = (1 + kappa aw / (1 - aw))^(1/3); values computed from it
# for ammonium sulfate (0.61) and sodium chloride (1.28, from memory).
@pytest.mark.parametrize(
    ("kappa", "water_activity", "factor"), [(0.61, 0.90, 1.86529), (1.28, 0.90, 2.32203), (0.3, 0.80, 1.30059)]
)
def test_growth_factor_of_petters_and_kreidenweis(kappa: float, water_activity: float, factor: float) -> None:
    assert growth_factor(kappa, water_activity) == pytest.approx(factor, abs=1e-5)


# Crilley et al. 2018, Atmos. Meas. Tech. 11:709: C = 1 + (kappa / 1.65) / (1 / aw - 1); 1.65 is from memory.
@pytest.mark.parametrize(
    ("kappa", "rh", "factor", "within"),
    [
        (0.4, 50.0, 1.242424, 1e-6),
        (0.4, 80.0, 1.969697, 1e-6),
        (0.4, 90.0, 3.181818, 1e-6),
        (0.4, 95.0, 5.606061, 1e-6),
        (0.4, 30.0, 1.1039, 1e-4),
        (0.4, 98.0, 12.879, 1e-3),
        (0.3, 80.0, 1.7273, 1e-4),
        (0.2, 90.0, 2.0909, 1e-4),
        (0.61, 90.0, 4.3273, 1e-4),
    ],
)
def test_mass_factor_of_crilley(kappa: float, rh: float, factor: float, within: float) -> None:
    assert mass_factor(kappa, rh) == pytest.approx(factor, abs=within)


# Nilson et al. 2022, Atmos. Meas. Tech. 15:3315: PM / (1 + 0.24 / (100 / RH - 1)) with RH held within 30 to 70 %.
# 0.24 is kappa / density: 0.396 at 1.65 g/cm3.
@pytest.mark.parametrize(("rh", "dry"), [(50.0, 24.1935), (70.0, 19.2308), (95.0, 19.2308), (20.0, 27.2021)])
def test_clipped_form_of_nilson(rh: float, dry: float) -> None:
    step = HumidityGrowth(0.24 * 1.65, rh_low=30.0, rh_high=70.0, rh_fog=95.0)
    assert step.apply(30.0, Air(rh_pct=rh)).value == pytest.approx(dry, abs=1e-4)


# Barkjohn et al. 2021, Atmos. Meas. Tech. 14:4617: 0.524 PM - 0.0862 RH + 5.75 (coefficients from memory).
@pytest.mark.parametrize(("raw", "rh", "corrected"), [(30.0, 50.0, 17.160), (100.0, 80.0, 51.254), (10.0, 95.0, 2.801)])
def test_linear_form_of_barkjohn(raw: float, rh: float, corrected: float) -> None:
    got = Linear(0.524, 5.75, -0.0862).apply(raw, Air(rh_pct=rh))
    assert got.value == pytest.approx(corrected, abs=1e-3)


def test_a_document_with_the_published_line_gives_the_published_figure() -> None:
    """The same through the whole way of a document."""
    line = """
[[step]]
kind = "linear"
slope = { value = 0.524, u = 0.02 }
offset = { value = 5.75, u = 0.5 }
rh_term = { value = -0.0862, u = 0.01 }
"""
    got = correction(line)(interval(mass=(20.0, 30.0, 35.0), climate=Climate(50.0, 20.0, "frame")))
    assert got.values[1].value == pytest.approx(17.160, abs=1e-3)


# Computed from Crilley's form at kappa 0.4: what 3 % of RH do to the factor.
@pytest.mark.parametrize(("rh", "below", "above"), [(50.0, -2.0, 2.5), (85.0, -11.0, 17.0), (90.0, -18.0, 33.0)])
def test_why_humidity_has_to_be_held(rh: float, below: float, above: float) -> None:
    at = mass_factor(0.4, rh)
    assert 100.0 * (mass_factor(0.4, rh - 3.0) / at - 1.0) == pytest.approx(below, abs=1.0)
    assert 100.0 * (mass_factor(0.4, rh + 3.0) / at - 1.0) == pytest.approx(above, abs=1.0)
