"""Readings made before the clock was trusted: held back, stamped afterwards, amended where they had gone out."""

import json
from collections.abc import Iterator
from datetime import UTC, datetime
from pathlib import Path

import pytest

from clocks import FakeClock
from journal_site import TOPICS, Site, ram_folder
from motekeep.edges.ports import Batch, Row
from motekeep.instant import from_rfc3339

WOKE = datetime(2026, 4, 27, 19, 49, tzinfo=UTC).timestamp()  # a plausible past: the build date of a system's clock
TRUE = datetime(2027, 1, 10, 12, 0, tzinfo=UTC).timestamp()


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    return Site(folder / "a", clock=FakeClock(WOKE, boot_s=30.0, trusted=False))


def clocks(rows: list[Row]) -> list[str]:
    return [row.clock for row in rows]


def starts(rows: list[Row]) -> list[float]:
    return [from_rfc3339(json.loads(row.body)["start"]) for row in rows]


def everything(site: Site) -> list[Row]:
    return site.reader.stored("north", 1, 10_000, 10_000)


def test_unsynced_readings_wait_for_the_clock_and_then_go_out_so_marked(site: Site) -> None:
    site.minutes(3)
    assert site.waiting() == []
    site.clock.advance(900 - site.clock.now().boot_s - 1)
    assert site.waiting() == []
    site.clock.advance(1)
    assert [r.seq for r in site.waiting()] == [1, 2, 3]
    assert clocks(site.waiting()) == ["unsynced"] * 3


def test_a_gateway_that_never_finds_a_clock_is_late_once_and_not_with_every_reading(site: Site) -> None:
    site.clock.advance(1000)
    site.minute()
    assert [r.seq for r in site.waiting()] == [1]


def test_readings_behind_one_that_is_held_back_do_not_overtake_it(site: Site) -> None:
    site.minute()
    site.minute(clock="synced")
    assert site.waiting() == []


def test_a_clock_that_comes_in_time_corrects_what_waited_and_nobody_is_told(site: Site) -> None:
    first = site.clock.now()
    site.minutes(5)
    site.clock.sync(TRUE)
    assert site.journal.restamp(site.clock.now()) == []
    rows = site.waiting()
    assert clocks(rows) == ["corrected"] * 5
    assert starts(rows) == [TRUE - 300 + 60 * i for i in range(5)]
    assert [json.loads(r.body)["clock"] for r in rows] == clocks(rows)
    assert [r.boot_s for r in rows] == [first.boot_s + 60 * i for i in range(5)]
    assert site.reader.notices(0, 9) == []


def test_the_next_commit_restamps_by_itself(site: Site) -> None:
    site.minutes(3)
    site.clock.sync(TRUE)
    site.minute()
    assert clocks(site.waiting()) == ["corrected", "corrected", "corrected", "synced"]


def test_readings_that_had_gone_out_unsynced_are_amended_in_the_same_transaction(site: Site) -> None:
    site.minutes(20)
    out = site.waiting(limit=3)
    site.reader.mark_delivered(out)
    shift = TRUE - site.clock.now().utc
    site.clock.sync(TRUE)
    told = site.journal.restamp(site.clock.now())
    site.power_cut()
    [notice] = site.reader.notices(0, 9)
    assert [(n.topic, n.body) for n in told] == [(notice.topic, notice.body)]
    assert notice.topic == TOPICS.amend("north")
    assert json.loads(notice.body) == {
        "schema": "motekeep/amend/1",
        "sensor": "north",
        "reasons": [],
        "from_seq": 1,
        "to_seq": 3,
        "clock": "corrected",
        "shift_s": shift,
    }


def test_a_reading_in_flight_when_the_clock_comes_is_amended_too(site: Site) -> None:
    site.minutes(20)
    shown = site.waiting()
    site.clock.sync(TRUE)
    [notice] = site.journal.restamp(site.clock.now())
    assert (json.loads(notice.body)["from_seq"], json.loads(notice.body)["to_seq"]) == (1, shown[-1].seq)


def test_a_clock_step_among_unsynced_readings_gives_an_amendment_a_stretch(site: Site) -> None:
    site.minutes(2)
    site.clock.step(5000)
    site.minutes(2)
    site.clock.advance(2000)
    site.deliver()
    site.clock.sync(TRUE)
    bodies = [json.loads(n.body) for n in site.journal.restamp(site.clock.now())]
    assert [(b["from_seq"], b["to_seq"]) for b in bodies] == [(1, 2), (3, 4)]
    assert bodies[0]["shift_s"] - bodies[1]["shift_s"] == pytest.approx(5000)


def test_an_earlier_boot_that_never_synced_is_bounded_between_what_is_known(site: Site) -> None:
    site.clock.sync(TRUE)
    site.minutes(2)
    known_until = site.clock.now().utc
    site.clock.reboot(off_s=500, wakes_at=WOKE)
    site.clock.advance(20)
    site.restart()
    true_start = known_until + 500
    site.minutes(3)
    site.clock.reboot(off_s=700, wakes_at=WOKE)
    site.restart()
    site.clock.advance(40)
    began = true_start + 20 + 180 + 700
    site.clock.sync(began + 40)
    site.minute()
    rows = everything(site)
    assert clocks(rows) == ["synced"] * 2 + ["bounded"] * 3 + ["synced"]
    for index, row in enumerate(rows[2:5]):
        body = json.loads(row.body)
        earliest, latest = map(from_rfc3339, body["start_between"])
        truth = true_start + 20 + 60 * index
        assert earliest <= truth <= latest
        assert latest - earliest == pytest.approx(500 + 700)
        assert from_rfc3339(body["start"]) == pytest.approx((earliest + latest) / 2)


def test_an_earlier_boot_whose_clock_was_known_is_corrected_exactly(site: Site) -> None:
    site.minutes(3)
    site.clock.sync(TRUE)
    site.journal._boots.trust(site.clock.now())
    site.journal.flush(site.clock.now())  # the offset is written, then the power goes before anything is stamped
    site.clock.reboot(off_s=100, wakes_at=WOKE)
    site.power_cut()
    site.clock.advance(30)
    site.clock.sync(TRUE + 130)
    site.minute()
    rows = everything(site)
    assert clocks(rows) == ["corrected"] * 3 + ["synced"]
    assert starts(rows)[:3] == [TRUE - 180, TRUE - 120, TRUE - 60]


def test_a_first_boot_that_never_synced_is_not_dated_before_the_program(site: Site) -> None:
    site.minutes(2)
    site.clock.reboot(wakes_at=WOKE)
    site.restart()
    site.clock.sync(TRUE)
    site.minute()
    body = json.loads(everything(site)[0].body)
    assert body["clock"] == "bounded"
    assert body["start_between"][0] == "2026-12-01T00:00:30Z"


def test_an_earlier_boots_readings_wait_their_rest_through_this_boot(site: Site) -> None:
    site.minutes(5)
    waited = site.clock.now().boot_s  # when the power goes
    site.clock.reboot(wakes_at=WOKE)
    site.restart()
    site.clock.advance(900 - waited - site.clock.now().boot_s - 1)
    assert site.waiting() == []
    site.clock.advance(1)
    assert [r.seq for r in site.waiting()] == [1, 2, 3, 4, 5]


def test_a_boot_loop_does_not_hold_readings_back_for_ever(site: Site) -> None:
    for _ in range(6):
        site.minutes(3)
        site.clock.reboot(wakes_at=WOKE)
        site.restart()
    assert [r.seq for r in site.waiting()][:3] == [1, 2, 3]


def test_readings_of_an_earlier_process_that_may_have_gone_out_are_amended(site: Site) -> None:
    site.minutes(20)
    site.waiting()  # shown, perhaps sent, and no mark of it survives
    site.power_cut()
    site.clock.sync(TRUE)
    [north, south] = site.journal.restamp(site.clock.now())
    assert json.loads(north.body)["from_seq"] == json.loads(south.body)["from_seq"] == 1


def test_a_long_unsynced_boot_is_stamped_over_several_commits(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("motekeep.edges.journal_restamp.ROWS_A_TRANSACTION", 10)
    monkeypatch.setattr("motekeep.edges.journal_restamp.ROWS_A_CALL", 20)
    site.minutes(30)
    site.clock.sync(TRUE)
    stamped = []
    for _ in range(4):
        site.minute()
        stamped.append(clocks(everything(site)).count("corrected"))
    assert stamped == sorted(stamped)
    assert stamped[-1] == 30
    assert stamped[0] < 30


def test_restamped_readings_keep_their_distance(site: Site) -> None:
    site.minutes(3)
    site.clock.sync(TRUE)
    site.minute()
    rows = everything(site)
    assert [b - a for a, b in zip(starts(rows), starts(rows)[1:], strict=False)] == [60, 60, 60]


def test_nothing_is_stamped_by_a_clock_that_is_not_trusted(site: Site) -> None:
    site.minutes(2)
    assert site.journal.restamp(site.clock.now()) == []
    assert clocks(everything(site)) == ["unsynced"] * 2


def test_a_synced_boot_has_nothing_to_stamp(folder: Path) -> None:
    site = Site(folder / "a")
    site.minutes(2)
    assert site.journal.restamp(site.clock.now()) == []
    assert clocks(everything(site)) == ["synced"] * 2


def test_readings_that_only_memory_has_are_stamped_as_well(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    site.minutes(2)
    fail = monkeypatch.context()
    with fail as patch:
        patch.setattr(site.journal, "_save", lambda held, at: site.journal._hold(held))
        site.minutes(2)
        site.clock.advance(900)
        site.deliver()
        site.clock.sync(TRUE)
        told = [json.loads(n.body) for n in site.journal.restamp(site.clock.now())]
        assert ("north", 3, 4) in [(b["sensor"], b["from_seq"], b["to_seq"]) for b in told]
    site.journal.commit(Batch(), site.clock.now())
    rows = everything(site)
    assert clocks(rows) == ["corrected"] * 4
    assert [b - a for a, b in zip(starts(rows), starts(rows)[1:], strict=False)] == [60, 60, 60]
