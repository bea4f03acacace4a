"""Coincidence both ways, against its published forms and scipy's Lambert W."""

from math import e, exp, log

import numpy as np
import pytest
from scipy.special import lambertw

from motekeep.measure.steps.coincidence import TEN_PERCENT, Coincidence, lambert_w0, occupancy
from motekeep.measure.steps.step import Air


def test_lambert_w_agrees_with_scipy_on_its_whole_interval() -> None:
    z = np.concatenate([-np.geomspace(1e-12, 1.0 / e - 1e-9, 400), -1.0 / e + np.geomspace(1e-15, 1e-6, 100)])
    own = np.array([lambert_w0(float(v)) for v in np.clip(z, -1.0 / e, 0.0)])
    scipys = lambertw(np.clip(z, -1.0 / e, 0.0)).real
    # scipy itself loses digits within 1e-9 of the branch point, where W moves with the square root of the distance.
    assert np.max(np.abs(own - scipys)) < 5e-8
    assert np.max(np.abs(own - scipys)[:400]) < 1e-9


# Jaenicke 1972, J. Aerosol Sci. 3:95; Raasch and Umhauer 1984, Part. Part. Syst. Charact. 1:53 (forms from memory).
@pytest.mark.parametrize(
    ("occupied", "observed"),
    [(0.01, 0.00990050), (0.05, 0.04756147), (0.1, 0.09048374), (0.2, 0.16374615), (0.5, 0.30326533)],
)
def test_paralysable_dead_time_and_its_inverse(occupied: float, observed: float) -> None:
    assert occupied * exp(-occupied) == pytest.approx(observed, abs=1e-8)
    assert occupancy(observed) == pytest.approx(occupied, abs=1e-7)


# Q = 1.666667 cm3/s (0.1 L/min) and a pulse of 10 us sweep 1.66667e-5 cm3; 1 mm3 = 1e-3 cm3.
VOLUME_MM3 = 1.0 / 60.0 * 100.0 * 10e-6 / 1e-3


@pytest.mark.parametrize(("observed", "true"), [(9000.0, 10769.476), (20000.0, 37143.68)])
def test_inverse_at_a_physical_scale(observed: float, true: float) -> None:
    step = Coincidence(VOLUME_MM3)
    factor = step.apply(1.0, Air(count_per_dl=observed * 100.0)).value
    assert factor is not None
    assert factor * observed == pytest.approx(true, abs=1e-2)
    assert true * exp(-true * VOLUME_MM3 * 1e-3) == pytest.approx(observed, abs=1e-2)


def test_above_the_maximum_there_is_no_number() -> None:
    """1 / (e Q t) = 22,072.77 per cm3 at this scale."""
    step = Coincidence(VOLUME_MM3)
    assert 1.0 / (e * VOLUME_MM3 * 1e-3) == pytest.approx(22072.77, abs=1e-2)
    assert step.apply(1.0, Air(count_per_dl=22072.0 * 100.0)).value is not None
    assert step.apply(1.0, Air(count_per_dl=22073.0 * 100.0)).value is None


def test_ten_percent_are_lost_where_iso_21501_4_ends() -> None:
    """ISO 21501-4:2007, 3.6: maximum concentration is where coincidence loss is 10 %."""
    assert occupancy(0.9 * -log(0.9)) == pytest.approx(0.1053605, abs=1e-7)
    assert abs(TEN_PERCENT - 0.1053605) < 1e-7
    per_cm3 = TEN_PERCENT / (VOLUME_MM3 * 1e-3)
    assert per_cm3 == pytest.approx(6321.63, abs=1e-2)
