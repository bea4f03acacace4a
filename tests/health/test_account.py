"""dose-due, hours-due and the findings of calibration: sums and dates against the limits that were set."""

import json
from dataclasses import replace

import pytest

from intervals import GROWTH, MARCH, document, interval
from motekeep.health.account import CalibrationExpired, CalibrationMissing, CalibrationOutOfRange, DoseDue, HoursDue
from motekeep.health.check import Check
from motekeep.health.finding import Suspicion
from motekeep.health.range import CountsSaturated
from motekeep.instant import Instant
from motekeep.measure.account import Account, Limits
from motekeep.measure.correction import compile_document
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.measure.dose import Dose
from motekeep.measure.interval import Climate
from motekeep.measure.reading import make_reading, refused, uncorrected

LINEAR = """
[[step]]
kind = "linear"
slope = { value = 0.9, u = 0.04 }
offset = { value = 0.5, u = 0.3 }
"""
DOCUMENT = parse(document(LINEAR))


def account(
    at: float = MARCH,
    *,
    dose: Dose | None = None,
    calibration: CalibrationDocument | None = None,
    trusted: bool = True,
    damaged: bool = False,
    mass: tuple[float, ...] = (6.0, 12.0, 15.0),
    counts: tuple[float, ...] = (1800.0, 500.0, 90.0, 9.0, 2.0, 1.0),
    seconds: float = 60.0,
    climate: Climate | None = None,
) -> Account:
    """After an interval that began at `at` (Unix seconds; the boot clock is 1e9 behind)."""
    correction = compile_document(calibration) if calibration else refused if damaged else uncorrected
    made = make_reading(
        interval(mass, counts, at=at, trusted=trusted, seconds=seconds, climate=climate), correction, {}
    )
    end = Instant(at + seconds, at + seconds - 1e9, "boot", trusted)
    return Account(end, dose or Dose(), calibration, made)


def told(check: Check, at: float = MARCH + 60.0) -> Suspicion | None:
    return check.judge(Instant(at, at - 1e9, "boot", trusted=True))


def test_the_dose_is_due_at_its_limit_and_tells_its_numbers() -> None:
    check = DoseDue(Limits(dose_ug=700.0))
    since = MARCH - 400 * 86400.0
    check.account(account(dose=Dose(dust_ug=699.9, dust_since=since)))
    assert told(check) is None
    check.account(account(MARCH + 60.0, dose=Dose(dust_ug=700.0, dust_since=since)))
    suspicion = told(check, MARCH + 120.0)
    assert suspicion is not None
    assert suspicion.since == MARCH + 120.0 - 1e9
    assert suspicion.evidence == "700 ug of dust drawn through since 2026-01-25T00:00:00Z; the limit is 700 ug"


def test_a_sensor_whose_optics_look_up_is_due_at_half_and_says_why() -> None:
    check = DoseDue(Limits(dose_ug=350.0, halved=True))
    check.account(account(dose=Dose(dust_ug=360.0)))
    assert "the limit is 350 ug, halved as its optics look up" in (told(check) or Suspicion(0.0, 0.0, "")).evidence


def test_it_closes_when_the_unit_was_cleaned_and_not_for_a_little_less() -> None:
    check = DoseDue(Limits())
    for ug, due in ((701.0, True), (680.0, True), (660.0, False), (690.0, False), (0.1, False)):
        check.account(account(dose=Dose(dust_ug=ug)))
        assert (told(check) is not None) is due, ug


def test_laser_hours_are_due_at_their_limit() -> None:
    check = HoursDue(Limits(laser_hours=8000.0))
    check.account(account(dose=Dose(laser_s=7999.0 * 3600.0)))
    assert told(check) is None
    check.account(account(dose=Dose(laser_s=8001.0 * 3600.0)))
    assert (told(check) or Suspicion(0.0, 0.0, "")).evidence == "the laser has run 8001 h; the limit is 8000 h"


def test_a_document_that_is_required_and_not_there_is_missing_until_it_is() -> None:
    check = CalibrationMissing()
    check.account(account())
    suspicion = told(check)
    assert suspicion is not None
    assert suspicion.since == MARCH - 1e9
    assert suspicion.evidence.startswith("there is no document")
    check.account(account(calibration=DOCUMENT))
    assert told(check) is None


def test_one_that_must_not_be_used_is_missing_too_and_said_so() -> None:
    check = CalibrationMissing()
    check.account(account(damaged=True))
    assert (told(check) or Suspicion(0.0, 0.0, "")).evidence.startswith("the document that lies there must not be used")


def test_a_document_is_expired_from_the_moment_it_says() -> None:
    check = CalibrationExpired()
    check.account(account(DOCUMENT.valid_until - 90.0, calibration=DOCUMENT))
    assert told(check, DOCUMENT.valid_until - 30.0) is None
    check.account(account(DOCUMENT.valid_until, calibration=DOCUMENT))
    suspicion = told(check, DOCUMENT.valid_until + 86400.0)
    assert suspicion is not None
    assert suspicion.since == DOCUMENT.valid_until - 1e9
    assert suspicion.evidence == "issue 3 was valid until 2027-11-20T00:00:00Z, 1.0 days ago"
    check.account(account(DOCUMENT.valid_until + 60.0, calibration=replace(DOCUMENT, valid_until=2e9)))
    assert told(check) is None


def test_on_a_clock_that_nobody_vouches_for_dates_neither_open_nor_close_it() -> None:
    check = CalibrationExpired()
    check.account(account(DOCUMENT.valid_until + 60.0, calibration=DOCUMENT, trusted=False))
    assert told(check) is None
    check.account(account(DOCUMENT.valid_until + 60.0, calibration=DOCUMENT))
    assert told(check) is not None
    check.account(account(MARCH, calibration=DOCUMENT, trusted=False))
    assert told(check) is not None


def live(check: CalibrationOutOfRange, from_s: float, hours: float, mass: float, step_s: float = 60.0) -> list[float]:
    """Hours since `from_s` at which it opened or closed, with PM2.5 at `mass`; the document reaches to 500."""
    changes = []
    held = told(check, MARCH + from_s) is not None
    for i in range(int(hours * 3600.0 / step_s)):
        start = MARCH + from_s + i * step_s
        check.account(account(start, calibration=DOCUMENT, mass=(6.0, mass, mass + 3.0), seconds=step_s))
        now = told(check, start + step_s) is not None
        if now is not held:
            changes.append((i + 1) * step_s / 3600.0)
        held = now
    return changes


@pytest.mark.parametrize("step_s", [60.0, 600.0, 3600.0])
def test_out_of_range_opens_after_three_hours_of_six_and_closes_when_a_quarter_is_left(step_s: float) -> None:
    check = CalibrationOutOfRange()
    assert live(check, 0.0, 6.0, 12.0, step_s) == []
    [opened] = live(check, 6.0 * 3600.0, 5.0, 600.0, step_s)
    assert 3.0 < opened <= 3.0 + max(step_s, 300.0) / 3600.0
    suspicion = told(check, MARCH + 11.0 * 3600.0)
    assert suspicion is not None
    assert suspicion.evidence == "5.0 h of the last 6.0 h outside of the range of issue 3"
    assert suspicion.since == MARCH + 6.0 * 3600.0 - 1e9
    [closed] = live(check, 11.0 * 3600.0, 10.0, 12.0, step_s)
    assert 4.4 <= closed <= 6.0


def test_a_night_of_two_hours_outside_is_no_finding() -> None:
    check = CalibrationOutOfRange()
    for day in range(4):
        assert live(check, day * 86400.0, 22.0, 12.0, 600.0) == []
        assert live(check, day * 86400.0 + 22.0 * 3600.0, 2.0, 600.0, 600.0) == []


def test_humidity_outside_of_what_was_fitted_counts_where_a_step_needs_it() -> None:
    narrow = parse(document(GROWTH).replace(b"rh = [0.0, 100.0]", b"rh = [0.0, 60.0]"))
    check = CalibrationOutOfRange()
    for i in range(200):
        check.account(account(MARCH + i * 60.0, calibration=narrow, climate=Climate(75.0, 20.0, "probe")))
    assert told(check, MARCH + 12_000.0) is not None


def test_another_document_begins_anew() -> None:
    check = CalibrationOutOfRange()
    live(check, 0.0, 6.0, 600.0, 600.0)
    assert told(check, MARCH + 6.0 * 3600.0) is not None
    check.account(account(MARCH + 6.0 * 3600.0, calibration=replace(DOCUMENT, issue=4), mass=(6.0, 600.0, 603.0)))
    assert told(check, MARCH + 6.1 * 3600.0) is None


def test_what_was_outside_is_remembered_across_a_restart_and_nothing_else() -> None:
    first = CalibrationOutOfRange()
    live(first, 0.0, 6.0, 12.0, 600.0)
    assert first.memory() is None
    live(first, 6.0 * 3600.0, 4.0, 600.0, 600.0)
    second = CalibrationOutOfRange()
    now = MARCH + 10.1 * 3600.0
    second.recall(json.loads(json.dumps(first.memory())), Instant(now, now - 1e9, "boot", trusted=True))
    assert told(second, now) is not None
    assert live(second, 10.1 * 3600.0, 10.0, 12.0, 600.0) != []


@pytest.mark.parametrize(
    "memory", [{}, {"issue": 1.0}, {"issue": 1.0, "blocks": ["x"]}, {"issue": 1.0, "holds": 1.0, "blocks": [1.0, 2.0]}]
)
def test_a_memory_of_any_shape_is_taken(memory: dict[str, object]) -> None:
    check = CalibrationOutOfRange()
    check.recall(memory, Instant(MARCH, MARCH - 1e9, "boot", trusted=True))  # type: ignore[arg-type]
    told(check)
    check.account(account(calibration=DOCUMENT))
    told(check)


# -- coincidence ------------------------------------------------------------------------------------------------------

DENSE = 'kind = "coincidence"\nvolume_mm3 = { value = 2.0, u = 0.4 }\n'


@pytest.mark.parametrize(("count", "found"), [(4700.0, False), (4780.0, True), (25_000.0, True)])
def test_loss_by_coincidence_over_a_tenth_is_saturation_where_the_document_states_a_volume(
    count: float, found: bool
) -> None:
    """ISO 21501-4:2007, 3.6: 10 % lost at N V = 0.1053605, which is 52.68 true and 47.4 counted per cm3 for 2 mm3."""
    dense = parse(document(f"[[step]]\n{DENSE}"))
    check = CountsSaturated()
    one = account(calibration=dense, counts=(count, 500.0, 90.0, 9.0, 2.0, 1.0))
    check.interval(one.reading.interval)
    check.account(one)
    suspicion = told(check)
    assert (suspicion is not None) is found
    if suspicion is not None:
        assert "over 10 % lost by coincidence" in suspicion.evidence


def test_without_a_stated_volume_nobody_knows_and_nothing_is_found() -> None:
    check = CountsSaturated()
    one = account(calibration=DOCUMENT, counts=(60_000.0, 500.0, 90.0, 9.0, 2.0, 1.0))
    check.interval(one.reading.interval)
    check.account(one)
    assert told(check) is None
