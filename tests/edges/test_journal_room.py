"""At the journal's own limit: what goes first, what is never dropped, what is counted."""

import json
from collections.abc import Iterator
from pathlib import Path

import pytest

from journal_site import MIB, Site, ram_folder
from motekeep.edges.ports import Row
from motekeep.message.documents import ReadingDocument


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    """Room for some two hours of two sensors, whose readings are padded so that it fills fast."""
    return Site(folder / "a", max_bytes=MIB, pad=PAD)


PAD = "a reason so long that an hour or two of it fill the journal" * 50


def everything(site: Site, sensor: str = "north") -> list[Row]:
    return site.reader.stored(sensor, 1, 100_000, 100_000)


def lengths(rows: list[Row]) -> set[float]:
    return {row.seconds for row in rows}


def test_delivered_history_goes_first_oldest_first_and_what_waits_keeps_its_minutes(site: Site) -> None:
    site.minutes(60)
    site.deliver_all()
    site.minutes(60)
    state = site.journal.state()
    assert site.numbers() == list(range(61, 121))
    assert lengths(site.waiting()) == {60}
    left = [r.seq for r in everything(site)]
    assert left == list(range(left[0], 121))
    assert 1 < left[0] <= 61
    assert set(state.lost) == {"history"}
    assert state.lost["history"] == 240 - sum(len(everything(site, s)) for s in site.sensors)
    assert not state.full


def test_waiting_minutes_become_hours_when_there_is_no_history_and_no_number_is_lost(site: Site) -> None:
    site.minutes(200)
    rows = site.waiting()
    assert site.numbers("north") == site.numbers("south") == list(range(1, 201))
    assert lengths(rows[:2]) == {3600}
    assert lengths(rows[-30:]) == {60}
    assert [r.seq for r in rows] == sorted(r.seq for r in rows)
    for row in rows:
        body = ReadingDocument.model_validate_json(row.body)
        assert (body.seq, body.from_seq or body.seq) == (row.seq, row.from_seq)
        assert ("merged" in body.reasons) == (row.from_seq < row.seq)


def test_every_reading_that_lost_its_own_detail_is_counted_and_the_store_says_full(site: Site) -> None:
    site.minutes(200)
    state = site.journal.state()
    gone = sum(r.seq - r.from_seq + 1 for s in site.sensors for r in site.waiting(s) if r.from_seq < r.seq)
    assert state.lost == {"merged": gone}
    assert state.full
    assert state.degraded is None
    site.power_cut()
    assert site.journal.state().lost == {"merged": gone}


def test_an_hour_holds_the_frames_of_its_minutes_and_starts_with_the_first(site: Site) -> None:
    start = site.clock.now().utc
    site.minutes(200)
    body = json.loads(site.waiting()[0].body)
    assert body["frames"] == {"good": 60 * 60, "bad": 0, "missing": 0}
    assert body["start"] == "2026-12-01T09:00:00Z"
    assert site.journal.state().oldest_waiting == start


def test_hours_become_days_when_minutes_are_used_up(folder: Path) -> None:
    site = Site(folder / "a", sensors=("north",), max_bytes=MIB, step_s=1200, pad=PAD * 3)
    site.minutes(300)
    rows = site.waiting()
    assert site.numbers() == list(range(1, 301))
    assert [r.seconds for r in rows[:2]] == [15 * 3600, 86400]  # it began at nine
    assert rows[-1].seconds == 1200


def test_database_log_and_ballast_never_grow_past_the_limit_together(folder: Path) -> None:
    site = Site(folder / "a", max_bytes=MIB)
    for _ in range(13):
        site.minutes(40)
        assert site.journal.state().bytes < MIB
    assert sum(f.stat().st_size for f in site.folder.iterdir() if not f.name.endswith(("-shm", ".seq"))) <= MIB


def test_once_the_uplink_is_back_the_store_is_full_no_longer(site: Site) -> None:
    site.minutes(200)
    site.deliver_all()
    site.minutes(20)
    assert not site.journal.state().full
    assert site.numbers() == list(range(201, 221))
    assert lengths(site.waiting()) == {60}


def test_minutes_in_flight_while_they_are_merged_do_not_take_the_rest_of_the_hour_with_them(site: Site) -> None:
    site.minutes(60)
    in_flight = [r for r in site.waiting() if 41 <= r.seq <= 60]
    site.minutes(140)
    assert site.waiting()[0].seq >= 60
    site.reader.mark_delivered(in_flight)
    assert set(range(1, 41)) <= set(site.numbers())
    site.power_cut()
    site.deliver()
    assert site.numbers() == []


def test_a_merged_reading_is_delivered_as_one_and_answers_for_each_of_its_numbers(site: Site) -> None:
    site.minutes(200)
    [hour] = site.waiting(limit=1)
    assert [(r.from_seq, r.seq) for r in site.reader.stored("north", 5, 5, 9)] == [(hour.from_seq, hour.seq)]
    site.reader.mark_delivered([hour])
    assert site.numbers()[0] == hour.seq + 1


def test_readings_sent_but_not_taken_by_an_archive_are_merged_and_never_dropped(site: Site) -> None:
    site.minutes(70)
    site.reader.mark_sent(site.waiting())
    site.minutes(130)
    kept = {n for r in everything(site) for n in range(r.from_seq, r.seq + 1)}
    assert kept == set(range(1, 201))
    assert site.numbers() == list(range(71, 201))


def test_marks_are_written_before_what_they_delivered_is_deleted(site: Site) -> None:
    site.minutes(75)
    site.deliver_all()
    site.minute()
    site.power_cut()
    # nothing may wait that has no reading any more
    assert site.journal.state().waiting == len(site.numbers("north")) + len(site.numbers("south"))


def test_readings_too_many_for_any_merging_wait_in_memory_and_are_stored_when_there_is_room(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    site = Site(folder / "a", max_bytes=MIB, pad=PAD)
    monkeypatch.setattr("motekeep.edges.journal_room.LEVELS_S", ())
    site.minutes(120)
    state = site.journal.state()
    assert state.in_memory > 0
    assert state.full
    assert "at its limit" in (state.degraded or "")
    assert site.numbers() == list(range(1, 121))
    site.deliver_all()
    site.minute()
    state = site.journal.state()
    assert (state.in_memory, state.full, state.degraded) == (0, False, None)
    site.power_cut()
    assert site.journal.next_seq("north") == 122


def test_a_reading_that_rotted_stops_no_merging(site: Site) -> None:
    site.minutes(60)
    site.journal._file.connection.execute("UPDATE readings SET body = 'rot' WHERE seq = 30 AND sensor = 'north'")
    site.minutes(140)
    assert set(site.numbers("north")) == set(range(1, 201)) - {30}
