"""Replay: captures in, four result files out, by the very pipeline of the daemon and in the captures' own time."""

import gzip
import json
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner, Result
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from motekeep.cli import main
from motekeep.errors import CaptureError
from motekeep.instant import from_rfc3339, rfc3339
from motekeep.measure.document_text import parse
from motekeep.measure.dose import dust_ug
from motekeep.message.compose import Place
from motekeep.message.documents import HourlyDocument, ReadingDocument
from motekeep.pipeline import SensorSetup
from motekeep.replay import Plan, Summary, replay
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

BM = DIALECTS["bm"]
NOON = from_rfc3339("2026-12-01T12:00:00Z")
RESULTS = ("readings.ndjson", "hourly.ndjson", "findings.ndjson", "summary.json")
PERIOD = 6.0  # ten frames a minute: hours of capture in little time

DOCUMENT = """
issue = 3
site = "quarry"
gateway = "gate"
sensor = "north"
made_at = 2026-11-20T10:00:00Z
valid_from = 2026-11-20T12:00:00Z
valid_until = 2027-11-20T00:00:00Z
[range]
pm2_5 = [0.0, 500.0]
rh = [0.0, 100.0]
[[step]]
kind = "humidity-growth"
kappa = { value = 0.33, u = 0.05 }
[[step]]
kind = "linear"
slope = { value = 0.5, u = 0.02 }
offset = { value = 1.0, u = 0.1 }
[residual]
pm2_5 = { u = 0.5 }
"""

CONFIG = """
site = "quarry"
gateway = "gate"
[[sensor]]
name = "north"
port = "/dev/null"
dialect = "bm"
period = 6.0
[[sensor]]
name = "south"
port = "/dev/null"
dialect = "bm"
period = 6.0
[broker]
host = "localhost"
"""


def burst(slot: int, mass: float = 8.0) -> bytes:
    """A frame that never is the same as the one before."""
    wobble = float(slot * 7 % 13)
    counts = (1200.0 + wobble, 340.0, 62.0, 8.0, 2.0, 1.0)
    return BM.encode(Frame(BM_28, (5.0, mass, mass + 1.0), counts, b"", (5.0, mass, mass + 1.0), revision=151))


def frames(seconds: float, sensor: str = "north", *, start: float = 0.0, mass: float = 8.0) -> list[str]:
    """Capture lines of frames from `start` on, each in the middle of its slot."""
    slots = range(round(start / PERIOD), round((start + seconds) / PERIOD))
    return [f"{NOON + PERIOD * (slot + 0.5):.3f} {sensor} frame {burst(slot, mass).hex()}" for slot in slots]


def at(seconds: float, rest: str) -> str:
    return f"{NOON + seconds:.3f} {rest}"


def capture(path: Path, *parts: Sequence[str]) -> Path:
    """A capture of these lines, in order of time."""
    lines = sorted((line for part in parts for line in part), key=lambda line: float(line.split(" ", 1)[0]))
    path.write_text("".join(f"{line}\n" for line in lines))
    return path


@dataclass(frozen=True)
class Outcome:
    folder: Path
    summary: Summary

    def lines(self, name: str) -> list[dict[str, Any]]:
        return [json.loads(line) for line in (self.folder / name).read_text().splitlines()]

    @property
    def readings(self) -> list[ReadingDocument]:
        return [ReadingDocument.model_validate(line) for line in self.lines("readings.ndjson")]

    @property
    def hours(self) -> list[HourlyDocument]:
        return [HourlyDocument.model_validate(line) for line in self.lines("hourly.ndjson")]

    @property
    def told(self) -> dict[str, Any]:
        told: dict[str, Any] = json.loads((self.folder / "summary.json").read_text())
        return told

    def texts(self) -> list[str]:
        return [(self.folder / name).read_text() for name in RESULTS]


def run(out: Path, *captures: Path, sensors: Sequence[str] = ("north",), documents: Sequence[str] = ()) -> Outcome:
    setups = [SensorSetup(name, BM, PERIOD) for name in sensors]
    plan = Plan(Place("quarry", "gate"), 60, setups, [parse(text.encode()) for text in documents])
    return Outcome(out, replay(list(captures), out, plan))


# -- the result files -------------------------------------------------------------------------------------------------


def test_two_hours_and_a_bit_are_a_reading_a_minute_and_two_hours(tmp_path: Path) -> None:
    found = run(tmp_path / "out", capture(tmp_path / "a.capture", frames(2 * 3600.0 + 90.0)))
    readings, hours = found.readings, found.hours
    assert [r.seq for r in readings] == list(range(1, 123))
    assert [a.seconds for a in (readings[1], readings[119], readings[121])] == [60, 60, 27]
    assert all(
        from_rfc3339(b.start) - from_rfc3339(a.start) == pytest.approx(a.seconds, abs=0.05)
        for a, b in pairwise(readings)
    )
    assert [h.start for h in hours] == ["2026-12-01T12:00:00Z", "2026-12-01T13:00:00Z"]
    first = hours[0].pm2_5
    assert first is not None
    assert (first.mean, first.u, first.completeness) == (8.0, None, pytest.approx(1.0, abs=0.002))
    assert (hours[0].flag, hours[0].reasons) == (2, ["uncalibrated"])
    assert found.lines("findings.ndjson") == []
    told = found.told
    assert told["schema"] == "motekeep/summary/1"
    assert (told["from"], told["to"]) == (rfc3339(NOON + 3.0), rfc3339(NOON + 7287.0))
    assert (told["bursts"], told["readings"]) == ({"north": 1215}, {"north": 122})
    assert (told["findings_opened"], told["unknown_sensors"]) == ({}, {})


def test_a_finding_stands_in_its_file_as_it_opened_and_closed_and_flags_what_it_reaches_back_to(tmp_path: Path) -> None:
    stuck = [at(PERIOD * (slot + 0.5), f"north frame {burst(600, 20.0).hex()}") for slot in range(600, 800)]
    path = capture(tmp_path / "a.capture", frames(3600.0), stuck, frames(7200.0, start=4800.0))
    found = run(tmp_path / "out", path)
    opened, closed = found.lines("findings.ndjson")
    assert set(opened) == {"at", "sensor", "code", "category", "event", "since", "confidence", "evidence"}
    assert (opened["code"], opened["event"], closed["event"]) == ("output-frozen", "opened", "closed")
    assert (opened["sensor"], opened["category"]) == ("north", "failure")
    assert from_rfc3339(opened["since"]) == pytest.approx(NOON + 3603.0, abs=0.01)
    assert from_rfc3339(opened["at"]) > from_rfc3339(opened["since"]) + 30.0
    assert found.told["findings_opened"] == {"output-frozen": 1}
    # readings.ndjson holds what was known then; the hour as it ended leaves out all twenty minutes
    second = found.hours[1].pm2_5
    assert second is not None
    assert second.completeness == pytest.approx(2 / 3, abs=0.02)
    assert second.mean is None
    assert "output-frozen" in found.hours[1].reasons


def test_an_hour_stands_once_as_an_amendment_left_it(tmp_path: Path) -> None:
    """Output freezes 50 s before the hour ends, which is proven only in the next one."""
    stuck = [at(PERIOD * (slot + 0.5), f"north frame {burst(590, 20.0).hex()}") for slot in range(590, 700)]
    path = capture(tmp_path / "a.capture", frames(3540.0), stuck, frames(3600.0, start=4200.0))
    found = run(tmp_path / "out", path)
    opened = found.lines("findings.ndjson")[0]
    assert opened["since"] < "2026-12-01T13:00:00Z" < opened["at"]
    assert [h.start for h in found.hours] == ["2026-12-01T12:00:00Z", "2026-12-01T13:00:00Z"]
    first = found.hours[0].pm2_5
    assert first is not None
    assert first.mean == 8.0
    assert "output-frozen" in found.hours[0].reasons


def test_no_line_of_a_known_sensor_leaves_empty_results_and_counts_what_was_left_out(tmp_path: Path) -> None:
    found = run(tmp_path / "out", capture(tmp_path / "a.capture", frames(60.0, "attic")))
    assert found.summary.first is None
    assert (found.readings, found.hours, found.lines("findings.ndjson")) == ([], [], [])
    assert found.told["unknown_sensors"] == {"attic": 10}
    assert found.told["from"] is None


# -- captures ---------------------------------------------------------------------------------------------------------


@settings(max_examples=5, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(owners=st.lists(st.integers(0, 2), min_size=200, max_size=200), order=st.permutations([0, 1, 2]))
def test_captures_are_merged_by_time_however_they_were_cut(tmp_path: Path, owners: list[int], order: list[int]) -> None:
    lines = [line for pair in zip(frames(600.0), frames(600.0, "south", mass=9.0), strict=True) for line in pair]
    whole = run(tmp_path / "whole", capture(tmp_path / "whole.capture", lines), sensors=("north", "south"))
    parts = [
        capture(tmp_path / f"{part}.capture", [line for line, own in zip(lines, owners, strict=True) if own == part])
        for part in order
    ]
    merged = run(tmp_path / "merged", *parts, sensors=("north", "south"))
    assert sorted(merged.texts()[0].splitlines()) == sorted(whole.texts()[0].splitlines())
    assert merged.texts()[1:3] == whole.texts()[1:3]
    assert merged.told["readings"] == whole.told["readings"] == {"north": 10, "south": 10}


def test_a_packed_capture_gives_the_same_as_the_plain_one(tmp_path: Path) -> None:
    plain = capture(tmp_path / "a.capture", frames(600.0))
    packed = tmp_path / "a.capture.gz"
    packed.write_bytes(gzip.compress(plain.read_bytes()))
    assert run(tmp_path / "packed", packed).texts() == run(tmp_path / "plain", plain).texts()


def test_the_same_captures_give_the_same_bytes(tmp_path: Path) -> None:
    path = capture(
        tmp_path / "a.capture",
        frames(4000.0),
        [at(60.0 * m, "north climate 55.0 12.0") for m in range(66)],
        [at(700.0, "north service cleaned")],
    )
    first = run(tmp_path / "first", path, documents=[DOCUMENT])
    assert run(tmp_path / "second", path, documents=[DOCUMENT]).texts() == first.texts()
    assert [len(text) > 0 for text in first.texts()] == [True, True, True, True]


def test_a_sensor_that_sleeps_between_is_missing_nothing_and_its_first_half_minutes_are_left_out(
    tmp_path: Path,
) -> None:
    turns = [[at(600.0 * n + 0.1, "north line awake"), at(600.0 * n + 90.1, "north line asleep")] for n in range(6)]
    awake = [frames(90.0, start=600.0 * n) for n in range(6)]
    asleep = run(tmp_path / "told", capture(tmp_path / "a.capture", *awake, *turns))
    codes = {finding["code"] for finding in asleep.lines("findings.ndjson")}
    assert "frames-missing" not in codes
    minutes = [reading for reading in asleep.readings if reading.frames.good]
    assert [reading.frames.good for reading in minutes[1:4]] == [5, 5, 5]
    assert all(reading.reasons == ["asleep"] for reading in asleep.readings if not reading.frames.good)
    silent = run(tmp_path / "untold", capture(tmp_path / "b.capture", *awake))
    assert "frames-missing" in {finding["code"] for finding in silent.lines("findings.ndjson")}


BAD_LINES = [
    ("1796126460.0 north frame 424", "not a capture line"),
    ("1796126460.0 north frame", "not a capture line"),
    ("noon north frame 42", "not a capture line"),
    ("1796126460.0 north climate wet 3.0", "not a capture line"),
    ("1796126460.0 north service polished", "not a capture line"),
    ("1796126460.0 north line dozing", "not a capture line"),
    ("1796126460.0 north photo 42", "unknown kind 'photo'"),
    ("1796126400.5 north frame 42", "time runs backwards"),
]


@pytest.mark.parametrize(("line", "why"), BAD_LINES)
def test_a_bad_line_is_refused_by_file_and_line(tmp_path: Path, line: str, why: str) -> None:
    path = capture(tmp_path / "gate.capture", frames(60.0))
    path.write_text(f"# recorded at the gate\n{path.read_text()}{line}\n")
    with pytest.raises(CaptureError, match=rf"^gate\.capture, line 12: {why}"):
        run(tmp_path / "out", path)


def test_what_is_no_text_or_cut_short_is_refused_by_file(tmp_path: Path) -> None:
    rubbish = tmp_path / "rubbish.capture"
    rubbish.write_bytes(b"\xff\xfe" * 50)
    cut = tmp_path / "cut.capture.gz"
    cut.write_bytes(gzip.compress("\n".join(frames(6000.0)).encode())[:-100])
    for path in (rubbish, cut):
        with pytest.raises(CaptureError, match=f"^{path.name}: not a capture"):
            run(tmp_path / "out", path)
    with pytest.raises(CaptureError, match=r"none\.capture"):
        run(tmp_path / "out", tmp_path / "none.capture")


# -- what stands beside the frames ------------------------------------------------------------------------------------


def test_service_lines_begin_the_dose_anew_and_a_new_unit_the_laser_hours_too(tmp_path: Path) -> None:
    hour = dust_ug(9.0, 0.1, 3600.0)  # of the largest mass channel

    def after(*services: str) -> tuple[float, float]:
        lines = [at(1200.0, f"north service {kind}") for kind in services]
        told = run(tmp_path / "out", capture(tmp_path / "a.capture", frames(3600.0), lines)).told
        return told["dust_dose_ug"]["north"] / hour, told["laser_hours"]["north"]

    assert after("note", "moved", "fan-replaced") == (pytest.approx(1.0, rel=0.02), pytest.approx(1.0, rel=0.02))
    assert after("cleaned") == (pytest.approx(2 / 3, rel=0.02), pytest.approx(1.0, rel=0.02))
    assert after("unit-replaced") == (pytest.approx(2 / 3, rel=0.02), pytest.approx(2 / 3, rel=0.02))


def test_climate_lines_feed_the_humidity_step_until_they_are_stale(tmp_path: Path) -> None:
    """The document calls climate stale after 300 s, the configuration after 900 s."""
    path = capture(tmp_path / "a.capture", frames(1500.0), [at(30.0, "north climate 62.3 11.0")])
    readings = run(tmp_path / "out", path, documents=[DOCUMENT]).readings
    factor = 1.0 + 0.33 / 1.65 * 62.3 / 37.7
    fresh, stale, absent = readings[0], readings[8], readings[20]
    assert fresh.pm2_5 is not None
    assert fresh.pm2_5.raw == 8.0
    assert fresh.pm2_5.value == pytest.approx(0.5 * 8.0 / factor + 1.0, abs=0.006)
    assert fresh.climate is not None
    assert (fresh.climate.rh, fresh.climate.t) == (62.3, 11.0)
    for reading, reason in ((stale, "climate-stale"), (absent, "climate-missing")):
        assert reading.pm2_5 is not None
        assert (reading.pm2_5.value, reading.pm2_5.u) == (8.0, None)
        assert reading.flag == 3
        assert {reason, "uncorrected:pm2_5"} <= set(reading.reasons)
        assert reading.calibration is None
    assert absent.climate is None


# -- from the command line --------------------------------------------------------------------------------------------


def command(tmp_path: Path, *arguments: str) -> Result:
    config = tmp_path / "config.toml"
    config.write_text(CONFIG)
    return CliRunner().invoke(main, ["replay", "--config", str(config), "--out", str(tmp_path / "out"), *arguments])


def test_documents_are_applied_to_their_sensors_and_told_in_each_reading(tmp_path: Path) -> None:
    path = capture(tmp_path / "a.capture", frames(300.0), frames(300.0, "south"), [at(1.0, "north climate 50.0 10.0")])
    north, south = tmp_path / "n.toml", tmp_path / "s.toml"
    north.write_text(DOCUMENT)
    dry = DOCUMENT.replace('"north"', '"south"').replace("issue = 3", "issue = 9").replace("rh = [0.0, 100.0]\n", "")
    before, _, after = dry.partition('[[step]]\nkind = "humidity-growth"\nkappa = { value = 0.33, u = 0.05 }\n')
    south.write_text(before + after)
    done = command(tmp_path, str(path), "--calibration", str(north), "--calibration", str(south))
    assert (done.exit_code, done.output) == (0, "")
    readings = Outcome(tmp_path / "out", Summary()).readings
    assert len(readings) == 10
    for reading in readings:
        assert reading.calibration is not None
        assert reading.pm2_5 is not None
        issue, value = (3, 0.5 * 8.0 / 1.2 + 1.0) if reading.sensor == "north" else (9, 5.0)
        assert reading.calibration.issue == issue
        assert reading.pm2_5.value == pytest.approx(value, abs=0.006)
        assert reading.pm2_5.u is not None
        assert reading.pm2_5.u >= 0.5
        # the document names PM2.5 only
        assert reading.pm10 is not None
        assert (reading.pm10.value, reading.pm10.u) == (9.0, None)
        assert (reading.flag, reading.reasons) == (1, ["uncalibrated:pm1", "uncalibrated:pm10"])


REFUSED = [
    ("kappa = { value = 0.33, u = 0.05 }", "kappa = { value = 33, u = 0.05 }", "step[0].kappa.value"),
    ("slope = { value = 0.5, u = 0.02 }", "slope = { value = nan, u = 0.02 }", "step[1].slope.value"),
    ("pm2_5 = { u = 0.5 }", "pm2_5 = { u = 0.5, relativ = 0.1 }", "residual.pm2_5.relativ"),
    ("valid_until = 2027-11-20T00:00:00Z", "valid_until = 2026-11-20T00:00:00Z", "valid_until"),
    ('sensor = "north"', 'sensor = "attic"', "'attic'"),
    ('site = "quarry"', 'site = "harbour"', "'harbour'"),
    ("[range]", "[range", "<text>"),
]


@pytest.mark.parametrize(("old", "new", "named"), REFUSED)
def test_a_document_that_must_not_be_used_ends_it_in_one_line_that_names_the_key(
    tmp_path: Path, old: str, new: str, named: str
) -> None:
    path, bad = capture(tmp_path / "a.capture", frames(60.0)), tmp_path / "bad.toml"
    bad.write_text(DOCUMENT.replace(old, new))
    done = command(tmp_path, str(path), "--calibration", str(bad))
    assert done.exit_code == 1
    [line] = done.output.splitlines()
    assert line.startswith("motekeep: calibration document, ")
    assert str(bad) in line
    assert named in line
    assert not (tmp_path / "out").exists()


def test_two_documents_of_one_sensor_are_refused_since_only_one_could_be_in_force(tmp_path: Path) -> None:
    path, first, second = capture(tmp_path / "a.capture", frames(60.0)), tmp_path / "1.toml", tmp_path / "2.toml"
    for document in (first, second):
        document.write_text(DOCUMENT)
    done = command(tmp_path, str(path), "--calibration", str(first), "--calibration", str(second))
    assert done.exit_code == 2
    assert done.output == "motekeep: --calibration: two documents are for sensor 'north'; give one a sensor\n"


def test_exit_codes_tell_done_from_nothing_to_do_from_a_bad_capture_from_bad_usage(tmp_path: Path) -> None:
    good = capture(tmp_path / "good.capture", frames(120.0), frames(120.0, "attic"))
    done = command(tmp_path, str(good))
    assert (done.exit_code, done.output) == (0, "motekeep: not in the configuration, left out: attic\n")

    nothing = command(tmp_path, str(capture(tmp_path / "attic.capture", frames(120.0, "attic"))))
    assert nothing.exit_code == 1
    assert nothing.output.endswith("nothing was replayed\n")

    bad = tmp_path / "bad.capture"
    bad.write_text(f"{good.read_text()}1796126700.0 north frame 4\n")
    refused = command(tmp_path, str(bad))
    assert refused.exit_code == 1
    assert refused.output.startswith("motekeep: bad.capture, line 41: not a capture line")
    assert len(refused.output.splitlines()) == 1

    assert command(tmp_path, str(tmp_path / "absent.capture")).exit_code == 2
    assert command(tmp_path).exit_code == 2
