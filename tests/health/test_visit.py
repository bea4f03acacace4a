"""service-visit and unit-swapped: what people do at the case, and what they do without telling."""

import json

import pytest

from health.small_air import instant
from motekeep.health.visit import ServiceVisit, UnitSwapped
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind
from motekeep.wire.bm import BM_28
from motekeep.wire.frame import Frame, Observation

START = 100_000.0
UTC = 1.8e9  # the offset of `instant`


def at(boot_s: float) -> Instant:
    return instant(boot_s)


def spans(check: ServiceVisit, from_s: float, to_s: float) -> list[tuple[float, float | None]]:
    """(since, until) of each stretch in which it held, judged every five seconds."""
    found: list[tuple[float, float | None]] = []
    held = False
    for second in range(int(from_s), int(to_s), 5):
        suspicion = check.judge(at(float(second)))
        if suspicion is not None and not held:
            found.append((suspicion.since, suspicion.until))
        held = suspicion is not None
    return found


def test_a_visit_holds_from_ten_minutes_before_to_twenty_minutes_after_its_record() -> None:
    check = ServiceVisit()
    check.service(ServiceKind.CLEANED, START + UTC, at(START))
    assert check.judge(at(START)).since == START - 600.0  # type: ignore[union-attr]
    assert check.judge(at(START + 1199.0)) is not None
    assert check.judge(at(START + 1200.0)) is None
    assert spans(check, START + 1200.0, START + 9000.0) == []


@pytest.mark.parametrize("kind", [k for k in ServiceKind if k is not ServiceKind.NOTE])
def test_every_kind_is_a_visit(kind: ServiceKind) -> None:
    check = ServiceVisit()
    check.service(kind, START + UTC, at(START))
    suspicion = check.judge(at(START + 5.0))
    assert suspicion is not None
    assert kind.value in suspicion.evidence
    assert "2027-01-16T" in suspicion.evidence


def test_a_note_is_none() -> None:
    check = ServiceVisit()
    check.service(ServiceKind.NOTE, START + UTC, at(START))
    assert check.judge(at(START + 5.0)) is None


def test_a_record_of_days_ago_is_a_finding_of_its_own_time_and_does_not_last() -> None:
    check = ServiceVisit()
    check.service(ServiceKind.CLEANED, START - 86400.0 + UTC, at(START))
    assert spans(check, START, START + 600.0) == [(START - 86400.0 - 600.0, START - 86400.0 + 1200.0)]


def test_two_past_visits_entered_at_once_are_two_findings() -> None:
    check = ServiceVisit()
    for days in (3, 1):
        check.service(ServiceKind.CLEANED, START - days * 86400.0 + UTC, at(START))
    assert [since for since, _ in spans(check, START, START + 600.0)] == [
        START - 3 * 86400.0 - 600.0,
        START - 86400.0 - 600.0,
    ]


def test_two_records_of_one_visit_are_one_finding_until_twenty_minutes_after_the_last() -> None:
    check = ServiceVisit()
    check.service(ServiceKind.CLEANED, START + UTC, at(START))
    check.service(ServiceKind.FAN_REPLACED, START + 900.0 + UTC, at(START + 900.0))
    check.judge(at(START + 900.0))
    assert check.judge(at(START + 2090.0)) is not None


def test_a_visit_that_is_announced_begins_ten_minutes_before_it() -> None:
    check = ServiceVisit()
    check.service(ServiceKind.MOVED, START + 1800.0 + UTC, at(START))
    assert check.judge(at(START + 1190.0)) is None
    assert check.judge(at(START + 1205.0)) is not None


def test_a_visit_under_way_goes_on_after_a_restart_and_is_not_told_again_when_over() -> None:
    first = ServiceVisit()
    first.service(ServiceKind.CLEANED, START + UTC, at(START))
    first.judge(at(START + 300.0))
    memory = json.loads(json.dumps(first.memory()))
    second = ServiceVisit()
    second.recall(memory, at(START + 600.0))
    assert second.judge(at(START + 605.0)) is not None
    assert spans(second, START + 605.0, START + 3000.0) == [(START - 600.0, None)]
    assert second.memory() is None


@pytest.mark.parametrize(
    "memory", [{}, {"done": "x"}, {"done": ["x", None]}, {"done": [float("nan")]}, {"done": [1e300, -5.0]}]
)
def test_a_memory_of_any_shape_is_taken(memory: dict[str, object]) -> None:
    check = ServiceVisit()
    check.recall(memory, at(START))  # type: ignore[arg-type]
    assert check.judge(at(START)) is None


# -- unit-swapped ---------------------------------------------------------------------------------------------------

OLD, NEW = 0x97, 0x9C


def hear(check: UnitSwapped, revisions: list[int | None], start_s: float = START, period_s: float = 6.0) -> float:
    """Frames with these revisions; the boot second of the last one."""
    for i, revision in enumerate(revisions, 1):
        check.observe(Observation(Frame(BM_28, (), (), b"", revision=revision), at(start_s + i * period_s)))
    return start_s + len(revisions) * period_s


def test_another_revision_is_found_within_three_minutes_at_a_frame_each_six_seconds() -> None:
    check = UnitSwapped()
    swapped = hear(check, [OLD] * 20)
    assert check.judge(at(swapped)) is None
    found = hear(check, [NEW] * 5, swapped)
    suspicion = check.judge(at(found))
    assert suspicion is not None
    assert found - swapped <= 180.0 - 30.0  # and the warm-up of a new unit comes before
    assert suspicion.since == swapped + 6.0
    assert "0x97 before, 0x9c now" in suspicion.evidence


def test_altered_bytes_open_nothing_however_many_as_long_as_they_are_not_five_in_a_row() -> None:
    check = UnitSwapped()
    end = hear(check, [OLD] * 10 + [NEW, OLD, NEW, NEW, NEW, NEW, OLD, 0x01, 0x02, 0x03, 0x04, 0x05, OLD] * 20)
    assert check.judge(at(end)) is None
    end = hear(check, [OLD] * 5, end)
    assert check.judge(at(end)) is None


def test_a_dialect_without_a_revision_is_not_judged() -> None:
    check = UnitSwapped()
    end = hear(check, [None] * 50)
    assert check.judge(at(end)) is None
    assert check.memory() is None


def test_it_closes_when_the_record_is_entered_and_the_new_unit_is_the_known_one_from_then_on() -> None:
    check = UnitSwapped()
    end = hear(check, [OLD] * 10 + [NEW] * 10)
    assert check.judge(at(end)) is not None
    check.service(ServiceKind.UNIT_REPLACED, end - 300.0 + UTC, at(end))
    assert check.judge(at(end + 5.0)) is None
    assert check.memory() is not None
    end = hear(check, [NEW] * 10, end)
    assert check.judge(at(end)) is None
    # and another one, a month later, is found again
    later = hear(check, [NEW] * 5, end + 30 * 86400.0)
    assert check.judge(at(hear(check, [OLD] * 5, later))) is not None


def test_a_record_from_up_to_a_day_before_speaks_for_a_swap_and_an_older_one_does_not() -> None:
    for hours, found in ((2.0, False), (23.0, False), (30.0, True)):
        check = UnitSwapped()
        end = hear(check, [OLD] * 10)
        check.service(ServiceKind.UNIT_REPLACED, end + UTC, at(end))
        end = hear(check, [NEW] * 10, end + hours * 3600.0)
        assert (check.judge(at(end)) is not None) is found, hours


@pytest.mark.parametrize("kind", [k for k in ServiceKind if k is not ServiceKind.UNIT_REPLACED])
def test_no_other_record_speaks_for_it(kind: ServiceKind) -> None:
    check = UnitSwapped()
    end = hear(check, [OLD] * 10 + [NEW] * 10)
    check.service(kind, end + UTC, at(end))
    assert check.judge(at(end + 5.0)) is not None


def test_it_closes_when_the_old_unit_is_back() -> None:
    check = UnitSwapped()
    end = hear(check, [OLD] * 10 + [NEW] * 10 + [OLD] * 5)
    assert check.judge(at(end)) is None


def test_a_swap_while_the_daemon_was_off_is_found_after_its_restart() -> None:
    first = UnitSwapped()
    hear(first, [OLD] * 10)
    second = UnitSwapped()
    second.recall(json.loads(json.dumps(first.memory())), at(START + 86400.0))
    end = hear(second, [NEW] * 5, START + 86400.0)
    assert second.judge(at(end)) is not None
    assert second.memory() == first.memory()  # known stays the old one until somebody speaks for the new one


def test_a_restart_before_five_frames_were_heard_forgets_nothing() -> None:
    first = UnitSwapped()
    hear(first, [OLD] * 10)
    first.service(ServiceKind.UNIT_REPLACED, START + 60.0 + UTC, at(START + 60.0))
    second = UnitSwapped()
    second.recall(json.loads(json.dumps(first.memory())), at(START + 100.0))
    end = hear(second, [NEW] * 10, START + 3600.0)
    assert second.judge(at(end)) is None, "the record before the restart speaks for it"


@pytest.mark.parametrize(
    "memory", [{}, {"revision": -1.0}, {"revision": "x"}, {"revision": float("nan"), "replaced": []}]
)
def test_a_revision_that_cannot_be_is_not_remembered(memory: dict[str, object]) -> None:
    check = UnitSwapped()
    check.recall(memory, at(START))  # type: ignore[arg-type]
    assert check.memory() is None
