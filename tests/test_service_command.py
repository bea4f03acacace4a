"""`service add` and `service list` as an operator types them."""

import json
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from clocks import FakeClock
from motekeep.cli import main
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.ports import Batch, NewService
from motekeep.edges.service_spool import ServiceSpool
from motekeep.instant import Instant, from_rfc3339
from motekeep.message.topics import Topics
from service_records import record

NOW = from_rfc3339("2026-12-01T12:00:00Z")


@pytest.fixture
def config(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    set_clock(monkeypatch, trusted=True)
    path = tmp_path / "config.toml"
    path.write_text(
        'site = "quarry"\ngateway = "east-gate"\n[[sensor]]\nname = "north"\n'
        f'port = "{tmp_path}/port"\ndialect = "bm"\n[broker]\nhost = "127.0.0.1"\n'
        f'[store]\npath = "{tmp_path}/journal.db"\n'
    )
    return path


def set_clock(monkeypatch: pytest.MonkeyPatch, *, trusted: bool) -> None:
    now = Instant(NOW, 5000.0, "b" * 32, trusted)
    monkeypatch.setattr("motekeep.edges.clock.SystemClock.now", lambda _: now)


def run(config: Path, *words: str) -> Result:
    return CliRunner().invoke(main, ["service", words[0], "--config", str(config), *words[1:]])


def waiting(config: Path) -> list[dict[str, object]]:
    spool = ServiceSpool(config.parent / "journal.db")
    return [json.loads(spool.read(name).json_text()) for name in spool.waiting()]


def test_add_leaves_a_record_of_now_with_the_state_of_the_clock(config: Path) -> None:
    result = run(config, "add", "north", "cleaned", "--note", "dry air, inlet was full of web")
    assert result.exit_code == 0
    assert result.stdout.startswith("north: cleaned at 2026-12-01T12:00:00Z is left for the daemon")
    [left] = waiting(config)
    assert left["schema"] == "motekeep/service/1"
    assert (left["sensor"], left["kind"], left["at"], left["clock"]) == (
        "north", "cleaned", "2026-12-01T12:00:00Z", "synced",
    )  # fmt: skip
    assert left["note"] == "dry air, inlet was full of web"


def test_on_a_clock_that_nobody_vouches_for_it_says_so_and_marks_the_record(
    config: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    set_clock(monkeypatch, trusted=False)
    result = run(config, "add", "north", "moved")
    assert result.exit_code == 0
    assert "no time service vouches" in result.stderr
    assert [left["clock"] for left in waiting(config)] == ["unsynced"]


def test_a_board_that_woke_up_in_1970_may_enter_a_record_all_the_same(
    config: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("motekeep.edges.clock.SystemClock.now", lambda _: Instant(300.0, 300.0, "b" * 32, False))
    assert run(config, "add", "north", "cleaned").exit_code == 0
    assert [(left["at"], left["clock"]) for left in waiting(config)] == [("1970-01-01T00:05:00Z", "unsynced")]


def test_a_time_that_a_person_states_is_taken_and_called_so(config: Path) -> None:
    run(config, "add", "north", "unit-replaced", "--at", "2026-11-30T10:00:00+01:00")
    [left] = waiting(config)
    assert (left["at"], left["clock"], left["entered"]) == (
        "2026-11-30T09:00:00Z", "stated", "2026-12-01T12:00:00Z",
    )  # fmt: skip


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("nroth", "cleaned"), "SENSOR 'nroth': no such sensor in {config}; did you mean 'north'?"),
        (("attic", "cleaned"), "SENSOR 'attic': no such sensor in {config}; known are north"),
        (("north", "claened"), "KIND 'claened': no such kind; did you mean 'cleaned'?"),
        (("north", "exorcised"), "known are cleaned, fan-replaced, unit-replaced, moved, note"),
        (("north", "cleaned", "--at", "yesterday"), "--at 'yesterday': not a time; write it like"),
        (("north", "cleaned", "--at", "2026-11-30T10:00:00"), "not a time; write it like"),
        (("north", "cleaned", "--at", "2027-11-30T10:00:00Z"), "that is to come, now it is 2026-12-01T12:00:00Z"),
        (("north", "cleaned", "--at", "1996-11-30T10:00:00Z"), "not of this century"),
        (("north", "note", "--note", "x" * 501), "--note: 501 characters"),
        (("north", "note", "--note", "two\nlines"), "--note: it has line breaks"),
    ],
)
def test_bad_words_are_one_line_with_the_mend_and_exit_code_2(config: Path, words: tuple[str, ...], said: str) -> None:
    result = run(config, "add", *words)
    assert result.exit_code == 2
    assert said.format(config=config) in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1
    assert waiting(config) == []


def test_where_the_spool_cannot_be_written_it_is_exit_code_1_and_says_who_can(config: Path) -> None:
    (config.parent / "service").write_text("in the way")
    result = run(config, "add", "north", "cleaned")
    assert result.exit_code == 1
    assert "run as root, or as a member of the group" in result.stderr


def test_list_before_the_daemon_has_ever_run_shows_what_waits(config: Path) -> None:
    assert run(config, "list").stdout == "no service record yet\n"
    run(config, "add", "north", "cleaned")
    result = run(config, "list")
    assert result.exit_code == 0
    assert "2026-12-01T12:00:00Z  north" in result.stdout
    assert "PENDING" in result.stdout


def test_list_has_the_journals_records_by_time_then_what_waits_and_none_twice(config: Path) -> None:
    path = config.parent / "journal.db"
    clock = FakeClock(NOW)
    journal = Journal(JournalSettings(path, Topics("motekeep", "quarry", "east-gate")), clock)
    late = record("00000001-00000000", at="2026-11-02T10:00:00Z", note="web in the inlet")
    early = record("00000002-00000000", at="2026-11-01T10:00:00Z", kind="moved")
    rows = [NewService(r.id, r.sensor, from_rfc3339(r.at), r.kind, r.json_text()) for r in (late, early)]
    journal.commit(Batch(services=rows), clock.now())
    spool = ServiceSpool(path)
    spool.put(late)  # not removed yet
    spool.put(record("00000003-00000000", kind="note"))
    lines = [json.loads(line) for line in run(config, "list", "--json").stdout.splitlines()]
    assert [(line["id"][7], line["state"]) for line in lines] == [
        ("2", "recorded"), ("1", "recorded"), ("3", "pending"),
    ]  # fmt: skip
    told = run(config, "list").stdout.splitlines()
    assert len(told) == 3
    assert "web in the inlet" in told[1]
    journal.close()


def test_list_tells_of_files_that_the_daemon_will_refuse(config: Path) -> None:
    run(config, "add", "north", "cleaned")
    (config.parent / "service" / "0001.json").write_text("{}")
    result = run(config, "list", "--sensor", "north")
    assert result.exit_code == 0
    assert "0001.json" in result.stderr
    assert "cleaned" in result.stdout
