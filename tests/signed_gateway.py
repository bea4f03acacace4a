"""A gateway with signers and no daemon: the real feed, switch, examiner, shelf, spool and pipeline over a folder, on a
clock of the test. `ssh-keygen` is the real one. Only the journal is a dictionary, which outlives a crash."""

from collections.abc import Callable, Iterator, Mapping
from pathlib import Path
from threading import Event
from typing import Any

from clocks import FakeClock
from keys import Key
from motekeep.edges.calibration_spool import CalibrationSpool
from motekeep.edges.shelf import Shelf
from motekeep.edges.signers import Signers
from motekeep.instant import Instant, from_rfc3339
from motekeep.loops.calibration import CalibrationFeed, Desk
from motekeep.loops.examination import Examination
from motekeep.loops.examiner import Examiner
from motekeep.loops.intake import Intake
from motekeep.loops.switch import SoakRule, Switch
from motekeep.message.calibration_record import CalibrationAnswer, CalibrationAsk, CalibrationRecord, recalled
from motekeep.message.compose import Place
from motekeep.message.documents import CalibrationOfferRequest, CalibrationStateDocument, ReadingDocument
from motekeep.message.topics import Topics
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame

NOON = from_rfc3339("2026-12-01T12:00:00Z")
BOOTED = 50_000.0
PLACE = Place("quarry", "gate")
MINUTE = 60

TEXT = """
issue = {issue}
site = "{site}"
gateway = "{gateway}"
sensor = "{sensor}"
made_at = 2026-11-20T10:00:00Z
valid_from = {valid_from}
valid_until = {valid_until}
[range]
pm2_5 = [0.0, 500.0]
{steps}
[residual]
pm2_5 = {{ u = 0.5 }}
"""
LINEAR = """
[[step]]
kind = "linear"
slope = {{ value = {slope}, u = 0.02 }}
offset = {{ value = 0.0, u = 0.1 }}
"""
GIVEN = {
    "site": "quarry", "gateway": "gate", "sensor": "north",
    "valid_from": "2026-11-20T12:00:00Z", "valid_until": "2027-11-20T00:00:00Z",
}  # fmt: skip


def document(issue: int = 1, slope: float = 0.8, *, steps: str | None = None, **changed: str) -> bytes:
    own = LINEAR.format(slope=slope) if steps is None else steps
    return TEXT.format(issue=issue, steps=own, **{**GIVEN, **changed}).encode()


def burst(slot: int, mass: float) -> bytes:
    counts = (1200.0 + slot * 7 % 13, 340.0, 62.0, 8.0, 2.0, 1.0)
    masses = (5.0, mass + slot % 2, mass + 4.0)
    return DIALECTS["bm"].encode(Frame(BM_28, masses, counts, b"", masses, revision=151))


class Book:
    """The journal's key-value side. `before` is called ahead of every commit: a crash there loses it."""

    def __init__(self) -> None:
        self.values: dict[str, str] = {}
        self.opened = True
        self.before: Callable[[], None] = lambda: None

    def recall(self, name: str) -> str | None:
        return self.values.get(name)

    def keep(self, values: Mapping[str, str], at: Instant) -> None:
        self.before()
        self.values.update(values)


class SignedGateway:
    """One sensor, `north`, with a frame every six seconds. `restart` is a crash and a new start."""

    def __init__(self, folder: Path, *, soak_s: float = 600.0, max_shift: float = 0.5, trusted: bool = True) -> None:
        self.folder = folder / "calibration"
        self.folder.mkdir(parents=True, exist_ok=True)
        self.signers_file = folder / "signers"
        self.revoked_file = folder / "revoked"
        self.revoking = False
        self.book = Book()
        self.stored: list[ReadingDocument] = []
        self.trusted = trusted
        self.mass = 10.0
        self.now = 0
        self._rule = SoakRule(max_shift, soak_s)
        self.restart()

    def restart(self) -> None:
        self.posted: list[str] = []
        self.pipeline = Pipeline(PLACE, MINUTE, [SensorSetup("north", DIALECTS["bm"], 6.0)], self.at())
        self.pipeline.resume({"north": len(self.stored) + 1}, {}, self.at())
        intake = Intake(self.pipeline)
        self.shelf = Shelf(self.folder, "quarry", "gate")
        signers = Signers(self.signers_file, self.revoked_file if self.revoking else None)
        self.switch = Switch(self.shelf, intake, self.book, self._rule)
        examination = Examination(PLACE, signers, self.last_day, self._rule.max_shift)
        self.examiner = Examiner(examination, self.switch.record, FakeClock(), Event())
        self.spool = CalibrationSpool(self.folder)
        topics = Topics("motekeep", "quarry", "gate")
        desk = Desk(PLACE, topics, signers, self.switch, self.book, self.examiner, self.spool, self._post)
        self.feed = CalibrationFeed(self.shelf, ["north"], intake, desk)

    def _post(self, topic: str, body: str) -> None:
        assert topic == "motekeep/quarry/gate/calibration/north/state"
        self.posted.append(body)

    def at(self) -> Instant:
        return Instant(NOON + self.now, BOOTED + self.now, "boot", self.trusted)

    def last_day(self, sensor: str) -> Iterator[ReadingDocument]:
        return iter([reading for reading in self.stored if reading.sensor == sensor][-1440:])

    def run(self, seconds: int) -> list[ReadingDocument]:
        """The readings of so many seconds."""
        made: list[ReadingDocument] = []
        for _ in range(seconds):
            if self.now % 6 == 3:
                self.pipeline.receive("north", burst(self.now // 6, self.mass), self.at())
            self.pipeline.advance(self.at())
            new = self.pipeline.harvest().readings
            self.stored += new
            made += new
            self.feed.turn(self.at(), new)
            self.examiner.turn(self.at())
            self.now += 1
        return made

    def live(self, minutes: int) -> None:
        """Minutes of readings with nobody asking for anything: the history that documents are rehearsed on."""
        for _ in range(10 * minutes):
            self.pipeline.receive("north", burst(self.now // 6, self.mass), self.at())
            self.now += 6
        self.pipeline.advance(self.at())
        self.stored += self.pipeline.harvest().readings

    # -- what people and brokers do -------------------------------------------------------------------------------

    def trust(self, *lines: str) -> None:
        self.signers_file.write_text("".join(lines))

    def offer(self, text: bytes, signature: bytes, seconds: int = 4) -> CalibrationStateDocument:
        """On the topic; the state some seconds later."""
        body = CalibrationOfferRequest(document=text.decode(), signature=signature.decode())
        return self.offer_payload(body.json_text().encode(), seconds)

    def offer_payload(self, payload: bytes, seconds: int = 4) -> CalibrationStateDocument:
        self.examiner.offer("north", payload)
        self.run(seconds)
        return self.state

    def signed(self, key: Key, text: bytes) -> CalibrationStateDocument:
        return self.offer(text, key.sign(text))

    def put(self, text: bytes, signature: bytes | None = None) -> None:
        """By hand, into the folder."""
        if signature is not None:
            (self.folder / "north.toml.sig").write_bytes(signature)
        beside = self.folder / "new"
        beside.write_bytes(text)
        beside.replace(self.folder / "north.toml")

    def ask(self, **asked: Any) -> CalibrationAnswer:  # Any: fields of the model, which judges them
        ticket = self.spool.put(CalibrationAsk(sensor="north", **asked).json_text().encode())
        self.run(4)
        body = self.spool.answer_to(ticket)
        assert body is not None
        return CalibrationAnswer.model_validate_json(body)

    # -- what can be seen -----------------------------------------------------------------------------------------

    @property
    def state(self) -> CalibrationStateDocument:
        return CalibrationStateDocument.model_validate_json(self.posted[-1])

    @property
    def record(self) -> CalibrationRecord:
        found = recalled(self.book.values.get("calibration/north"))
        assert found is not None
        return found

    @property
    def in_force(self) -> int | None:
        """The issue that readings are made with."""
        calibration = self.pipeline.accounts()["north"].calibration
        return None if calibration is None else calibration[0]

    @property
    def front(self) -> bytes | None:
        path = self.folder / "north.toml"
        return path.read_bytes() if path.exists() else None
