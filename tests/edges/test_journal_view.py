"""What the commands see of the journal, beside a running daemon and without one."""

import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from clocks import MORNING
from journal_site import Site, ram_folder
from motekeep.edges.journal_view import JournalView
from motekeep.errors import StoreError


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    site = Site(folder / "a")
    site.minutes(5)
    return site


def test_readings_come_by_start_from_all_sensors_while_the_daemon_writes(site: Site) -> None:
    with JournalView(site.path) as view:
        seen = view.readings()
        first = next(seen)
        site.minute()
        rest = list(seen)
    assert [(r.sensor, r.seq) for r in (first, *rest)] == [(s, n) for n in range(1, 6) for s in ("north", "south")]
    assert first.start == MORNING
    assert first.body == site.waiting()[0].body


def test_a_range_takes_its_beginning_in_and_leaves_its_end_out(site: Site) -> None:
    with JournalView(site.path) as view:
        found = view.readings(MORNING + 60, MORNING + 180, "south")
        assert [(r.sensor, r.seq) for r in found] == [("south", 2), ("south", 3)]


def test_more_readings_than_a_page_come_complete_and_in_order(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("motekeep.edges.journal_view.PAGE_ROWS", 3)
    with JournalView(site.path) as view:
        starts = [r.start for r in view.readings()]
    assert len(starts) == 10
    assert starts == sorted(starts)


def test_a_reading_deleted_after_the_look_began_is_left_out(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("motekeep.edges.journal_view.PAGE_ROWS", 2)
    with JournalView(site.path) as view:
        seen = view.readings(sensor="north")
        assert next(seen).seq == 1
        site.journal._file.connection.execute("DELETE FROM readings WHERE seq = 4")
        assert [r.seq for r in seen] == [2, 3, 5]


def test_a_reading_that_rotted_is_not_exported(site: Site) -> None:
    site.journal._file.connection.execute("UPDATE readings SET seq = 99 WHERE seq = 3 AND sensor = 'north'")
    with JournalView(site.path) as view:
        assert [r.seq for r in view.readings(sensor="north")] == [1, 2, 4, 5]


def test_counts_are_those_that_the_daemon_wrote(site: Site) -> None:
    site.reader.mark_delivered(site.waiting()[:2])
    site.reader.mark_sent(site.waiting("south")[:1])
    site.reader.mark_aside(site.waiting("south")[:1])
    site.minute(keep={"dose": "3.5"})
    with JournalView(site.path) as view:
        north, south = view.sensors()
        assert (north.last_seq, north.readings, north.waiting, north.sent) == (6, 6, 4, 0)
        assert (south.last_seq, south.readings, south.waiting, south.sent) == (6, 6, 4, 1)
        assert (north.first, north.last) == (MORNING, MORNING + 300)
        assert view.kept("dose") == "3.5"
        assert view.kept("unknown") is None
        assert view.lost() == {"set_aside": 1}
        assert (view.life(), view.notices()) == (1, 0)


def test_a_journal_without_a_daemon_is_read_and_nothing_of_it_changes(site: Site) -> None:
    site.reader.close()
    site.journal.close()
    before = site.path.read_bytes()
    with JournalView(site.path) as view:
        assert len(list(view.readings())) == 10
    assert site.path.read_bytes() == before


def test_a_view_cannot_write(site: Site) -> None:
    with JournalView(site.path) as view, pytest.raises(Exception, match="readonly"):
        view._connection.execute("DELETE FROM readings")


def test_a_missing_file_and_one_that_is_no_journal_are_told_plainly(folder: Path) -> None:
    with pytest.raises(StoreError, match="check \\[store\\] path"):
        JournalView(folder / "nothing.db")
    (folder / "text.db").write_text("this is not a database, but it is long enough to look at" * 50)
    with pytest.raises(StoreError):
        JournalView(folder / "text.db")
    (folder / "empty.db").touch()
    with pytest.raises(StoreError, match="no journal"):
        JournalView(folder / "empty.db")


def test_the_daemons_side_of_the_journal_does_not_import_sqlite_utils() -> None:
    code = "import sys, motekeep.edges.journal; assert 'sqlite_utils' not in sys.modules"
    assert subprocess.run([sys.executable, "-c", code], check=False).returncode == 0
