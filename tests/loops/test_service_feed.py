"""Service records on their way from the spool to the journal: each counts once, whatever happens in between."""

from pathlib import Path

import pytest
from structlog.testing import capture_logs

from clocks import MORNING, FakeClock
from journal_site import TOPICS
from motekeep.edges.capture_folder import CaptureFolder
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.journal_view import JournalView
from motekeep.edges.ports import JournalWriter, StoreState
from motekeep.edges.service_spool import ServiceSpool
from motekeep.errors import StoreError
from motekeep.health.gateway import GatewayFacts
from motekeep.instant import Instant, rfc3339
from motekeep.loops.intake import Intake
from motekeep.loops.recorder import Recorder, RecorderSettings
from motekeep.loops.service import ServiceFeed, ServiceFeedSettings
from motekeep.message.compose import Place
from motekeep.message.documents import LinkHealth, ServiceDocument
from motekeep.message.health import Life
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from service_records import record

BM = DIALECTS["bm"]
PLACE = Place("quarry", "east-gate")


class Outlet:
    def wake(self) -> None:
        pass

    def post(self, topic: str, body: str) -> None:
        pass


class Gateway:
    """Feed, pipeline, recorder and journal of one life of the daemon over a folder, turned once a second."""

    def __init__(self, folder: Path, clock: FakeClock) -> None:
        self.folder, self.clock = folder, clock
        self.path = folder / "journal.db"
        self.spool = ServiceSpool(self.path)
        self.store_there = True
        now = clock.now()
        self.pipeline = Pipeline(PLACE, 60, [SensorSetup(name, BM) for name in ("north", "south")], now)
        intake = Intake(self.pipeline)
        settings = RecorderSettings(PLACE, TOPICS, 60.0, Life(0, now.boot_s, "0"))
        self.recorder = Recorder(
            settings, intake, self._open, Outlet(), lambda: None, self._facts, captures=CaptureFolder(folder)
        )
        feed_settings = ServiceFeedSettings(PLACE, ("north", "south"))
        self.feed = ServiceFeed(feed_settings, self.spool, intake, self.recorder.has_service)
        self._slot = 0

    def _open(self) -> JournalWriter:
        if not self.store_there:
            raise StoreError("opening the journal", "no disk", "put it in")
        self.journal = Journal(JournalSettings(self.path, TOPICS), self.clock)
        return self.journal

    def _facts(self, store: StoreState, at: Instant) -> tuple[GatewayFacts, LinkHealth]:
        return GatewayFacts(clock_trusted=at.trusted), LinkHealth(since=None, reconnects=0, refused=0)

    def turn(self, seconds: int = 1) -> None:
        for _ in range(seconds):
            self.clock.advance(1.0)
            at = self.clock.now()
            self._slot += 1
            counts = (1200.0 + self._slot * 7 % 13, 340.0, 62.0, 8.0, 2.0, 1.0)
            data = BM.encode(Frame(BM_28, (5.0, 8.0, 900.0), counts, b"", (5.0, 8.0, 900.0), revision=151))
            for name in ("north", "south"):
                self.pipeline.receive(name, data, at)
            self.feed.turn(at)
            self.recorder.turn(at)

    def die(self) -> None:
        """The process is gone where it stands; nothing more is written."""
        self.journal._file.close()
        self.journal._file.release()

    def stop(self) -> None:
        self.recorder.finish(self.clock.now())
        self.recorder.close(self.clock.now())

    def records(self) -> list[ServiceDocument]:
        with JournalView(self.path) as view:
            return [ServiceDocument.model_validate_json(body) for body in view.services()]

    def published(self) -> list[ServiceDocument]:
        notices = self.journal.reader().notices(0, 1000)
        return [ServiceDocument.model_validate_json(n.body) for n in notices if n.topic == TOPICS.service]


@pytest.fixture
def clock() -> FakeClock:
    return FakeClock(MORNING + 1800.0, boot_s=5000.0, boot_id="b" * 32)


@pytest.fixture
def gateway(tmp_path: Path, clock: FakeClock) -> Gateway:
    return Gateway(tmp_path, clock)


def test_a_record_is_journalled_published_and_gone_from_the_spool_within_five_seconds(gateway: Gateway) -> None:
    gateway.turn(3)
    gateway.spool.put(record(note="dry air"))
    gateway.turn(5)
    assert gateway.records() == gateway.published() == [record(note="dry air")]
    assert gateway.spool.waiting() == []


def test_it_takes_effect_on_the_sensor_it_is_for_and_on_no_other(gateway: Gateway) -> None:
    gateway.turn(600)
    before = gateway.pipeline.accounts()
    gateway.spool.put(record(at=rfc3339(gateway.clock.now().utc)))
    gateway.turn(5)
    after = gateway.pipeline.accounts()
    assert before["north"].dust_dose_ug > 0.5
    assert after["north"].dust_dose_ug < 0.1 * before["north"].dust_dose_ug
    assert after["south"].dust_dose_ug >= before["south"].dust_dose_ug


def test_what_it_changed_is_durable_with_it(gateway: Gateway, tmp_path: Path, clock: FakeClock) -> None:
    gateway.turn(700)
    gateway.spool.put(record(at=rfc3339(clock.now().utc)))
    gateway.turn(3)
    gateway.die()
    again = Gateway(tmp_path, clock)
    again.turn(1)
    assert again.pipeline.accounts()["north"].dust_dose_ug < 0.1
    assert again.pipeline.accounts()["south"].dust_dose_ug > 0.5


def test_a_crash_between_commit_and_removal_does_not_double_it(
    gateway: Gateway, tmp_path: Path, clock: FakeClock, monkeypatch: pytest.MonkeyPatch
) -> None:
    gateway.spool.put(record())
    monkeypatch.setattr(gateway.spool, "remove", lambda _: None)
    gateway.turn(6)
    gateway.die()
    assert len(gateway.spool.waiting()) == 1
    again = Gateway(tmp_path, clock)
    again.turn(6)
    assert again.spool.waiting() == []
    assert again.records() == again.published() == [record()]


def test_a_crash_before_the_commit_leaves_it_waiting_and_the_next_life_takes_it(
    gateway: Gateway, tmp_path: Path, clock: FakeClock
) -> None:
    gateway.turn(3)
    gateway.spool.put(record())
    clock.advance(5.0)
    gateway.feed.turn(clock.now())  # given to the pipeline, which dies with it
    gateway.die()
    again = Gateway(tmp_path, clock)
    again.turn(6)
    assert again.records() == again.published() == [record()]
    assert again.spool.waiting() == []


def test_without_a_journal_it_waits_and_is_taken_when_there_is_one(gateway: Gateway) -> None:
    gateway.store_there = False
    gateway.spool.put(record())
    gateway.turn(10)
    assert len(gateway.spool.waiting()) == 1
    gateway.store_there = True
    gateway.turn(60)
    assert gateway.records() == [record()]


def test_what_is_not_for_this_gateway_or_names_no_sensor_is_refused_once_and_the_rest_goes_on(
    gateway: Gateway,
) -> None:
    gateway.spool.put(record("00000001-00000000", gateway="west-gate"))
    gateway.spool.put(record("00000002-00000000", sensor="nroth"))
    gateway.spool.put(record("00000003-00000000"))
    (gateway.spool.folder / "00000004.json").write_text("rubbish")
    with capture_logs() as logs:
        gateway.turn(20)
    refused = [str(line["error"]) for line in logs if line["event"] == "service.refused"]
    assert len(refused) == 3
    assert "quarry/west-gate" in refused[0]
    assert "'nroth'" in refused[1]
    assert "00000004.json" in refused[2]
    assert [r.id for r in gateway.records()] == ["00000003-00000000"]


def test_two_records_of_one_sensor_are_two(gateway: Gateway) -> None:
    gateway.spool.put(record("00000001-00000000"))
    gateway.spool.put(record("00000002-00000000", kind="fan-replaced"))
    gateway.turn(5)
    assert [r.kind for r in gateway.records()] == ["cleaned", "fan-replaced"]


def test_a_record_of_an_unsynced_clock_is_stamped_from_this_boots_offset(gateway: Gateway, clock: FakeClock) -> None:
    wrong = rfc3339(1_700_000_000.0)
    gateway.spool.put(record(at=wrong, entered=wrong, clock="unsynced", boot_s=4990.0))
    gateway.turn(5)
    [kept] = gateway.records()
    assert kept.clock == "corrected"
    assert kept.at == kept.entered == rfc3339(MORNING + 1790.0)


def test_one_of_another_boot_keeps_its_doubtful_time_and_says_so(gateway: Gateway) -> None:
    wrong = rfc3339(1_700_000_000.0)
    gateway.spool.put(record(at=wrong, entered=wrong, clock="unsynced", boot="c" * 32))
    gateway.turn(5)
    assert [(r.clock, r.at) for r in gateway.records()] == [("unsynced", wrong)]


def test_records_outlive_a_damaged_journal(gateway: Gateway, tmp_path: Path, clock: FakeClock) -> None:
    gateway.spool.put(record())
    gateway.turn(120)
    gateway.stop()
    with gateway.path.open("r+b") as file:
        file.write(bytes(100))
    again = Gateway(tmp_path, clock)
    again.turn(1)
    assert again.journal.state().degraded is not None
    assert again.records() == [record()]
