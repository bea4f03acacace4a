"""The pipeline: bytes and instants in, documents out, wall-aligned and exact."""

from itertools import pairwise

import pytest
from hypothesis import given
from hypothesis import strategies as st

from motekeep.health.check import LineState
from motekeep.instant import Instant, from_rfc3339
from motekeep.measure.interval import Climate
from motekeep.message.compose import Place
from motekeep.message.documents import ReadingDocument
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

BM = DIALECTS["bm"]
NOON = from_rfc3339("2026-12-01T12:00:00Z")
BOOTED = 50_000.0  # well after boot


def at(seconds: float, offset: float = 0.0, *, trusted: bool = True) -> Instant:
    return Instant(NOON + seconds + offset, BOOTED + seconds, "boot", trusted)


def data(second: int, counts: tuple[float, ...] = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)) -> bytes:
    wobble = float(second * 7 % 13)
    frame = Frame(BM_28, (5.0, 8.0, 9.0), (counts[0] + wobble, *counts[1:]), b"", (5.0, 8.0, 9.0), revision=151)
    return BM.encode(frame)


def started(seconds: float = 0.0, **setup: object) -> Pipeline:
    pipeline = Pipeline(Place("quarry", "gate"), 60, [SensorSetup("north", BM, **setup)], at(seconds))  # type: ignore[arg-type]
    pipeline.resume({"north": 7}, {}, at(seconds))
    return pipeline


def readings(pipeline: Pipeline) -> list[ReadingDocument]:
    return list(pipeline.harvest().readings)


def test_a_full_minute_holds_sixty_frames_and_their_mean() -> None:
    pipeline = started()
    for second in range(1, 121):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(120))
    first, second = readings(pipeline)
    assert (first.start, second.start) == ("2026-12-01T12:00:00Z", "2026-12-01T12:01:00Z")
    assert (first.seq, second.seq) == (7, 8)
    assert first.seconds == 60
    assert first.frames.model_dump() == {"good": 60, "bad": 0, "missing": 0}
    assert first.pm2_5 is not None
    assert (first.pm2_5.raw, first.pm2_5.value, first.pm2_5.u) == (8.0, 8.0, None)
    assert first.counts_per_dL is not None
    assert first.counts_per_dL["0.3"] == pytest.approx(1200 + sum(s * 7 % 13 for s in range(1, 61)) / 60, abs=0.06)
    assert (first.flag, first.reasons) == (2, ["uncalibrated"])
    assert first.clock == "synced"


def test_a_start_within_a_minute_gives_one_short_interval_up_to_the_border() -> None:
    pipeline = started(22.0)
    for second in range(23, 61):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(60.2))
    [reading] = readings(pipeline)
    assert (reading.start, reading.seconds) == ("2026-12-01T12:00:22Z", 38)


def test_damage_is_bad_and_a_gap_is_missing() -> None:
    pipeline = started()
    for second in range(1, 61):
        frame = data(second)
        if second == 10:
            frame = frame[:12] + bytes([frame[12] ^ 0x55]) + frame[13:]
        if not 30 <= second < 33:
            pipeline.receive("north", frame, at(second - 0.5))
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert reading.frames.model_dump() == {"good": 56, "bad": 1, "missing": 3}


def test_an_interval_without_frames_says_so_and_keeps_its_number() -> None:
    pipeline = started()
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert (reading.flag, reading.reasons) == (9, ["no-frames"])
    assert reading.frames.model_dump() == {"good": 0, "bad": 0, "missing": 59}
    assert reading.pm2_5 is None


def test_less_than_three_quarters_of_the_frames_is_suspect() -> None:
    pipeline = started()
    for second in range(1, 41):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert reading.flag == 3
    assert "incomplete" in reading.reasons


def test_a_step_of_the_clock_ends_the_interval_so_that_none_has_two_offsets() -> None:
    pipeline = started()
    for second in range(1, 31):
        pipeline.receive("north", data(second), at(second - 0.5, trusted=False))
    for second in range(31, 91):
        pipeline.receive("north", data(second), at(second - 0.5, 3600.0))
    pipeline.advance(at(90, 3600.0))
    before, after, *_ = readings(pipeline)
    assert (before.start, before.clock) == ("2026-12-01T12:00:00Z", "synced")
    assert before.seconds == pytest.approx(30.5)
    assert after.start == "2026-12-01T13:00:30.500Z"
    assert after.seconds == pytest.approx(29.5)
    assert before.frames.good + after.frames.good == 60


def test_a_suspended_gateway_leaves_intervals_absent_and_goes_on_aligned() -> None:
    pipeline = started()
    pipeline.receive("north", data(1), at(1))
    pipeline.receive("north", data(2), at(86_400 + 30.0))
    pipeline.advance(at(86_400 + 60.0))
    first, *empty, last = readings(pipeline)
    assert first.start == "2026-12-01T12:00:00Z"
    assert [r.reasons for r in empty] == [["no-frames"]] * 9
    assert (last.start, last.seconds) == ("2026-12-02T12:00:30Z", 30)


def test_a_silence_in_a_capture_is_found_from_within_it() -> None:
    pipeline = started()
    for second in range(1, 301):
        pipeline.receive("north", data(second), at(second))
    pipeline.receive("north", data(301), at(1500))
    [found] = [f for f in pipeline.harvest().findings if f.code == "frames-missing" and f.event == "opened"]
    assert from_rfc3339(found.at) < NOON + 300 + 180


def test_before_the_numbering_is_known_no_reading_is_made_but_health_is_judged() -> None:
    pipeline = Pipeline(Place("quarry", "gate"), 60, [SensorSetup("north", BM)], at(0))
    pipeline.line("north", LineState.GONE, at(0.5), "no such device")
    pipeline.advance(at(200))
    harvest = pipeline.harvest()
    assert not harvest.readings
    assert "frames-missing" in {f.code for f in harvest.findings}


def test_a_lost_port_is_a_finding_that_closes_after_the_frames_are_back() -> None:
    pipeline = started()
    for second in range(1, 121):
        pipeline.receive("north", data(second), at(second))
    pipeline.line("north", LineState.GONE, at(120.5), "unplugged")
    pipeline.advance(at(400))
    opened = pipeline.harvest().findings
    assert [(f.code, f.event) for f in opened if f.code == "frames-missing"] == [("frames-missing", "opened")]
    pipeline.line("north", LineState.OPENED, at(400.5))
    for second in range(401, 900):
        pipeline.receive("north", data(second), at(second))
    events = [(f.code, f.event) for f in pipeline.harvest().findings]
    assert ("frames-missing", "closed") in events


def test_frames_of_warm_up_are_left_out_and_the_reading_says_why() -> None:
    pipeline = started()
    pipeline.receive("north", data(1), at(1))
    pipeline.line("north", LineState.AWAKE, at(2))
    for second in range(3, 61):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert reading.frames.good < 35
    assert "warming-up" in reading.reasons
    assert reading.frames.missing <= 1


def test_asleep_by_duty_nothing_is_missed() -> None:
    pipeline = started()
    pipeline.line("north", LineState.ASLEEP, at(0.1))
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert (reading.flag, reading.reasons) == (9, ["asleep"])
    assert reading.frames.missing == 0


def test_climate_is_used_while_fresh_and_never_when_stale() -> None:
    pipeline = started(climate_max_age_s=100.0)
    pipeline.climate("north", Climate(71.2, 11.4, "iio"), at(1))
    for second in range(1, 181):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(180))
    first, second, third = readings(pipeline)
    assert first.climate is not None
    assert (first.climate.rh, first.climate.t) == (71.2, 11.4)
    assert second.climate is None
    assert third.climate is None


def test_findings_survive_into_the_next_life_with_their_since() -> None:
    pipeline = started()
    pipeline.line("north", LineState.GONE, at(1), "unplugged")
    pipeline.advance(at(200))
    harvest = pipeline.harvest()
    [found] = [f for f in harvest.findings if f.code == "frames-missing"]
    second = Pipeline(Place("quarry", "gate"), 60, [SensorSetup("north", BM)], at(210))
    second.resume({"north": 50}, harvest.keep, at(210))
    second.line("north", LineState.GONE, at(211), "unplugged")
    second.advance(at(500))
    assert not [f for f in second.harvest().findings if f.code == "frames-missing"]
    [still] = [f for f in second.findings()["north"] if f.code == "frames-missing"]
    assert still.since == pytest.approx(from_rfc3339(found.since), abs=0.01)


@given(st.lists(st.integers(0, 31), max_size=3), st.floats(0.05, 0.95))
def test_any_split_of_the_bytes_gives_the_same_readings(cuts: list[int], phase: float) -> None:
    whole, split = started(), started()
    for second in range(1, 61):
        frame = data(second)
        moment = at(second - 1 + phase)
        whole.receive("north", frame, moment)
        edges = [0, *sorted(cuts), len(frame)]
        for low, high in pairwise(edges):
            split.receive("north", frame[low:high], moment)
    whole.advance(at(60))
    split.advance(at(60))
    assert readings(whole) == readings(split)


def test_a_torn_frame_that_only_the_next_one_proves_is_bad_and_not_missing_as_well() -> None:
    pipeline = started()
    for second in range(1, 61):
        frame = data(second)
        pipeline.receive("north", frame[:20] if second == 10 else frame, at(second - 0.5))
    pipeline.advance(at(60))
    [reading] = readings(pipeline)
    assert reading.frames.model_dump() == {"good": 59, "bad": 1, "missing": 0}


def test_an_instant_taken_just_before_a_step_does_not_step_back() -> None:
    pipeline = started()
    for second in range(1, 31):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(30.0, 3600.0))
    pipeline.receive("north", data(30), at(29.99))
    for second in range(31, 61):
        pipeline.receive("north", data(second), at(second - 0.5, 3600.0))
    pipeline.advance(at(60, 3600.0))
    before, after = readings(pipeline)
    assert (before.seconds, after.seconds) == (30, 30)
    assert before.frames.good + after.frames.good == 61


def test_amendments_survive_a_restart_and_change_the_hours_again() -> None:
    pipeline = started()
    for second in range(1, 3601):
        pipeline.receive("north", data(second), at(second - 0.5))
    pipeline.advance(at(3600))
    stored = readings(pipeline)
    second = started(3700)
    kept = {"amendments/north": f'[[{NOON}, {NOON + 1800}, 4, "fan-stopped"]]'}
    second.resume({"north": 67}, kept, at(3700))
    second.remember("north", stored)
    second.advance(at(3720))
    [hour] = second.harvest().hours
    assert hour.pm2_5 is not None
    assert hour.pm2_5.completeness < 0.75  # half of it fails, and is left out
    assert hour.pm2_5.mean is None
