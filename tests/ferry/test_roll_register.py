"""The register: one file that knows every roll, whoever had which calibration when, and lets one process write."""

import sqlite3
from pathlib import Path

import pytest

from ferry.rolling import NORTH, NOW, offer
from moteferry.roll.offer import RollError, Target
from moteferry.roll.register import Event, Register

SOUTH = Target("quarry", "east-gate", "south")


def event(name: str, at: float, issue: int = 8, target: Target = NORTH) -> Event:
    made = offer(issue, target)
    return Event(target, name, at, issue, made.digest, "operator")


def test_the_history_is_made_of_what_came_into_force(tmp_path: Path) -> None:
    with Register(tmp_path / "register.db") as register:
        with register.transaction():
            register.add([event("found", NOW, 7), event("offered", NOW + 1), event("accepted", NOW + 2)])
            register.add([event("withdrawn", NOW + 9), Event(NORTH, "found", NOW + 9), event("found", NOW, 3, SOUTH)])
        tenures = register.tenures()
    assert [(t.target, t.since - NOW, t.until and t.until - NOW, t.issue) for t in tenures] == [
        (NORTH, 0, 2, 7),
        (NORTH, 2, 9, 8),
        (NORTH, 9, None, None),
        (SOUTH, 0, None, 3),
    ]


def test_what_was_written_is_there_after_a_reopening(tmp_path: Path) -> None:
    path = tmp_path / "register.db"
    with Register(path) as register, register.transaction():
        register.keep([offer(8)])
        roll = register.roll("roll", "f", "rest", NOW)
        register.place(roll, [(offer(8), 2)])
        register.add([event("planned", NOW)])
    with Register(path) as register:
        assert register.document(offer(8).digest) == offer(8)
        assert register.roll("roll", "f", "rest", NOW + 1) == roll
        assert register.roll("undo", "f", "rest", NOW + 1) != roll
        assert register.places(roll) == {NORTH: 2}
        assert [e.event for e in register.events(target=NORTH)] == ["planned"]
        assert register.highest_issue(NORTH) == 8


def test_a_transaction_that_fails_leaves_nothing(tmp_path: Path) -> None:
    with Register(tmp_path / "register.db") as register:
        with pytest.raises(sqlite3.IntegrityError), register.transaction():
            register.add([event("planned", NOW), Event(NORTH, None, NOW)])  # type: ignore[arg-type] # on purpose
        assert register.events() == []


def test_two_rolls_do_not_share_a_register(tmp_path: Path) -> None:
    with Register(tmp_path / "register.db"), pytest.raises(RollError, match="is rolling with it"):
        Register(tmp_path / "register.db")


def test_it_can_be_asked_while_a_roll_goes_on(tmp_path: Path) -> None:
    with Register(tmp_path / "register.db") as register:
        with register.transaction():
            register.add([event("accepted", NOW)])
        with Register(tmp_path / "register.db", write=False) as reader:
            assert [t.issue for t in reader.tenures()] == [8]


def test_another_database_is_not_written_into(tmp_path: Path) -> None:
    path = tmp_path / "other.db"
    with sqlite3.connect(path) as other:
        other.execute("CREATE TABLE mine (x)")
    before = path.read_bytes()
    with pytest.raises(RollError, match="is not one of this version"):
        Register(path)
    (tmp_path / "text.db").write_text("no database" * 100)
    with pytest.raises(RollError, match="is it a register"):
        Register(tmp_path / "text.db")
    assert path.read_bytes() == before
    with Register(tmp_path / "fresh.db"):
        pass


def test_none_is_made_by_asking(tmp_path: Path) -> None:
    with pytest.raises(RollError, match="there is none"):
        Register(tmp_path / "register.db", write=False)
    assert not list(tmp_path.iterdir())
