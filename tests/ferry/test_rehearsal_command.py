"""`moteferry rehearse`: readings of the same schema, and the summary that an operator judges by."""

import json
from pathlib import Path

from click.testing import CliRunner, Result

from emulated_fleet import document_text
from moteferry.cli import main
from moteferry.roll.offer import Target
from motekeep.message.documents import ReadingDocument

NORTH = Target("quarry", "east-gate", "north")


def reading(seq: int, raw: float, sensor: str = "north", flag: int = 2) -> dict[str, object]:
    """As a gateway without a document makes it."""
    return {
        "schema": "motekeep/reading/1",
        "site": "quarry",
        "gateway": "east-gate",
        "sensor": sensor,
        "seq": seq,
        "start": f"2026-03-01T10:{seq:02d}:00Z",
        "seconds": 60,
        "clock": "synced",
        "boot": "0" * 31 + "1",
        "boot_s": 60.0 * seq,
        "pm2_5": {"raw": raw, "value": raw, "u": None},
        "unit": "ug/m3",
        "k": 1,
        "frames": {"good": 60, "bad": 0, "missing": 0},
        "flag": flag,
        "reasons": ["uncalibrated"],
    }


def rehearse(tmp_path: Path, readings: list[dict[str, object]], *words: str, slope: float = 0.9) -> Result:
    document, device = tmp_path / "north.toml", tmp_path / "readings.ndjson"
    document.write_text(document_text(NORTH, 8, slope))
    device.write_text("".join(json.dumps(reading) + "\n" for reading in readings))
    out = ["--device", str(device), "--out", str(tmp_path / "out.ndjson")]
    return CliRunner().invoke(main, ["rehearse", str(document), *out, *words])


def test_readings_come_out_as_the_document_would_have_made_them(tmp_path: Path) -> None:
    result = rehearse(tmp_path, [reading(n, 10.0 * n) for n in range(1, 6)])
    assert result.exit_code == 0, result.output
    made = [ReadingDocument.model_validate_json(line) for line in (tmp_path / "out.ndjson").read_text().splitlines()]
    assert [r.seq for r in made] == [1, 2, 3, 4, 5]
    # value = 0.9 raw + 0.4, by hand
    assert [r.pm2_5.value for r in made if r.pm2_5] == [9.4, 18.4, 27.4, 36.4, 45.4]
    assert {r.flag for r in made} == {1}
    assert {r.calibration.issue for r in made if r.calibration} == {8}


def test_the_summary_has_the_shifts_and_the_flags(tmp_path: Path) -> None:
    result = rehearse(tmp_path, [reading(n, 10.0 * n) for n in range(1, 6)], "--json")
    told = json.loads(result.stdout)
    assert told["channels"]["pm2_5"] == {
        "median_shift": -2.6,
        "most_shift": -4.6,
        "most_at": "2026-03-01T10:05:00Z",
        "corrected": 5,
    }
    assert (told["readings"], told["flags_changed"], told["within"]) == (5, 5, True)
    assert told["flags"] == [{"before": 2, "after": 1, "readings": 5}]


def test_a_document_that_a_device_would_refuse_for_its_move_is_exit_1(tmp_path: Path) -> None:
    result = rehearse(tmp_path, [reading(n, 20.0) for n in range(1, 6)], slope=0.3)
    assert result.exit_code == 1
    assert "a device with max_shift 0.5 refuses it" in result.output
    assert rehearse(tmp_path, [reading(n, 20.0) for n in range(1, 6)], "--max-shift", "0.9", slope=0.3).exit_code == 0


def test_readings_of_several_sensors_need_a_name(tmp_path: Path) -> None:
    mixed = [reading(1, 10.0), reading(1, 10.0, "south")]
    result = rehearse(tmp_path, mixed)
    assert result.exit_code == 2
    assert "line 2: it holds readings of quarry/east-gate/north and of quarry/east-gate/south" in result.stderr
    assert not (tmp_path / "out.ndjson").exists()
    assert rehearse(tmp_path, mixed, "--sensor", "south").exit_code == 0
    assert json.loads((tmp_path / "out.ndjson").read_text())["sensor"] == "south"


def test_readings_of_another_sensor_are_rehearsed_and_said_to_be(tmp_path: Path) -> None:
    result = rehearse(tmp_path, [reading(1, 10.0, "bench")])
    assert "these are not readings of the sensor that the document is for" in result.output


def test_a_line_that_is_no_reading_is_named_and_the_old_output_stays(tmp_path: Path) -> None:
    (tmp_path / "out.ndjson").write_text("earlier\n")
    broken = reading(2, 10.0)
    del broken["seq"]
    result = rehearse(tmp_path, [reading(1, 10.0), broken])
    assert result.exit_code == 2
    assert "line 2: seq: Field required" in result.stderr
    assert (tmp_path / "out.ndjson").read_text() == "earlier\n"
    assert not list(tmp_path.glob("*.part"))


def test_no_reading_at_all_is_said(tmp_path: Path) -> None:
    result = rehearse(tmp_path, [reading(1, 10.0)], "--sensor", "west")
    assert result.exit_code == 2
    assert "it holds no reading of sensor 'west'" in result.stderr
