"""The calibration folder: what stands in it is in force within half a minute, whole intervals at a time; what must not
be used is refused by name and costs nothing but the flag."""

import os
from pathlib import Path

import pytest
from structlog.testing import capture_logs

from motekeep.edges.shelf import Shelf
from motekeep.errors import DocumentError
from motekeep.instant import Instant, from_rfc3339
from motekeep.loops.calibration import LOOK_EVERY_S, CalibrationFeed
from motekeep.loops.intake import Intake
from motekeep.measure.document_text import LARGEST_BYTES
from motekeep.message.compose import Place
from motekeep.message.documents import ReadingDocument
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

BM = DIALECTS["bm"]
NOON = from_rfc3339("2026-12-01T12:00:00Z")
BOOTED = 50_000.0
PERIOD = 6.0

TEXT = """
issue = {issue}
site = "quarry"
gateway = "gate"
sensor = "{sensor}"
made_at = 2026-11-20T10:00:00Z
valid_from = 2026-11-20T12:00:00Z
valid_until = 2027-11-20T00:00:00Z
[range]
pm2_5 = [0.0, 500.0]
[[step]]
kind = "linear"
slope = {{ value = {slope}, u = 0.02 }}
offset = {{ value = 0.0, u = 0.1 }}
[residual]
pm2_5 = {{ u = 0.5 }}
"""


def text(issue: int = 1, slope: float = 0.5, sensor: str = "north") -> str:
    return TEXT.format(issue=issue, slope=slope, sensor=sensor)


def at(seconds: float, *, trusted: bool = True) -> Instant:
    return Instant(NOON + seconds, BOOTED + seconds, "boot", trusted)


def burst(slot: int) -> bytes:
    """10 and 12 ug/m3 in turn, 11 in the mean of any minute."""
    mass = 10.0 if slot % 2 else 12.0
    counts = (1200.0 + slot * 7 % 13, 340.0, 62.0, 8.0, 2.0, 1.0)
    return BM.encode(Frame(BM_28, (5.0, mass, 13.0), counts, b"", (5.0, mass, 13.0), revision=151))


class Gateway:
    """The real feed, shelf and pipeline over a folder; a frame every six seconds, a turn every second."""

    def __init__(self, folder: Path, *sensors: str) -> None:
        self.folder = folder
        self.sensors = sensors or ("north",)
        setups = [SensorSetup(name, BM, PERIOD) for name in self.sensors]
        self.pipeline = Pipeline(Place("quarry", "gate"), 60, setups, at(0.0))
        self.pipeline.resume(dict.fromkeys(self.sensors, 1), {}, at(0.0))
        self.feed = CalibrationFeed(Shelf(folder, "quarry", "gate"), self.sensors, Intake(self.pipeline))
        self.now = 0

    def put(self, content: str | bytes, sensor: str = "north") -> None:
        """As one who takes care: written beside, then renamed."""
        data = content.encode() if isinstance(content, str) else content
        beside = self.folder / "new"
        beside.write_bytes(data)
        beside.replace(self.folder / f"{sensor}.toml")

    def run(self, until: int) -> list[ReadingDocument]:
        """Readings that were made up to a whole second after noon."""
        while self.now < until:
            self.feed.turn(at(self.now))
            if self.now % 6 == 3:
                for sensor in self.sensors:
                    self.pipeline.receive(sensor, burst(self.now // 6), at(self.now))
            self.now += 1
        self.pipeline.advance(at(self.now))
        return list(self.pipeline.harvest().readings)


def figures(reading: ReadingDocument) -> tuple[int | None, float | None, bool]:
    """The issue it was made with, its PM2.5, and whether that has an uncertainty."""
    assert reading.pm2_5 is not None
    issue = reading.calibration.issue if reading.calibration else None
    return issue, reading.pm2_5.value, reading.pm2_5.u is not None


def test_a_document_is_in_force_from_the_first_reading_when_it_was_there_before(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text())
    with capture_logs() as logs:
        [reading] = gateway.run(60)
    assert figures(reading) == (1, 5.5, True)
    assert (reading.flag, reading.reasons) == (1, ["uncalibrated:pm1", "uncalibrated:pm10"])
    [told] = logs
    assert (told["event"], told["sensor"], told["issue"]) == ("calibration.in_force", "north", 1)
    assert told["digest"] == reading.calibration.digest if reading.calibration else False


@pytest.mark.parametrize("second", [60, 61, 75, 90, 91, 105, 119])
def test_one_that_comes_later_acts_on_whole_intervals_within_half_a_minute(tmp_path: Path, second: int) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text(1, 0.5))
    early = gateway.run(second)
    gateway.put(text(2, 2.0))
    readings = [figures(r) for r in early + gateway.run(300)]
    old, new = (1, 5.5, True), (2, 22.0, True)
    assert set(readings) == {old, new}
    assert readings == sorted(readings)
    # the first whole minute that begins half a minute after it was put there is corrected by it
    assert readings[-2:] == [new, new]


REFUSED = [
    (text(slope=99.0), "step[0].slope.value"),
    (text().replace("[residual]", "[residul]"), "residual"),
    (text().replace("u = 0.02", "u = inf"), "step[0].slope.u"),
    (text().replace('kind = "linear"', 'kind = "magic"'), "step[0].kind"),
    (text().replace("2027-11-20", "2026-11-20"), "valid_until"),
    (text(sensor="south"), "for sensor 'south'"),
    (text().replace("quarry", "harbour"), "for site 'harbour'"),
    ("", "issue"),
    (b"\x00\xff" * 40, "<text>"),
    (b"# " + b"x" * LARGEST_BYTES, "<text>"),
    ("[" * 3000, "<text>"),
]


@pytest.mark.parametrize(("content", "named"), REFUSED)
def test_an_absurd_one_is_refused_by_name_and_readings_go_out_raw_and_suspect(
    tmp_path: Path, content: str | bytes, named: str
) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text())
    gateway.run(60)
    gateway.put(content)
    with capture_logs() as logs:
        readings = gateway.run(300)
    last = readings[-1]
    assert figures(last) == (None, 11.0, False)
    assert (last.flag, last.reasons) == (3, ["uncalibrated", "calibration-refused"])
    assert [r.seq for r in readings] == [2, 3, 4, 5]
    # told once, not every half minute
    [told] = logs
    assert (told["event"], told["log_level"], told["sensor"]) == ("calibration.refused", "error", "north")
    assert str(tmp_path / "north.toml") in told["error"]
    assert named in told["error"]


def test_a_good_one_in_the_place_of_a_refused_one_is_in_force_again(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path)
    gateway.put("rubbish")
    [refused] = gateway.run(60)
    gateway.put(text(4))
    assert (refused.flag, figures(gateway.run(180)[-1])) == (3, (4, 5.5, True))


def test_one_that_is_removed_leaves_readings_uncalibrated_and_not_suspect(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text())
    gateway.run(60)
    (tmp_path / "north.toml").unlink()
    last = gateway.run(240)[-1]
    assert figures(last) == (None, 11.0, False)
    assert (last.flag, last.reasons) == (2, ["uncalibrated"])
    assert gateway.pipeline.accounts()["north"].calibration is None


def test_a_folder_that_is_not_there_is_no_calibration_and_may_come_later(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path / "later")
    [first] = gateway.run(60)
    assert (first.flag, first.reasons) == (2, ["uncalibrated"])
    gateway.folder.mkdir()
    gateway.put(text())
    assert figures(gateway.run(180)[-1]) == (1, 5.5, True)


def test_what_cannot_be_read_as_a_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "north.toml").mkdir()
    with pytest.raises(DocumentError, match=r"north\.toml: .*make it readable"):
        Shelf(tmp_path, "quarry", "gate").in_force("north")


def test_each_sensor_has_its_own(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path, "north", "south", "west")
    gateway.put(text(1, 0.5))
    gateway.put(text(2, 2.0, "south"), "south")
    gateway.put("rubbish", "west")
    by_sensor = {r.sensor: r for r in gateway.run(60)}
    assert figures(by_sensor["north"]) == (1, 5.5, True)
    assert figures(by_sensor["south"]) == (2, 22.0, True)
    assert by_sensor["west"].reasons == ["uncalibrated", "calibration-refused"]


def test_a_file_is_looked_at_every_half_minute_and_read_only_when_it_is_another_one(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text())
    shelf = Shelf(tmp_path, "quarry", "gate")
    assert [shelf.changed("north") for _ in range(3)] == [True, False, False]
    # the same bytes put there again are another file; so are other bytes with the same time
    before = (tmp_path / "north.toml").stat()
    gateway.put(text(2))
    os.utime(tmp_path / "north.toml", ns=(before.st_atime_ns, before.st_mtime_ns))
    assert [shelf.changed("north") for _ in range(2)] == [True, False]
    (tmp_path / "north.toml").unlink()
    assert [shelf.changed("north") for _ in range(2)] == [True, False]

    with capture_logs() as logs:
        gateway.run(int(4 * LOOK_EVERY_S))
        gateway.put(text(3))
        gateway.run(int(8 * LOOK_EVERY_S))
    assert [log["event"] for log in logs] == ["calibration.in_force"]


def test_dates_are_looked_at_only_while_somebody_vouches_for_the_clock(tmp_path: Path) -> None:
    gateway = Gateway(tmp_path)
    gateway.put(text().replace("2027-11-20", "2026-11-30"))
    [expired] = gateway.run(60)
    assert expired.flag == 3
    assert "calibration-expired" in expired.reasons
    assert figures(expired) == (1, 5.5, True)
