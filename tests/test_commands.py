"""The commands as an operator types them: what they print, where they fail, and the exit codes."""

import csv
import io
import json
import os
import pty
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from clocks import FakeClock
from journal_site import document, new_reading
from motekeep.capture import FrameRecord, parse_line
from motekeep.cli import main
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.ports import Batch
from motekeep.instant import from_rfc3339
from motekeep.loops.recorder import HEALTH
from motekeep.message.topics import Topics
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

START = from_rfc3339("2026-12-01T12:00:00Z")
HEALTH_TEXT = json.dumps(
    {
        "schema": "motekeep/health/1", "site": "quarry", "gateway": "east-gate", "status": "failure",
        "at": "2026-12-01T12:00:00Z", "next_by": "2026-12-01T12:02:30Z", "clock": "synced", "version": "0.1.0",
        "life": 3,
        "sensors": {"north": {"status": "failure", "findings": [{
            "code": "fan-stopped", "category": "failure", "since": "2026-12-01T11:58:00Z", "confidence": 0.97,
            "evidence": "from 6000 to 90", "remedy": "Take a spare unit."}]}},
        "findings": [],
    }
)  # fmt: skip


def run(*words: str) -> Result:
    return CliRunner().invoke(main, list(words))


@pytest.fixture
def config(tmp_path: Path) -> Path:
    """A configuration and a journal with five minutes of one sensor, the second of which was amended later."""
    path = tmp_path / "config.toml"
    path.write_text(
        'site = "quarry"\ngateway = "east-gate"\n[[sensor]]\nname = "north"\n'
        f'port = "{tmp_path}/port"\ndialect = "bm"\n[broker]\nhost = "127.0.0.1"\n'
        f'[store]\npath = "{tmp_path}/journal.db"\n'
    )
    clock = FakeClock(START, boot_id="b" * 32)
    journal = Journal(JournalSettings(tmp_path / "journal.db", Topics("motekeep", "quarry", "east-gate")), clock)
    starts = [START + 60.0 * minute for minute in range(5)]
    readings = [new_reading(document("north", seq, start), start) for seq, start in enumerate(starts, 1)]
    amended = json.dumps([[START + 60.0, START + 120.0, 4, "fan-stopped"]])
    journal.commit(Batch(readings, (), {HEALTH: HEALTH_TEXT, "amendments/north": amended}), clock.now())
    journal.close()
    return path


SPAN = ("--from", "2026-12-01T12:00:00Z", "--to", "2026-12-01T12:04:00Z")


def test_csv_has_the_span_with_what_was_found_out_later(config: Path) -> None:
    result = run("export", "--config", str(config), *SPAN)
    assert result.exit_code == 0
    rows = list(csv.DictReader(io.StringIO(result.output)))
    assert [row["seq"] for row in rows] == ["1", "2", "3", "4"]
    assert [row["flag"] for row in rows] == ["2", "4", "2", "2"]
    assert rows[1]["reasons"].split() == ["uncalibrated", "fan-stopped"]
    assert float(rows[0]["pm2_5_from_counts"]) > 0.0


def test_ndjson_is_the_documents_themselves(config: Path) -> None:
    lines = run("export", "--config", str(config), *SPAN, "--format", "ndjson").output.splitlines()
    assert [json.loads(line)["seq"] for line in lines] == [1, 2, 3, 4]
    assert all(json.loads(line)["schema"] == "motekeep/reading/1" for line in lines)


def test_senml_is_one_pack_and_cf_names_its_columns(config: Path) -> None:
    pack = json.loads(run("export", "--config", str(config), *SPAN, "--format", "senml").output)
    assert {record["n"] for record in pack if "n" in record} >= {"pm2_5", "flag"}
    head = run("export", "--config", str(config), *SPAN, "--format", "cf").output.splitlines()[0]
    assert "mass_concentration_of_pm2p5_ambient_aerosol_particles_in_air [ug m-3]" in head


def test_an_empty_span_is_an_empty_table_and_an_empty_pack(config: Path) -> None:
    nothing = ("--from", "2020-01-01T00:00:00Z", "--to", "2020-01-02T00:00:00Z")
    assert len(run("export", "--config", str(config), *nothing).output.splitlines()) == 1
    assert json.loads(run("export", "--config", str(config), *nothing, "--format", "senml").output) == []


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--from", "yesterday", "--to", "2026-12-01T12:04:00Z"), "--from"),
        (("--from", "2026-12-01T12:00:00", "--to", "2026-12-01T12:04:00Z"), "no time zone"),
        ((*SPAN, "--sensor", "nroth"), "no sensor 'nroth'; known are north"),
        ((*SPAN, "--out", "/no/such/folder/x.csv"), "/no/such/folder/x.csv"),
    ],
)
def test_bad_words_are_one_line_and_exit_code_2(config: Path, words: tuple[str, ...], said: str) -> None:
    result = run("export", "--config", str(config), *words)
    assert result.exit_code == 2
    assert said in result.stderr
    assert len(result.stderr.strip().splitlines()) == 1


def test_status_says_what_is_wrong_what_to_do_and_that_nobody_writes_any_more(config: Path) -> None:
    result = run("status", "--config", str(config))
    assert result.exit_code == 1
    for words in ("quarry/east-gate: failure", "OVERDUE", "fan-stopped since", "97% sure", "-> Take a spare unit."):
        assert words in result.output
    assert json.loads(run("status", "--config", str(config), "--json").output) == json.loads(HEALTH_TEXT)


def test_status_without_a_journal_is_one_line(config: Path, tmp_path: Path) -> None:
    (tmp_path / "journal.db").unlink()
    result = run("status", "--config", str(config))
    assert result.exit_code == 1
    assert "check [store] path" in result.stderr


def test_schema_prints_json_schema_and_asyncapi() -> None:
    assert "reading" in json.loads(run("schema").output)
    assert json.loads(run("schema", "--asyncapi").output)["asyncapi"] == "3.0.0"


def test_a_wrong_configuration_is_one_line_and_exit_code_2(config: Path) -> None:
    config.write_text(config.read_text().replace("dialect", "dailect"))
    result = run("status", "--config", str(config))
    assert result.exit_code == 2
    assert result.stderr.strip() == (f"motekeep: {config}: sensor[north].dailect: unknown key; did you mean 'dialect'?")


@pytest.fixture
def speaking(config: Path, tmp_path: Path) -> Iterator[bytes]:
    """A sensor on a pseudo-terminal that says one frame again and again."""
    master, slave = pty.openpty()
    (tmp_path / "port").symlink_to(os.ttyname(slave))
    os.close(slave)
    said = DIALECTS["bm"].encode(Frame(BM_28, (5.0, 8.0, 9.0), (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0), b""))
    stop = threading.Event()

    def speak() -> None:
        while not stop.wait(0.1):
            try:
                os.write(master, said)
            except OSError:
                continue  # nobody has the port open at the moment

    thread = threading.Thread(target=speak, daemon=True)
    thread.start()
    yield said
    stop.set()
    thread.join(5.0)
    os.close(master)


def test_capture_records_what_came_and_it_can_be_read_back(config: Path, tmp_path: Path, speaking: bytes) -> None:
    result = run("capture", "--config", str(config), "--seconds", "2", str(tmp_path / "out.txt"))
    assert result.exit_code == 0
    records = [r for line in (tmp_path / "out.txt").read_text().splitlines() if (r := parse_line(line)) is not None]
    heard = b"".join(r.data for r in records if isinstance(r, FrameRecord))
    assert speaking in heard


def test_listen_shows_the_figures_and_guesses_the_dialect(config: Path, tmp_path: Path, speaking: bytes) -> None:
    shown = run("listen", "--config", str(config), "--seconds", "2")
    assert "pm2_5 8" in shown.output
    assert ">0.3 1200" in shown.output


def test_check_names_what_would_stop_the_daemon(config: Path, speaking: bytes) -> None:
    config.write_text(config.read_text().replace('host = "127.0.0.1"', 'host = "127.0.0.1"\nport = 1'))
    result = run("check", "--config", str(config), "--seconds", "2")
    assert result.exit_code == 1
    lines = result.output.splitlines()
    assert any(line.startswith("ok    sensor north:") for line in lines)
    assert any(line.startswith("bad   broker 127.0.0.1:1: not reachable") for line in lines)
    assert any(line.startswith(("ok    store:", "warn  store:")) for line in lines)


def test_check_says_that_a_sensor_is_silent_and_what_to_look_at(config: Path, tmp_path: Path) -> None:
    master, slave = pty.openpty()
    (tmp_path / "port").symlink_to(os.ttyname(slave))
    os.close(slave)
    result = run("check", "--config", str(config), "--seconds", "1")
    os.close(master)
    [line] = [line for line in result.output.splitlines() if "sensor north" in line]
    assert line.startswith("bad   sensor north: silence")
    assert "wiring" in line
