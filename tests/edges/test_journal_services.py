"""Service records in the journal: durable, once each, kept for ever within reason, and in journals of every version."""

from collections.abc import Iterator
from pathlib import Path

import pytest

from journal_site import Site, ram_folder
from motekeep.edges.journal_schema import LADDER
from motekeep.edges.journal_view import JournalView
from motekeep.edges.ports import Batch, NewService, Notice
from motekeep.instant import from_rfc3339, rfc3339
from service_records import record


@pytest.fixture
def folder() -> Iterator[Path]:
    with ram_folder() as path:
        yield path


@pytest.fixture
def site(folder: Path) -> Site:
    return Site(folder / "a")


def row(n: int, *, at: float = 1_796_000_000.0) -> NewService:
    said = record(f"{n:08x}-00000000", at=rfc3339(at))
    return NewService(said.id, said.sensor, from_rfc3339(said.at), said.kind, said.json_text())


def commit(site: Site, *rows: NewService) -> None:
    site.journal.commit(Batch(services=rows, notices=[Notice("t/service", r.body) for r in rows]), site.clock.now())


def ids(site: Site) -> list[int]:
    with JournalView(site.path) as view:
        return [int(body.split('"id":"')[1][:8], 16) for body in view.services()]


def test_a_record_is_durable_when_commit_returns_and_is_known_by_its_id(site: Site) -> None:
    commit(site, row(1))
    site.power_cut()
    assert site.journal.has_service(row(1).id)
    assert not site.journal.has_service(row(2).id)
    assert ids(site) == [1]


def test_a_record_that_is_told_twice_is_one(site: Site) -> None:
    commit(site, row(1), row(2))
    commit(site, row(2))
    assert ids(site) == [1, 2]


def test_they_come_by_the_time_of_what_was_done(site: Site) -> None:
    commit(site, row(1, at=2e9), row(2, at=1e9), row(3, at=1.5e9))
    assert ids(site) == [2, 3, 1]


def test_beyond_their_limit_the_oldest_go_and_are_counted(site: Site, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr("motekeep.edges.journal.MAX_SERVICES", 3)
    commit(site, *[row(n, at=1e9 + n) for n in range(1, 4)])
    commit(site, row(4, at=1e9 + 4), row(5, at=1e9 + 5))
    assert ids(site) == [3, 4, 5]
    assert site.journal.state().lost == {"services": 2}
    site.restart()
    assert site.journal.state().lost == {"services": 2}


def test_a_journal_from_before_there_were_records_has_none_and_is_brought_up(
    folder: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    with monkeypatch.context() as before:
        before.setattr("motekeep.edges.journal_schema.LADDER", LADDER[:1])
        before.setattr("motekeep.edges.journal_schema.VERSION", 1)
        site = Site(folder / "a")
        site.minutes(3)
        assert ids(site) == []
        site.die()
    assert ids(site) == []
    site.start()
    assert site.numbers() == [1, 2, 3]
    commit(site, row(1))
    assert ids(site) == [1]
    assert site.journal.state().degraded is None


def test_records_are_carried_over_from_a_damaged_journal(site: Site) -> None:
    commit(site, row(1, at=1.5e9), row(2, at=1.6e9 + 0.5))
    site.minutes(30)
    site.restart()
    site.die()
    with site.path.open("r+b") as file:
        file.write(bytes(100))
    site.start()
    assert site.journal.state().degraded is not None
    assert ids(site) == [1, 2]
