"""Dust dose and laser hours grow with what was drawn and go back to nothing only by what a person did."""

import pytest

from intervals import MARCH, interval
from motekeep.measure.dose import Dose, ServiceKind, dust_ug
from motekeep.measure.interval import FrameCount
from motekeep.measure.reading import Corrected, Reading, Value, make_reading, uncorrected

DAY = 86400.0


def reading(at: float = MARCH, **kw: object) -> Reading:
    return make_reading(interval(at=at, **kw), uncorrected, {})  # type: ignore[arg-type]


def test_two_years_at_a_tenth_of_a_litre_are_two_thirds_of_a_milligram() -> None:
    """0.1 L/min, mean 6.4 ug/m3: about 0.67 mg. Common practice, no source."""
    assert dust_ug(6.4, 0.1, 2 * 365 * DAY) == pytest.approx(670.0, rel=0.01)


def test_a_reading_adds_its_largest_mass_and_its_waking_time() -> None:
    dose = Dose().after(reading(), 0.1)
    assert dose.dust_ug == pytest.approx(15.0 * 0.1e-3)
    assert dose.laser_hours == pytest.approx(1 / 60)
    assert (dose.dust_since, dose.laser_since) == (MARCH, MARCH)


def test_the_corrected_mass_is_taken_where_there_is_one_and_the_raw_one_where_it_is_censored() -> None:
    def made(value: float | None) -> Reading:
        return make_reading(
            interval(), lambda _: Corrected((Value(1, 1, 1), Value(2, 2, 1), Value(15.0, value, 1.0)), 1, ()), {}
        )

    assert Dose().after(made(9.0), 0.1).dust_ug == pytest.approx(9.0e-4)
    assert Dose().after(made(None), 0.1).dust_ug == pytest.approx(15.0e-4)


def test_sleep_draws_nothing_and_spares_the_laser() -> None:
    dose = Dose().after(reading(asleep_s=45.0), 0.1)
    assert dose.dust_ug == pytest.approx(15.0 * 0.1e-3 / 4)
    assert dose.laser_s == 15.0
    silent = Dose().after(reading(layout=None, frames=FrameCount(0, 0, 60)), 0.1)
    assert (silent.dust_ug, silent.laser_s) == (0.0, 0.0)


def test_damaged_frames_still_come_from_a_laser_that_is_on() -> None:
    assert Dose().after(reading(layout=None, frames=FrameCount(0, 60, 0)), 0.1).laser_s == 60.0


def test_a_clock_that_nobody_vouches_for_begins_no_sum() -> None:
    dose = Dose().after(reading(trusted=False), 0.1)
    assert dose.dust_since is None
    assert dose.dust_ug > 0.0
    assert dose.after(reading(MARCH + 60.0), 0.1).dust_since == MARCH + 60.0


@pytest.mark.parametrize(
    ("kind", "dust", "laser"),
    [
        (ServiceKind.CLEANED, 0.0, 7200.0),
        (ServiceKind.UNIT_REPLACED, 0.0, 0.0),
        (ServiceKind.FAN_REPLACED, 50.0, 7200.0),
        (ServiceKind.MOVED, 50.0, 7200.0),
        (ServiceKind.NOTE, 50.0, 7200.0),
    ],
)
def test_a_service_record_resets_what_it_renews(kind: ServiceKind, dust: float, laser: float) -> None:
    done = Dose(50.0, 7200.0, MARCH, MARCH).serviced(kind, MARCH + 10 * DAY, MARCH + 10 * DAY)
    assert (done.dust_ug, done.laser_s) == (dust, laser)


def test_a_record_entered_late_leaves_what_was_drawn_since() -> None:
    done = Dose(50.0, 7200.0, MARCH, MARCH).serviced(ServiceKind.CLEANED, MARCH + 8 * DAY, MARCH + 10 * DAY)
    assert done.dust_ug == pytest.approx(10.0)
    assert done.dust_since == MARCH + 8 * DAY


def test_a_record_from_before_the_last_one_changes_nothing() -> None:
    before = Dose(50.0, 7200.0, MARCH, MARCH)
    assert before.serviced(ServiceKind.CLEANED, MARCH - DAY, MARCH + DAY) == before


def test_it_comes_back_from_what_was_kept() -> None:
    dose = Dose().after(reading(), 0.1).after(reading(MARCH + 60.0), 0.1)
    assert Dose.restored(dose.state()) == dose
    assert len(dose.state()) < 150


@pytest.mark.parametrize(
    "state",
    [
        "",
        "{}",
        "[]",
        '{"dust_ug": -1, "laser_s": 0, "dust_since": null, "laser_since": null}',
        '{"dust_ug": NaN, "laser_s": 0, "dust_since": null, "laser_since": null}',
        '{"dust_ug": 1, "laser_s": 0, "dust_since": "x", "laser_since": null}',
        '{"dust_ug": 1, "laser_s": 0, "dust_since": Infinity, "laser_since": null}',
        '{"dust_ug": "many", "laser_s": 0, "dust_since": null, "laser_since": null}',
    ],
)
def test_a_damaged_state_is_refused_by_one_error(state: str) -> None:
    with pytest.raises(ValueError, match=r".+"):
        Dose.restored(state)
