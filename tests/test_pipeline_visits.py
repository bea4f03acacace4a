"""What people do at a sensor, what it has been through, what it said before it failed: in the documents that leave."""

import gzip
from pathlib import Path

import pytest

from motekeep.app import sensor_setups
from motekeep.capture import FrameRecord, ServiceRecord, format_record, parse_line
from motekeep.config import parse
from motekeep.health.check import LineState
from motekeep.instant import Instant, from_rfc3339, rfc3339
from motekeep.measure.account import Limits
from motekeep.measure.dose import ServiceKind
from motekeep.message.compose import Place
from motekeep.message.documents import AmendDocument, ReadingDocument
from motekeep.pipeline import Harvest, Pipeline, SensorSetup
from motekeep.replay import Plan, replay
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from service_records import record

BM = DIALECTS["bm"]
NOON = from_rfc3339("2026-12-01T12:00:00Z")
BOOTED = 50_000.0
PLACE = Place("quarry", "east-gate")


def at(seconds: float, boot: str = "boot") -> Instant:
    return Instant(NOON + seconds, BOOTED + seconds, boot, True)


def burst(slot: int, *, mass: float = 8.0, revision: int = 0x97) -> bytes:
    counts = (1200.0 + slot * 7 % 13, 340.0, 62.0, 8.0, 2.0, 1.0)
    return BM.encode(Frame(BM_28, (5.0, mass, mass + 1), counts, b"", (5.0, mass, mass + 1), revision=revision))


class Gateway:
    """One sensor at a frame each six seconds."""

    def __init__(self, now: float = 0.0, kept: dict[str, str] | None = None, **setup: object) -> None:
        self.now = now
        self.pipeline = Pipeline(PLACE, 60, [SensorSetup("north", BM, 6.0, **setup)], at(now))  # type: ignore[arg-type]
        self.pipeline.resume({"north": 1}, kept or {}, at(now))
        self.kept: dict[str, str] = {}

    def live(self, seconds: float, **frame: object) -> Harvest:
        end = self.now + seconds
        while self.now + 6.0 <= end:
            self.now += 6.0
            self.pipeline.receive("north", burst(int(self.now / 6.0), **frame), at(self.now))  # type: ignore[arg-type]
        self.now = end
        self.pipeline.advance(at(end))
        return self.harvest()

    def silent(self, seconds: float) -> Harvest:
        self.now += seconds
        self.pipeline.advance(at(self.now))
        return self.harvest()

    def harvest(self) -> Harvest:
        harvest = self.pipeline.harvest()
        self.kept.update({**harvest.keep, **harvest.notes})
        return harvest

    def codes(self) -> list[str]:
        return [f.code for f in self.pipeline.findings()["north"]]


def told(harvest: Harvest) -> list[tuple[str, str]]:
    return [(f.code, f.event) for f in harvest.findings]


def flags(readings: tuple[ReadingDocument, ...]) -> list[int]:
    return [reading.flag for reading in readings]


def span(amendment: AmendDocument) -> tuple[float, float]:
    assert amendment.from_ is not None
    assert amendment.to is not None
    return from_rfc3339(amendment.from_) - NOON, from_rfc3339(amendment.to) - NOON


def test_readings_from_ten_minutes_before_a_record_to_twenty_after_it_are_marked() -> None:
    gateway = Gateway()
    gateway.live(1800.0)
    gateway.pipeline.service("north", ServiceKind.CLEANED, NOON + 1800.0, at(gateway.now))
    harvest = gateway.live(1800.0)
    assert told(harvest) == [("service-visit", "opened"), ("service-visit", "closed")]
    [amendment] = harvest.amendments
    assert (span(amendment), amendment.flag, amendment.reasons) == ((1200.0, 1800.0), 3, ["service-visit"])
    assert flags(harvest.readings) == [3] * 20 + [2] * 10
    assert ["service-visit" in r.reasons for r in harvest.readings] == [True] * 20 + [False] * 10


def test_a_record_entered_hours_late_amends_its_own_half_hour_and_nothing_else() -> None:
    gateway = Gateway()
    gateway.live(3 * 3600.0)
    gateway.pipeline.service("north", ServiceKind.MOVED, NOON + 3600.0 + 20.0, at(gateway.now))
    harvest = gateway.live(600.0)
    assert told(harvest) == [("service-visit", "opened"), ("service-visit", "closed")]
    [amendment] = harvest.amendments
    assert span(amendment) == (3000.0, 4860.0), "whole minutes, from the one it began in to the one it ended in"
    assert set(flags(harvest.readings)) == {2}


def test_a_visit_to_a_sensor_marks_its_twin_in_the_same_case_and_no_other() -> None:
    names = ("north", "south", "roof")
    setups = [SensorSetup(n, BM, 6.0, twin={"north": "south", "south": "north"}.get(n)) for n in names]
    pipeline = Pipeline(PLACE, 60, setups, at(0.0))
    pipeline.resume(dict.fromkeys(names, 1), {}, at(0.0))
    pipeline.service("north", ServiceKind.CLEANED, NOON, at(0.0))
    for slot in range(1, 21):
        for n in names:
            pipeline.receive(n, burst(slot), at(6.0 * slot))
    found = {f.sensor: f.evidence for f in pipeline.harvest().findings if f.code == "service-visit"}
    assert set(found) == {"north", "south"}
    assert "the twin cleaned at" in found["south"]


def test_a_note_marks_nothing() -> None:
    gateway = Gateway()
    gateway.live(600.0)
    gateway.pipeline.service("north", ServiceKind.NOTE, NOON + 600.0, at(gateway.now))
    harvest = gateway.live(600.0)
    assert (told(harvest), harvest.amendments) == ([], ())


def test_a_record_leaves_with_what_it_changed_in_one_harvest() -> None:
    gateway = Gateway()
    gateway.live(600.0, mass=900.0)
    assert gateway.pipeline.accounts()["north"].dust_dose_ug > 0.5
    said = record(at=rfc3339(NOON + 600.0))
    gateway.pipeline.record_service(said, at(gateway.now))
    harvest = gateway.harvest()
    assert harvest
    assert harvest.services == (said,)
    again = Gateway(gateway.now, dict(harvest.keep))
    assert again.pipeline.accounts()["north"].dust_dose_ug == 0.0


def test_another_unit_is_found_within_three_minutes_and_its_record_closes_the_finding() -> None:
    gateway = Gateway()
    gateway.live(1800.0)
    harvest = gateway.live(180.0, revision=0x9C)
    assert told(harvest) == [("unit-swapped", "opened")]
    [finding] = harvest.findings
    assert finding.category == "function_check"
    assert from_rfc3339(finding.since) - NOON == 1806.0
    gateway.pipeline.service("north", ServiceKind.UNIT_REPLACED, NOON + 1800.0, at(gateway.now))
    assert ("unit-swapped", "closed") in told(gateway.live(60.0, revision=0x9C))


def test_a_swap_while_the_daemon_was_off_is_found_in_its_next_life() -> None:
    first = Gateway()
    first.live(1800.0)
    second = Gateway(first.now + 600.0, first.kept)
    harvest = second.live(180.0, revision=0x9C)
    assert ("unit-swapped", "opened") in told(harvest)
    third = Gateway(second.now + 60.0, second.kept)
    assert third.codes() == ["unit-swapped"], "and is not forgotten by another restart"
    assert told(third.live(300.0, revision=0x9C)) == []


def test_a_dose_over_its_limit_is_a_finding_until_somebody_has_cleaned() -> None:
    gateway = Gateway(limits=Limits(dose_ug=0.01))
    assert told(gateway.live(600.0)) == []
    harvest = gateway.live(300.0)
    assert told(harvest) == [("dose-due", "opened")]
    assert set(flags(harvest.readings)) == {2}, "the figures are as good as before"
    gateway.pipeline.service("north", ServiceKind.CLEANED, NOON + gateway.now, at(gateway.now))
    assert ("dose-due", "closed") in told(gateway.live(180.0))


def test_a_dose_that_was_due_stays_so_across_a_restart_without_being_told_again() -> None:
    first = Gateway(limits=Limits(dose_ug=0.01))
    first.live(1800.0)
    second = Gateway(first.now, first.kept, limits=Limits(dose_ug=0.01))
    assert second.codes() == ["dose-due"]
    assert told(second.live(900.0)) == []


def test_a_required_calibration_that_is_not_there_is_a_finding_and_its_readings_are_suspect() -> None:
    gateway = Gateway(limits=Limits(calibration_required=True))
    harvest = gateway.live(600.0)
    assert told(harvest) == [("calibration-missing", "opened")]
    assert flags(harvest.readings)[1:] == [3] * 9
    assert told(Gateway().live(600.0)) == []


CONFIG = """
site = "quarry"
gateway = "east-gate"
[[sensor]]
name = "north"
port = "/dev/null"
dialect = "bm"
mounting = "{mounting}"
limits = {{ dose_ug = 500, laser_hours = 6000 }}
[broker]
host = "127.0.0.1"
[calibration]
required = true
"""


@pytest.mark.parametrize(("mounting", "dose_ug"), [("optics-down", 500.0), ("sideways", 500.0), ("optics-up", 250.0)])
def test_limits_come_from_the_configuration_and_optics_that_look_up_halve_the_dose(
    mounting: str, dose_ug: float
) -> None:
    [setup] = sensor_setups(parse(CONFIG.format(mounting=mounting), "config.toml"))
    assert setup.limits == Limits(dose_ug, 6000.0, calibration_required=True, halved=mounting == "optics-up")


# -- the last two minutes -------------------------------------------------------------------------------------------


def test_a_failure_leaves_a_capture_of_the_two_minutes_before_it_and_names_it() -> None:
    gateway = Gateway()
    gateway.live(600.0)
    gateway.pipeline.line("north", LineState.GONE, at(gateway.now), "unplugged")
    harvest = gateway.silent(60.0)
    [finding] = [f for f in harvest.findings if f.event == "opened"]
    assert (finding.code, finding.category) == ("frames-missing", "failure")
    [capture] = harvest.captures
    assert finding.capture == capture.name
    assert capture.name.startswith("20261201T121")
    assert capture.name.endswith("Z-north-frames-missing.txt.gz")
    said = [parse_line(line) for line in capture.text.splitlines()]
    frames = [r for r in said if isinstance(r, FrameRecord)]
    assert [r.data for r in frames] == [burst(slot) for slot in range(101 - len(frames), 101)]
    assert 10 <= len(frames) <= 20
    assert gateway.silent(300.0).captures == (), "once a finding"


def test_findings_of_other_categories_leave_none() -> None:
    gateway = Gateway(limits=Limits(dose_ug=0.01, calibration_required=True))
    harvest = gateway.live(900.0)
    assert {"dose-due", "calibration-missing"} <= {f.code for f in harvest.findings}
    assert harvest.captures == ()
    assert {f.capture for f in harvest.findings} == {None}


def test_replay_writes_captures_and_they_can_be_replayed(tmp_path: Path) -> None:
    lines = [FrameRecord(NOON + 6.0 * slot, "north", burst(slot)) for slot in range(1, 300)]
    frozen = [FrameRecord(NOON + 6.0 * slot, "north", burst(299)) for slot in range(300, 600)]
    path = tmp_path / "whole.txt"
    path.write_text("".join(format_record(r) + "\n" for r in [*lines, *frozen]))
    plan = Plan(PLACE, 60, [SensorSetup("north", BM, 6.0)])
    summary = replay([path], tmp_path / "out", plan)
    assert summary.findings["output-frozen"] == 1
    [kept] = (tmp_path / "out" / "captures").iterdir()
    text = gzip.decompress(kept.read_bytes()).decode()
    assert text.startswith("# output-frozen of north found at 2026-12-01T12:")
    assert replay([kept], tmp_path / "again", plan).frames["north"] == len(text.splitlines()) - 1
    assert '"capture"' not in (tmp_path / "out" / "findings.ndjson").read_text()


def test_replay_marks_the_readings_around_a_service_line(tmp_path: Path) -> None:
    lines = [FrameRecord(NOON + 6.0 * slot, "north", burst(slot)) for slot in range(1, 600)]
    path = tmp_path / "capture.txt"
    visit = format_record(ServiceRecord(NOON + 1803.0, "north", "cleaned"))
    texts = [format_record(r) for r in lines]
    path.write_text("\n".join([*texts[:300], visit, *texts[300:]]) + "\n")
    summary = replay([path], tmp_path / "out", Plan(PLACE, 60, [SensorSetup("north", BM, 6.0)]))
    assert summary.findings == {"service-visit": 1}
