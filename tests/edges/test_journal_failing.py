"""A store that takes nothing: measuring and live publishing go on from memory, and what can be stored later is.

Errors are laid on at the transaction. A file system that is really full or read-only is in `test_journal_disk.py`.
"""

import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest

from journal_site import TOPICS, Site, ram_folder
from motekeep.edges import journal as journal_module
from motekeep.edges.journal_schema import transaction
from motekeep.edges.ports import Batch, Notice
from motekeep.errors import StoreError

FULL, IO_ERROR, BUSY = 13, 10, 5


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    return Site(folder / "a")


def store_error(code: int) -> sqlite3.OperationalError:
    error = sqlite3.OperationalError(f"laid on, code {code}")
    error.sqlite_errorcode = code
    return error


class Fault:
    """While `code` is set every transaction of the writer fails with it, `after_commit` or before."""

    def __init__(self, monkeypatch: pytest.MonkeyPatch) -> None:
        self.code: int | None = None
        self.times = 1_000_000
        self.after_commit = False
        monkeypatch.setattr(journal_module, "transaction", self.transaction)

    @contextmanager
    def transaction(self, connection: sqlite3.Connection) -> Iterator[None]:
        failing = self.code is not None and self.times > 0
        self.times -= failing
        if failing and not self.after_commit:
            raise store_error(self.code or 0)
        with transaction(connection):
            yield
        if failing:
            raise store_error(self.code or 0)


@pytest.fixture
def fault(monkeypatch: pytest.MonkeyPatch) -> Fault:
    return Fault(monkeypatch)


@pytest.mark.parametrize("code", [FULL, IO_ERROR, BUSY])
def test_readings_that_cannot_be_stored_are_offered_at_once_and_stored_in_order_later(
    site: Site, fault: Fault, code: int
) -> None:
    site.minutes(2)
    fault.code = code
    site.minutes(3)
    assert site.numbers() == [1, 2, 3, 4, 5]
    state = site.journal.state()
    assert (state.in_memory, state.waiting) == (6, 10)
    assert "held in memory" in (state.degraded or "")
    assert state.full == (code == FULL)
    fault.code = None
    site.minute()
    state = site.journal.state()
    assert (state.in_memory, state.degraded, state.full, state.lost) == (0, None, False, {})
    site.power_cut()
    assert site.numbers() == [1, 2, 3, 4, 5, 6]
    assert site.journal.next_seq("north") == 7


def test_a_reading_delivered_from_memory_is_stored_as_delivered(site: Site, fault: Fault) -> None:
    fault.code = IO_ERROR
    site.minutes(3)
    site.reader.mark_delivered(site.waiting()[:2])
    assert site.numbers() == [3]
    assert [r.seq for r in site.reader.stored("north", 1, 9, 9)] == [1, 2, 3]
    fault.code = None
    site.minute()
    site.power_cut()
    assert site.numbers() == [3, 4]
    assert [r.seq for r in site.reader.stored("north", 1, 9, 9)] == [1, 2, 3, 4]


def test_kept_values_and_notices_wait_in_memory_too(site: Site, fault: Fault) -> None:
    site.minute(Notice(TOPICS.finding, "stored"), keep={"dose": "1"})
    fault.code = IO_ERROR
    site.minute(Notice(TOPICS.finding, "held"), Notice(TOPICS.finding, "held and marked"), keep={"dose": "2"})
    assert site.journal.kept("dose") == "2"
    rows = site.reader.notices(0, 9)
    assert [r.body for r in rows] == ["stored", "held", "held and marked"]
    site.reader.mark_notices([rows[2]])
    fault.code = None
    site.minute()
    site.power_cut()
    assert site.journal.kept("dose") == "2"
    assert [r.body for r in site.reader.notices(0, 9)] == ["stored", "held"]


def test_memory_is_bounded_the_oldest_go_and_are_counted(
    site: Site, fault: Fault, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("motekeep.edges.journal_ledger.MAX_HELD_READINGS", 6)
    site.minute()
    fault.code = FULL
    site.minutes(5)
    assert site.numbers() == [1, 4, 5, 6]
    assert site.journal.state().lost == {"unstored": 4}
    fault.code = None
    site.minute()
    site.power_cut()
    assert site.numbers() == [1, 4, 5, 6, 7]
    assert site.journal.state().lost == {"unstored": 4}
    assert site.journal.state().waiting == 10


def test_numbers_given_out_from_memory_are_not_given_again_after_a_power_cut(site: Site, fault: Fault) -> None:
    site.minutes(2)
    fault.code = FULL
    site.minutes(3)
    fault.code = None
    site.power_cut()
    assert site.numbers() == [1, 2]
    assert site.journal.next_seq("north") == 6
    assert site.journal.state().lost == {"unstored": 6}
    site.minute()
    site.restart()
    assert site.numbers() == [1, 2, 6]
    assert site.journal.state().lost == {"unstored": 6}


def test_a_commit_that_failed_in_doubt_but_was_durable_is_not_stored_twice(site: Site, fault: Fault) -> None:
    site.minute()
    fault.code, fault.after_commit, fault.times = IO_ERROR, True, 1
    site.minute(Notice(TOPICS.finding, "one"))
    site.minute()
    site.power_cut()
    assert site.numbers() == [1, 2, 3]
    assert [r.seq for r in site.reader.stored("north", 1, 9, 9)] == [1, 2, 3]
    assert [r.body for r in site.reader.notices(0, 9)] == ["one"]


def test_the_ballast_is_given_back_on_a_full_disk_and_laid_down_again_when_there_is_room(
    site: Site, fault: Fault
) -> None:
    ballast = site.path.with_name("journal.db.ballast")
    assert ballast.stat().st_size == 1 << 20
    assert ballast.stat().st_blocks * 512 >= 1 << 20
    fault.code, fault.times = FULL, 1
    site.minute()
    assert ballast.stat().st_size == (1 << 20) * 7 // 8
    assert site.journal.state().in_memory == 0
    site.journal.prune(site.clock.now())
    assert ballast.stat().st_blocks * 512 >= 1 << 20


def test_a_store_that_fails_from_the_start_is_read_for_its_numbers(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    site.minutes(3)
    site.die()
    with monkeypatch.context() as patch:
        patch.setattr("motekeep.edges.journal_file.open_writer", _raise(IO_ERROR))
        site.start()
        assert site.journal.next_seq("north") == 4
        site.minutes(2)
        assert site.numbers() == [1, 2, 3, 4, 5]
        assert site.journal.state().in_memory == 4
    site.minute()
    assert site.journal.state().in_memory == 0
    site.power_cut()
    assert site.numbers() == [1, 2, 3, 4, 5, 6]
    assert site.journal.life == 3


def test_the_side_file_alone_is_enough_to_start_in_memory(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    site.minutes(3)
    site.restart()
    site.die()
    site.path.unlink()
    with monkeypatch.context() as patch:
        patch.setattr("motekeep.edges.journal_file.open_writer", _raise(FULL))
        site.start()
        first = site.journal.next_seq("north")
        assert first > 3
        site.minutes(2)
        assert site.numbers() == [first, first + 1]
    site.minute()
    site.power_cut()
    assert site.numbers() == [first, first + 1, first + 2]


def test_without_any_knowledge_of_numbers_nothing_is_started(folder: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("motekeep.edges.journal_file.open_writer", _raise(IO_ERROR))
    with pytest.raises(StoreError, match="laid on") as raised:
        Site(folder / "fresh")
    assert raised.value.retry
    monkeypatch.undo()
    assert Site(folder / "fresh").journal.next_seq("north") == 1


def test_an_error_that_is_no_fault_of_the_store_is_not_swallowed(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(site.journal, "_values", lambda reading: (1,))
    with pytest.raises(sqlite3.ProgrammingError):
        site.minute()


def test_a_reader_without_a_file_still_gives_what_memory_has(site: Site, fault: Fault) -> None:
    site.minutes(2)
    fault.code = IO_ERROR
    site.minutes(2)
    site.reader.close()
    site.path.rename(site.path.with_name("elsewhere"))
    assert site.numbers() == [3, 4]
    assert "cannot be read" in (site.journal.state().degraded or "") or site.journal.state().in_memory
    site.path.with_name("elsewhere").rename(site.path)
    fault.code = None
    site.minute()
    assert site.numbers() == [1, 2, 3, 4, 5]
    assert site.journal.state().degraded is None


def test_what_a_close_cannot_store_does_not_make_it_fail(site: Site, fault: Fault) -> None:
    site.minutes(2)
    fault.code = FULL
    site.minute()
    site.reader.close()
    site.journal.close()
    fault.code = None
    site.start()
    assert site.journal.next_seq("north") == 4


def test_a_flush_stores_what_was_held_back(site: Site, fault: Fault) -> None:
    fault.code = IO_ERROR
    site.minute()
    fault.code = None
    site.journal.flush(site.clock.now())
    site.power_cut()
    assert site.numbers() == [1]


def test_nothing_is_written_when_there_is_nothing_to_write(site: Site, fault: Fault) -> None:
    site.journal.commit(Batch(), site.clock.now())
    fault.code = IO_ERROR
    site.journal.commit(Batch(), site.clock.now())
    site.journal.flush(site.clock.now())
    assert site.journal.state().degraded is None


def _raise(code: int) -> object:
    def fail(*_: object, **__: object) -> None:
        raise store_error(code)

    return fail
