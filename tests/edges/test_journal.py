"""The journal over a real SQLite file: what is committed is there, in order, once, and for ever under its number."""

import sqlite3
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from threading import Event, Thread

import pytest

from journal_site import TOPICS, Site, ram_folder
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.journal_schema import LADDER, Sizes, open_writer
from motekeep.edges.ports import Batch, Notice
from motekeep.errors import StoreError


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    return Site(folder / "a")


def test_a_committed_reading_waits_with_the_text_that_was_committed(site: Site) -> None:
    north, _ = site.minute()
    [row] = site.waiting()
    assert (row.sensor, row.seq, row.from_seq, row.body) == ("north", 1, 1, north.body)
    assert row.boot_id == site.clock.now().boot_id


def test_rows_come_oldest_first_past_the_number_asked_for_and_no_more_than_asked(site: Site) -> None:
    site.minutes(10)
    assert [r.seq for r in site.reader.waiting("north", 3, 4)] == [4, 5, 6, 7]


def test_a_marked_reading_is_not_given_again_even_before_the_mark_is_written(site: Site) -> None:
    site.minutes(5)
    rows = site.waiting()
    site.reader.mark_delivered([rows[1], rows[3]])
    assert site.numbers() == [1, 3, 5]
    assert site.journal.pending_marks() == 2


def test_marks_are_written_with_the_next_commit_and_survive_a_power_cut(site: Site) -> None:
    site.minutes(3)
    site.deliver()
    site.minute()
    assert site.journal.pending_marks() == 0
    site.power_cut()
    assert site.numbers() == [4]


def test_marks_that_were_not_written_are_forgotten_by_a_power_cut_and_the_rows_wait_again(site: Site) -> None:
    site.minutes(3)
    site.deliver()
    site.power_cut()
    assert site.numbers() == [1, 2, 3]


def test_flush_writes_marks_without_a_reading(site: Site) -> None:
    site.minutes(3)
    site.deliver()
    site.journal.flush(site.clock.now())
    assert site.journal.pending_marks() == 0
    site.power_cut()
    assert site.numbers() == []


def test_every_commit_that_returned_survives_a_power_cut(site: Site) -> None:
    site.minutes(7)
    site.power_cut()
    assert site.numbers("north") == site.numbers("south") == list(range(1, 8))


def test_numbers_go_on_after_restart_power_cut_and_delivery_of_everything(site: Site) -> None:
    site.minutes(2)
    site.deliver_all()
    site.restart()
    assert site.journal.next_seq("north") == 3
    site.minute()
    site.power_cut()
    assert site.journal.next_seq("north") == 4
    assert site.journal.next_seq("never-seen") == 1


def test_a_number_out_of_turn_is_refused_and_nothing_of_its_batch_is_stored(site: Site) -> None:
    site.minute()
    again = replace(site.reading("north"), seq=1)
    with pytest.raises(ValueError, match="2 is next"):
        site.journal.commit(Batch([site.reading("south"), again]), site.clock.now())
    assert site.numbers("south") == [1]
    assert site.journal.next_seq("south") == 2


def test_kept_values_are_those_of_the_last_commit_and_outlive_a_power_cut(site: Site) -> None:
    site.minute(keep={"dose": "1", "hours": "7"})
    site.minute(keep={"dose": "2"})
    site.power_cut()
    assert site.journal.kept("dose") == "2"
    assert site.journal.kept("hours") == "7"
    assert site.journal.kept("unknown") is None


def test_notices_wait_in_order_until_they_are_marked(site: Site) -> None:
    site.minute(Notice(TOPICS.finding, "one"), Notice(TOPICS.amend("north"), "two"))
    site.minute(Notice(TOPICS.finding, "three"))
    rows = site.reader.notices(0, 10)
    assert [(r.topic, r.body) for r in rows] == [
        (TOPICS.finding, "one"),
        (TOPICS.amend("north"), "two"),
        (TOPICS.finding, "three"),
    ]
    site.reader.mark_notices(rows[:2])
    assert [r.body for r in site.reader.notices(0, 10)] == ["three"]
    assert site.reader.notices(rows[2].id, 10) == []
    site.minute()
    site.power_cut()
    assert [r.body for r in site.reader.notices(0, 10)] == ["three"]


def test_notices_beyond_the_limit_push_out_the_oldest_and_are_counted(
    site: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("motekeep.edges.journal.MAX_NOTICES", 3)
    for n in range(5):
        site.minute(Notice(TOPICS.finding, str(n)))
    assert [r.body for r in site.reader.notices(0, 10)] == ["2", "3", "4"]
    assert site.journal.state().lost == {"notices": 2}


def test_sent_readings_no_longer_wait_but_are_there_until_an_archive_took_them(site: Site) -> None:
    site.minutes(4)
    site.reader.mark_sent(site.waiting()[:3])
    assert site.numbers() == [4]
    site.reader.mark_taken("north", 2)
    site.minute()
    site.power_cut()
    state = site.journal._ledger.state_of("north")
    assert (str(state.waiting), str(state.sent)) == ("4-5", "3")


def test_a_receipt_takes_what_was_never_marked_sent_and_nothing_beyond_the_last_number(site: Site) -> None:
    site.minutes(3)
    site.reader.mark_taken("north", 10**9)
    site.reader.mark_taken("unknown", 5)
    assert site.numbers() == []
    site.minute()
    assert site.numbers() == [4]


def test_a_reading_set_aside_is_counted_once_and_stays_for_resend(site: Site) -> None:
    site.minutes(3)
    rows = site.waiting()
    site.reader.mark_aside([rows[1]])
    site.reader.mark_aside([rows[1]])
    assert site.numbers() == [1, 3]
    assert site.journal.state().lost == {"set_aside": 1}
    assert [r.seq for r in site.reader.stored("north", 1, 3, 10)] == [1, 2, 3]
    site.minute()
    site.power_cut()
    assert site.journal.state().lost == {"set_aside": 1}


def test_stored_gives_a_range_whatever_its_state(site: Site) -> None:
    site.minutes(6)
    site.deliver()
    assert [r.seq for r in site.reader.stored("north", 2, 5, 3)] == [2, 3, 4]
    assert site.reader.stored("north", 7, 9, 3) == []


def test_each_start_counts_one_life(site: Site) -> None:
    assert site.journal.life == 1
    site.restart()
    site.power_cut()
    assert site.journal.life == 3


def test_the_state_counts_what_waits_and_says_how_old_the_oldest_is(site: Site) -> None:
    assert site.journal.state().oldest_waiting is None
    start = site.clock.now().utc
    site.minutes(5)
    state = site.journal.state()
    assert (state.waiting, state.oldest_waiting) == (10, start)
    assert state.bytes > 0
    assert state.disk_free is not None
    assert (state.degraded, state.full, state.in_memory) == (None, False, 0)
    site.deliver("north", 2)
    site.deliver("south")
    assert (site.journal.state().waiting, site.journal.state().oldest_waiting) == (3, start + 120)


def test_a_reading_whose_text_rotted_is_never_given_and_is_counted(site: Site) -> None:
    site.minutes(3)
    site.journal._file.connection.execute("UPDATE readings SET body = replace(body, '6.2', '9.2') WHERE seq = 2")
    assert site.numbers("north") == [1, 3]
    assert site.journal.state().lost == {"damaged": 1}
    assert [r.seq for r in site.reader.stored("north", 1, 3, 10)] == [1, 3]


def test_delivered_readings_are_kept_their_days_and_deleted_after(folder: Path) -> None:
    site = Site(folder / "a", keep_days=2)
    site.minutes(250)
    site.deliver_all()
    site.minutes(250)
    site.clock.advance(2 * 86400 - 400 * 60)
    site.journal.prune(site.clock.now())
    left = [r.seq for r in site.reader.stored("north", 1, 1000, 1000)]
    assert left == list(range(101, 501))
    assert site.journal.state().lost == {}
    assert site.numbers() == list(range(251, 501))


def test_waiting_and_sent_readings_are_never_pruned_however_old(folder: Path) -> None:
    site = Site(folder / "a", keep_days=1)
    site.minutes(5)
    site.reader.mark_sent(site.waiting()[:2])
    site.reader.mark_delivered(site.waiting()[:1])
    site.clock.advance(30 * 86400)
    site.journal.prune(site.clock.now())
    assert [r.seq for r in site.reader.stored("north", 1, 9, 9)] == [1, 2, 4, 5]


def test_nothing_is_pruned_while_the_clock_is_not_trusted(folder: Path) -> None:
    site = Site(folder / "a", keep_days=1)
    site.minutes(5)
    site.deliver_all()
    site.clock.advance(30 * 86400)
    site.clock.trust(False)
    site.journal.prune(site.clock.now())
    assert len(site.reader.stored("north", 1, 9, 9)) == 5


def test_a_second_process_is_refused_the_journal(site: Site) -> None:
    with pytest.raises(StoreError, match="another process"):
        Journal(JournalSettings(site.path, TOPICS), site.clock)


def test_a_missing_folder_is_told_with_what_to_do(folder: Path, site: Site) -> None:
    with pytest.raises(StoreError, match="make that folder") as raised:
        Journal(JournalSettings(folder / "nowhere" / "journal.db", TOPICS), site.clock)
    assert raised.value.retry


def test_a_database_of_another_program_is_refused_and_left_as_it_was(folder: Path, site: Site) -> None:
    other = folder / "other.db"
    connection = sqlite3.connect(other)
    connection.execute("CREATE TABLE theirs (x)")
    connection.close()
    before = other.read_bytes()
    with pytest.raises(StoreError, match="another program"):
        Journal(JournalSettings(other, TOPICS), site.clock)
    connection = sqlite3.connect(other)
    assert [r[0] for r in connection.execute("SELECT name FROM sqlite_master")] == ["theirs"]
    assert len(before) == other.stat().st_size


def test_a_journal_of_a_newer_version_is_refused(site: Site) -> None:
    site.journal.close()
    connection = sqlite3.connect(site.path)
    connection.execute("PRAGMA user_version = 99")
    connection.close()
    with pytest.raises(StoreError, match="a newer version wrote it"):
        site.start()


def test_the_file_is_opened_with_the_settings_that_durability_rests_on(site: Site) -> None:
    connection = site.journal._file.connection
    values = {
        n: connection.execute(f"PRAGMA {n}").fetchone()[0] for n in ("journal_mode", "synchronous", "auto_vacuum")
    }
    assert values == {"journal_mode": "wal", "synchronous": 2, "auto_vacuum": 0}


def test_the_readers_connection_cannot_write_nor_checkpoint(site: Site) -> None:
    site.minutes(2)
    site.waiting()
    connection = site.reader._connection
    with pytest.raises(sqlite3.OperationalError, match="readonly"):
        connection.execute("DELETE FROM readings")
    with pytest.raises(sqlite3.OperationalError):
        connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    assert site.path.with_name("journal.db-wal").stat().st_size > 0


def test_two_readers_see_the_same_marks(site: Site) -> None:
    site.minutes(2)
    other = site.journal.reader()
    site.reader.mark_delivered(site.waiting())
    assert other.waiting("north", 0, 10) == []


@pytest.mark.parametrize("max_bytes", [1 << 20, 4 << 20, 64 << 20, 512 << 20])
def test_database_log_and_ballast_together_stay_within_the_limit(max_bytes: int) -> None:
    sizes = Sizes(max_bytes)
    log_bytes = 3 * sizes.checkpoint_pages * (1024 + 24)
    assert sizes.max_pages * 1024 + log_bytes + sizes.ballast_bytes <= max_bytes
    assert sizes.max_pages * 1024 > max_bytes // 2


def add_a_step(monkeypatch: pytest.MonkeyPatch, *statements: str) -> None:
    monkeypatch.setattr("motekeep.edges.journal_schema.LADDER", (*LADDER, statements))
    monkeypatch.setattr("motekeep.edges.journal_schema.VERSION", len(LADDER) + 1)


def test_a_journal_of_an_older_version_is_brought_up_with_all_it_holds(
    site: Site, monkeypatch: pytest.MonkeyPatch
) -> None:
    site.minutes(3)
    site.die()
    add_a_step(monkeypatch, "CREATE TABLE later (x TEXT)")
    site.start()
    assert site.numbers() == [1, 2, 3]
    assert site.journal._file.connection.execute("PRAGMA user_version").fetchone()[0] == len(LADDER) + 1
    site.restart()
    assert site.journal.state().degraded is None


def test_a_ladder_step_that_fails_leaves_the_version_before(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    path = folder / "journal.db"
    open_writer(path, Sizes(1 << 20)).close()
    add_a_step(monkeypatch, "ALTER TABLE kept ADD COLUMN extra TEXT", "nonsense")
    with pytest.raises(sqlite3.OperationalError):
        open_writer(path, Sizes(1 << 20))
    connection = sqlite3.connect(path)
    assert connection.execute("PRAGMA user_version").fetchone()[0] == len(LADDER)
    assert [c[1] for c in connection.execute("PRAGMA table_info(kept)")] == ["name", "value"]


def test_a_publisher_thread_and_the_writer_share_the_journal(site: Site) -> None:
    heard: list[int] = []
    failed: list[BaseException] = []
    done = Event()

    def publish() -> None:
        reader = site.journal.reader()
        try:
            while not (done.is_set() and not reader.waiting("north", 0, 1)):
                rows = reader.waiting("north", 0, 7)
                heard.extend(r.seq for r in rows)
                reader.mark_delivered(rows)
        except BaseException as error:  # noqa: BLE001 (told in the test's own thread)
            failed.append(error)
        finally:
            reader.close()

    publisher = Thread(target=publish)
    publisher.start()
    for _ in range(300):
        site.minute()
        site.journal.state()
    done.set()
    publisher.join(30)
    assert failed == []
    assert heard == list(range(1, 301))
    site.journal.flush(site.clock.now())
    site.power_cut()
    assert site.numbers("north") == []
    assert len(site.numbers("south")) == 300
