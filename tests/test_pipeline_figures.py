"""What the pipeline makes of intervals: corrections, hours, dose; and that a restart keeps them."""

from collections.abc import Callable
from typing import Any

import pytest

from motekeep.instant import Instant, from_rfc3339
from motekeep.measure.climate import FIXED
from motekeep.measure.document_text import parse
from motekeep.measure.dose import ServiceKind, dust_ug
from motekeep.measure.interval import Climate
from motekeep.message.compose import Place
from motekeep.message.documents import AmendDocument, HourlyDocument, ReadingDocument, ValueDocument
from motekeep.pipeline import Harvest, Pipeline, SensorSetup
from motekeep.wire.bm import BM_28, BM_36
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

BM = DIALECTS["bm"]
NOON = from_rfc3339("2026-12-01T12:00:00Z")
BOOTED = 50_000.0  # well after boot
PERIOD = 6.0
TOP = 65535.0
COUNTS = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)

HEAD = """
issue = {issue}
site = "quarry"
gateway = "gate"
sensor = "north"
made_at = 2026-11-20T10:00:00Z
valid_from = 2026-11-20T12:00:00Z
valid_until = 2027-11-20T00:00:00Z
[range]
pm2_5 = [0.0, 500.0]
rh = [0.0, 100.0]
[residual]
pm2_5 = {{ u = 0.5 }}
"""
GROWTH = """
[[step]]
kind = "humidity-growth"
kappa = { value = 0.33, u = 0.05 }
"""
COINCIDENCE = """
[[step]]
kind = "coincidence"
volume_mm3 = { value = 2.0, u = 0.4 }
"""


def document(steps: str, issue: int = 1) -> Any:
    return parse((HEAD.format(issue=issue) + steps).encode())


def at(seconds: float, *, trusted: bool = True) -> Instant:
    return Instant(NOON + seconds, BOOTED + seconds, "boot", trusted)


def burst(slot: int, mass: float = 8.0, *, first: float | None = None, rh: float | None = None) -> bytes:
    """A frame that never is the same as the one before; `first` is the count of the smallest size."""
    counts = (1200.0 + slot * 7 % 13 if first is None else first, *COUNTS[1:])
    triple = (5.0, mass, mass + 1.0)
    return BM.encode(
        Frame(BM_28 if rh is None else BM_36, triple, counts, b"", triple, rh, None if rh is None else 11.0, 151)
    )


class Life:
    """One life of the daemon's pipeline, fed with a frame every six seconds; keeps all that it harvests."""

    def __init__(self, start: float = 0.0, seq: int = 1, kept: dict[str, str] | None = None, **setup: Any) -> None:
        self.now = start
        self.pipeline = Pipeline(Place("quarry", "gate"), 60, [SensorSetup("north", BM, PERIOD, **setup)], at(start))
        self.pipeline.resume({"north": seq}, kept or {}, at(start))
        self.readings: list[ReadingDocument] = []
        self.hours: list[HourlyDocument] = []
        self.amendments: list[AmendDocument] = []
        self.kept: dict[str, str] = dict(kept or {})

    def run(self, until: float, make: Callable[[int], bytes] = burst, *, trusted: bool = True) -> "Life":
        """Frames in the middle of their slots up to `until`, harvested every minute."""
        while self.now < until:
            self.pipeline.receive("north", make(round(self.now / PERIOD)), at(self.now + PERIOD / 2, trusted=trusted))
            self.now += PERIOD
            if self.now % 60.0 == 0.0:
                self.pipeline.advance(at(self.now, trusted=trusted))
                self.take(self.pipeline.harvest())
        return self

    def take(self, harvest: Harvest) -> None:
        self.readings += harvest.readings
        self.hours += harvest.hours
        self.amendments += harvest.amendments
        self.kept |= harvest.keep

    @property
    def next_seq(self) -> int:
        return self.readings[-1].seq + 1 if self.readings else 1

    @property
    def account(self) -> tuple[float, float]:
        """Dust in ug, laser hours."""
        account = self.pipeline.accounts()["north"]
        return account.dust_dose_ug, account.laser_hours


def pm2_5(reading: ReadingDocument) -> ValueDocument:
    assert reading.pm2_5 is not None
    return reading.pm2_5


# -- climate ----------------------------------------------------------------------------------------------------------


def test_the_humidity_of_the_frames_corrects_the_interval_that_they_are_in() -> None:
    life = Life(frame_climate=True)
    life.pipeline.calibrate("north", document(GROWTH))
    life.run(60.0, lambda slot: burst(slot, rh=40.0)).run(120.0, lambda slot: burst(slot, rh=80.0))
    dry, humid = life.readings
    assert pm2_5(dry).value == pytest.approx(8.0 / (1.0 + 0.2 * 40.0 / 60.0), abs=0.006)
    assert pm2_5(humid).value == pytest.approx(8.0 / (1.0 + 0.2 * 80.0 / 20.0), abs=0.006)
    assert (dry.flag, humid.flag) == (1, 1)
    assert dry.calibration is not None
    assert dry.calibration.issue == 1


@pytest.mark.parametrize(
    ("climate", "reason"),
    [
        (None, "climate-missing"),
        (Climate(55.0, 11.0, "iio", age_s=400.0), "climate-stale"),
        (Climate(155.0, 11.0, "iio"), "climate-implausible"),
        (Climate(float("nan"), 11.0, "iio"), "climate-implausible"),
    ],
)
def test_without_a_climate_that_can_be_used_the_figure_is_raw_suspect_and_says_why(
    climate: Climate | None, reason: str
) -> None:
    life = Life()
    life.pipeline.calibrate("north", document(GROWTH))
    if climate is not None:
        life.pipeline.climate("north", climate, at(1.0))
    life.run(60.0)
    [reading] = life.readings
    assert (pm2_5(reading).raw, pm2_5(reading).value, pm2_5(reading).u) == (8.0, 8.0, None)
    assert reading.flag == 3
    assert {reason, "uncorrected:pm2_5"} <= set(reading.reasons)
    assert reading.calibration is None


def test_climate_that_comes_back_corrects_again_and_that_of_old_is_never_taken_meanwhile() -> None:
    life = Life(climate_max_age_s=120.0)
    life.pipeline.calibrate("north", document(GROWTH))
    life.pipeline.climate("north", Climate(80.0, 11.0, "mqtt"), at(1.0))
    life.run(300.0)
    life.pipeline.climate("north", Climate(40.0, 11.0, "mqtt"), at(301.0))
    life.run(360.0)
    humid, dry = 8.0 / (1.0 + 0.2 * 4.0), 8.0 / (1.0 + 0.2 * 2 / 3)
    assert [pm2_5(r).value for r in life.readings] == pytest.approx([humid, humid, 8.0, 8.0, 8.0, dry], abs=0.006)
    assert [r.flag for r in life.readings] == [1, 1, 3, 3, 3, 1]


def test_a_fixed_climate_does_not_age() -> None:
    life = Life(climate_max_age_s=float("inf"))
    life.pipeline.calibrate("north", document(GROWTH))
    life.pipeline.climate("north", Climate(40.0, 11.0, FIXED), at(0.5))
    life.run(1200.0)
    assert {(pm2_5(r).value, r.flag) for r in life.readings} == {(7.06, 1)}


# -- saturation -------------------------------------------------------------------------------------------------------


def test_a_saturated_count_is_never_averaged_and_its_reading_is_suspect() -> None:
    life = Life().run(60.0, lambda slot: burst(slot, first=TOP if slot == 4 else 50_000.0 + slot))
    [reading] = life.readings
    assert reading.counts_per_dL is not None
    assert reading.counts_per_dL["0.3"] is None
    assert reading.counts_per_dL["0.5"] == 340.0
    assert reading.flag == 3
    assert "counts-saturated" in reading.reasons
    assert pm2_5(reading).raw == 8.0


def test_a_mass_whose_correction_needs_a_saturated_count_has_no_value_and_is_left_out_of_its_hour() -> None:
    life = Life()
    life.pipeline.calibrate("north", document(COINCIDENCE))
    life.run(1800.0)
    life.run(1860.0, lambda slot: burst(slot, 90.0, first=TOP if slot % 2 else 60_000.0))
    life.run(3660.0)
    full = life.readings[30]
    assert (pm2_5(full).raw, pm2_5(full).value, pm2_5(full).u) == (90.0, None, None)
    assert full.flag == 4
    assert "coincidence-censored" in full.reasons
    [hour] = life.hours
    assert hour.pm2_5 is not None
    others = [pm2_5(r).value for i, r in enumerate(life.readings[:60]) if i != 30]
    assert hour.pm2_5.mean == pytest.approx(sum(v for v in others if v is not None) / 59, abs=0.006)
    assert hour.pm2_5.completeness == pytest.approx(59 / 60, abs=0.002)
    assert hour.flag == 3  # the highest minute is missing: its mean is a lower bound
    assert "counts-saturated" in hour.reasons


# -- hours ------------------------------------------------------------------------------------------------------------


def varying(slot: int) -> bytes:
    return burst(slot, 8.0 + slot // 40 % 5)


@pytest.fixture(scope="module")
def unbroken() -> Life:
    """Two hours in one life."""
    return Life().run(7200.0, varying)


@pytest.mark.parametrize("minute", [1, 37, 60, 119])
def test_hours_are_the_same_whenever_the_daemon_was_started_anew(unbroken: Life, minute: int) -> None:
    first = Life().run(60.0 * minute, varying)
    second = Life(first.now, first.next_seq, first.kept)
    second.pipeline.remember("north", first.readings)
    second.run(7200.0, varying)
    given_out = {hour.start: hour for hour in [*first.hours, *second.hours]}
    assert [given_out[start].model_dump() for start in sorted(given_out)] == [h.model_dump() for h in unbroken.hours]
    assert [r.seq for r in [*first.readings, *second.readings]] == list(range(1, 121))


def test_hours_come_back_with_their_uncertainty_from_readings_as_they_were_published() -> None:
    whole, first = Life(), Life()
    for life in (whole, first):
        life.pipeline.calibrate("north", document(GROWTH))
        life.pipeline.climate("north", Climate(55.0, 11.0, FIXED), at(0.5))
    whole.run(3600.0, varying)
    first.run(2400.0, varying)
    second = Life(first.now, first.next_seq, first.kept)
    second.pipeline.remember("north", [ReadingDocument.model_validate_json(r.json_text()) for r in first.readings])
    second.pipeline.calibrate("north", document(GROWTH))
    second.pipeline.climate("north", Climate(55.0, 11.0, FIXED), at(first.now + 0.5))
    second.run(3600.0, varying)
    [unbroken], [resumed] = whole.hours, second.hours
    assert unbroken.pm2_5 is not None
    assert resumed.pm2_5 is not None
    assert resumed.pm2_5.mean == pytest.approx(unbroken.pm2_5.mean, abs=0.011)  # stored figures are rounded
    assert resumed.pm2_5.u == pytest.approx(unbroken.pm2_5.u, abs=0.011)
    assert (resumed.flag, resumed.pm2_5.completeness) == (1, unbroken.pm2_5.completeness)


def test_without_what_was_measured_before_the_restart_the_hour_has_no_mean() -> None:
    second = Life(2400.0, 41).run(3600.0, varying)
    [hour] = second.hours
    assert hour.pm2_5 is not None
    assert hour.pm2_5.mean is None
    assert hour.flag == 9


def test_an_hour_is_given_out_again_when_a_finding_reaches_back_into_it() -> None:
    """The output freezes 60 s before the hour is full; that is proven after it was given out."""
    life = Life().run(3540.0).run(3600.0, lambda _: burst(590, 20.0))
    [early] = life.hours
    assert early.pm2_5 is not None
    assert early.pm2_5.mean == pytest.approx((59 * 8.0 + 20.0) / 60, abs=0.01)
    life.run(4200.0, lambda _: burst(590, 20.0))
    again = life.hours[1]
    assert again.start == early.start
    assert again.pm2_5 is not None
    assert again.pm2_5.mean == 8.0
    assert "output-frozen" in again.reasons
    # what is published says the same of the same readings
    [told] = life.amendments
    assert told.from_ is not None
    assert told.to is not None
    assert (told.flag, told.reasons) == (4, ["output-frozen"])
    amended = [r.start for r in life.readings if told.from_ <= r.start < told.to]
    assert amended[0] == "2026-12-01T12:59:00Z"


def test_an_hour_that_nobody_vouches_for_is_not_made() -> None:
    assert Life().run(7200.0, trusted=False).hours == []


# -- dose and laser hours ---------------------------------------------------------------------------------------------


def test_dose_and_laser_hours_go_on_after_a_restart() -> None:
    whole = Life().run(3600.0)
    first = Life().run(1200.0)
    second = Life(first.now, first.next_seq, first.kept).run(3600.0)
    assert second.account == (pytest.approx(whole.account[0], abs=1e-5), pytest.approx(1.0, abs=1e-4))
    assert whole.account[0] == pytest.approx(dust_ug(9.0, 0.1, 3600.0), rel=1e-6)


def test_service_begins_the_dose_anew_for_good() -> None:
    life = Life().run(1800.0)
    life.pipeline.service("north", ServiceKind.CLEANED, NOON + 1800.0, at(1800.0))
    assert life.account == (0.0, pytest.approx(0.5))
    life.run(2400.0)
    again = Life(life.now, life.next_seq, life.kept)
    assert again.account == (pytest.approx(dust_ug(9.0, 0.1, 600.0), abs=1e-5), pytest.approx(2 / 3, abs=1e-4))
    again.pipeline.service("north", ServiceKind.UNIT_REPLACED, NOON + 2400.0, at(2400.0))
    assert again.account == (0.0, 0.0)


def test_a_service_that_is_told_late_keeps_what_was_drawn_since() -> None:
    life = Life().run(3600.0)
    life.pipeline.service("north", ServiceKind.CLEANED, NOON + 2700.0, at(3600.0))
    assert life.account[0] == pytest.approx(dust_ug(9.0, 0.1, 900.0), rel=0.01)


@pytest.mark.parametrize("rubbish", ["", "{", "[]", "null", '{"dust_ug": -5}', '{"findings": 3}', "[3]", "[" * 5000])
def test_what_was_kept_and_cannot_be_read_begins_anew_and_stops_nothing(rubbish: str) -> None:
    first = Life().run(120.0)
    assert set(first.kept) <= set(first.pipeline.kept_names)  # what is learnt is written once an hour
    life = Life(120.0, 3, dict.fromkeys(first.pipeline.kept_names, rubbish)).run(180.0)
    [reading] = life.readings
    assert (reading.seq, pm2_5(reading).raw) == (3, 8.0)
    assert life.account == (pytest.approx(dust_ug(9.0, 0.1, 60.0), rel=1e-3), pytest.approx(1 / 60))
