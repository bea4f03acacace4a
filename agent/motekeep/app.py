"""The composition root: from a configuration to a running daemon.

Owns which edge meets which loop. Nothing here decides anything about data.
"""

import logging
import os
import signal
import sys
from collections.abc import Callable, Iterator
from functools import partial
from pathlib import Path
from threading import Event
from typing import Any

import structlog

from motekeep import __version__
from motekeep.config import Config, FileClimate, FixedClimate, FrameClimate, Sensor, TopicClimate, load
from motekeep.edges.broker import MqttBroker
from motekeep.edges.calibration_spool import CalibrationSpool
from motekeep.edges.capture_folder import CaptureFolder
from motekeep.edges.climate import SysfsClimate
from motekeep.edges.clock import SystemClock
from motekeep.edges.host import Host
from motekeep.edges.journal import Journal, JournalSettings
from motekeep.edges.login import BrokerSettings, Tls
from motekeep.edges.ports import Clock, JournalWriter, Line
from motekeep.edges.serial_line import open_line
from motekeep.edges.service_spool import ServiceSpool
from motekeep.edges.shelf import Shelf
from motekeep.edges.signers import Signers
from motekeep.edges.systemd import ServiceManager, secret_file
from motekeep.errors import ConfigError, StoreError
from motekeep.instant import Instant
from motekeep.loops.backoff import Backoff
from motekeep.loops.calibration import CalibrationFeed, Desk
from motekeep.loops.climate import ClimateFeed
from motekeep.loops.examination import Examination
from motekeep.loops.examiner import Examiner
from motekeep.loops.facts import Facts
from motekeep.loops.housekeeping import Housekeeping
from motekeep.loops.inbox import Other, Standing, down_filters
from motekeep.loops.intake import Intake
from motekeep.loops.late_journal import LateJournal
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.reader import Reader, ReaderSettings
from motekeep.loops.recorder import Recorder, RecorderSettings
from motekeep.loops.rows import RowSettings
from motekeep.loops.service import ServiceFeed, ServiceFeedSettings
from motekeep.loops.supervisor import Hand, Supervisor
from motekeep.loops.switch import SoakRule, Switch
from motekeep.measure.account import Limits
from motekeep.measure.climate import FIXED, from_message
from motekeep.measure.hourly import HOUR_S, WINDOW_HOURS
from motekeep.measure.interval import Climate
from motekeep.message.compose import Place
from motekeep.message.documents import ReadingDocument, health_offline
from motekeep.message.health import Life
from motekeep.message.topics import Topics
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.dialects import DIALECTS

log = structlog.get_logger()

PRUNE_EVERY_S = 3600.0
ROWS_A_PAGE = 200  # some 100 kB at a time
BUSY_S = 60.0  # checking a journal goes on in steps of less than a second; a minute more is asked for with each
CONFIG_LOOK_S = 10.0
# A rehearsal reads every reading of a day of minutes; of more, every second, third ... one is as good.
MOST_REHEARSED = 1440
DAY_S = 86400
WILL_DELAY_S = 10  # forgives a link that is back at once; from afar ten seconds more are nothing


def sensor_setups(config: Config) -> list[SensorSetup]:
    """The sensors of a configuration as the pipeline knows them, live and in replay."""
    return [
        SensorSetup(
            name=sensor.name,
            dialect=DIALECTS[sensor.dialect],
            period_s=sensor.period,
            twin=sensor.twin or next((s.name for s in config.sensor if s.twin == sensor.name), None),
            flow_l_min=sensor.flow,
            frame_climate=isinstance(sensor.climate, FrameClimate),
            climate_max_age_s=_climate_max_age_s(sensor),
            limits=_limits(sensor, config),
            active_a_day=config.health.active if _alone(sensor, config) else 0.0,
        )
        for sensor in config.sensor
    ]


def _alone(sensor: Sensor, config: Config) -> bool:
    """Whether only an active check shows its fan: a duty cycle has wakes enough, and a twin tells it in a day."""
    twinned = sensor.twin is not None or any(other.twin == sensor.name for other in config.sensor)
    return sensor.duty is None and not twinned


def _limits(sensor: Sensor, config: Config) -> Limits:
    """Dust settles on a detector that looks up: common practice, no source, is to clean it twice as often."""
    halved = sensor.mounting == "optics-up"
    return Limits(
        dose_ug=sensor.limits.dose_ug / 2 if halved else sensor.limits.dose_ug,
        laser_hours=sensor.limits.laser_hours,
        calibration_required=config.calibration.required,
        halved=halved,
    )


def _climate_max_age_s(sensor: Sensor) -> float:
    match sensor.climate:
        case FileClimate(max_age=max_age) | TopicClimate(max_age=max_age):
            return max_age
        case FixedClimate():
            return float("inf")
    return 900.0


class Daemon:
    """Everything of one configuration, wired. `run` returns the exit code once `stop` is set.

    `alive` is called every second while every loop makes progress, `busy` while a large journal is being checked.
    """

    def __init__(
        self,
        config: Config,
        clock: Clock,
        stop: Event,
        alive: Callable[[], None] = lambda: None,
        busy: Callable[[], None] = lambda: None,
    ) -> None:
        now = clock.now()
        place = Place(config.site, config.gateway)
        topics = Topics(config.broker.root, config.site, config.gateway)
        names = [sensor.name for sensor in config.sensor]
        self._config = config
        self._clock = clock
        self._busy = busy
        self._store: Journal | None = None
        self._intake = intake = Intake(Pipeline(place, config.interval, sensor_setups(config), now))
        self._journal = LateJournal(str(config.store.path))
        shelf = Shelf(config.calibration.folder, config.site, config.gateway)
        signers = Signers(config.calibration.signers, config.calibration.revoked)
        examination = Examination(place, signers, self._last_day, config.calibration.max_shift)
        examiner = Examiner(examination, lambda sensor: switch.record(sensor), clock, stop)  # noqa: PLW0108 (comes later)
        client_id = f"motekeep-{config.site}-{config.gateway}"
        offline = health_offline(config.site, config.gateway, now.boot_id).json_text()
        self._publisher = Publisher(
            _publisher_settings(config),
            topics,
            names,
            journal=self._journal,
            broker=MqttBroker(broker_settings(config, client_id, (topics.health, offline)), clock),
            clock=clock,
            stop=stop,
            farewell=lambda at: health_offline(config.site, config.gateway, at.boot_id).json_text(),
            others={**_climate_topics(config, intake, clock), **_offer_topics(topics, names, examiner)},
        )
        self._recorder = Recorder(
            RecorderSettings(place, topics, config.health.every, Life(0, now.boot_s, __version__)),
            intake,
            lambda: self._open_journal(config, topics),
            self._publisher,
            self._remember,
            Facts(Host(), config.store.path, self._publisher.facts),
            captures=CaptureFolder(config.store.path.parent),
        )
        rule = SoakRule(config.calibration.max_shift, config.calibration.soak)
        switch = Switch(shelf, intake, self._recorder, rule)
        asked = CalibrationSpool(config.calibration.folder)
        desk = Desk(place, topics, signers, switch, self._recorder, examiner, asked, self._publisher.post)
        self._calibration = CalibrationFeed(shelf, names, intake, desk)
        spool = ServiceSpool(config.store.path)
        self._service = ServiceFeed(ServiceFeedSettings(place, names), spool, intake, self._recorder.has_service)
        self._climate = _climate_feed(config, intake, now)
        self._housekeeping = Housekeeping({"prune": (PRUNE_EVERY_S, self._recorder.prune_soon)})
        readers = [Hand(f"reader-{s.name}", _reader(s, intake, clock, stop)) for s in config.sensor]
        hands = [Hand("publisher", self._publisher), Hand("examiner", examiner), *readers]
        self._supervisor = Supervisor(hands, self._turn, alive, clock, stop)

    def run(self) -> int:
        self._housekeeping.start()
        code = self._supervisor.run(self._stopping)
        self._recorder.close(self._clock.now())
        self._housekeeping.stop()
        return code

    def _turn(self, at: Instant) -> None:
        self._climate.turn(at)
        self._service.turn(at)
        self._housekeeping.watch(at)
        made = self._recorder.turn(at)
        self._calibration.turn(at, made)

    def _stopping(self) -> None:
        self._recorder.finish(self._clock.now())
        self._publisher.wake()

    def _open_journal(self, config: Config, topics: Topics) -> JournalWriter:
        store = config.store
        settings = JournalSettings(store.path, topics, store.keep_days, store.max_bytes, store.clock_wait)
        journal = Journal(settings, self._clock, self._busy)
        self._store = journal
        self._journal.attach(journal.reader())
        return journal

    def _last_day(self, sensor: str) -> Iterator[ReadingDocument]:
        """A sensor's readings of its last day of measuring, in any thread. Raises StoreError without a journal."""
        if self._store is None:
            raise StoreError("rehearsing", "the journal is not open yet", "it is tried again")
        end = self._store.next_seq(sensor)
        first = max(end - DAY_S // self._config.interval, 1)
        every = -(-(end - first) // MOST_REHEARSED)
        return _readings(self._store, sensor, first, end, max(every, 1))

    def _remember(self) -> None:
        for sensor in self._config.sensor:
            assert self._store is not None  # noqa: S101 (called once the journal is open)
            self._intake.remember(sensor.name, _last_readings(self._store, sensor.name, self._config.interval))


def _last_readings(journal: Journal, sensor: str, interval_s: int) -> Iterator[ReadingDocument]:
    """The readings that hourly values may still be made of, from the journal."""
    end = journal.next_seq(sensor)
    return _readings(journal, sensor, max(end - int(WINDOW_HOURS * HOUR_S / interval_s), 1), end)


def _readings(journal: Journal, sensor: str, first: int, end: int, every: int = 1) -> Iterator[ReadingDocument]:
    """Every so many of the stored readings of a range of numbers."""
    reader = journal.reader()
    try:
        while rows := reader.stored(sensor, first, end, ROWS_A_PAGE):
            for row in rows:
                if row.seq % every == 0:
                    yield ReadingDocument.model_validate_json(row.body)
            first = rows[-1].seq + 1
    finally:
        reader.close()


def run(config_path: Path, log_style: str) -> int:
    """The command `run`: until SIGTERM or SIGINT. 0 after a clean stop, 1 when a loop crashed.

    A configuration that is not there is waited for; one that is wrong ends with ConfigError, which systemd tries again.
    """
    _set_up_logging(log_style)
    stop = Event()
    manager = ServiceManager()
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: stop.set())
    config = _wait_for_config(config_path, stop, manager)
    if config is None:
        return 0
    log.info("daemon.starting", version=__version__, site=config.site, gateway=config.gateway)
    clock = SystemClock(trust_rtc=config.store.trust_rtc)
    watched = _Watched(manager, f"{len(config.sensor)} sensors, broker {config.broker.host}:{config.broker.port}")
    code = Daemon(config, clock, stop, watched.alive, watched.busy).run()
    manager.stopping()
    log.info("daemon.stopped", code=code)
    sys.stdout.flush()
    # Threads of libraries may still hang in a network call; everything of ours is stored, so nothing waits for them.
    os._exit(code)


class _Watched:
    """What the service manager is told: ready after the first turn that went well, then that we live."""

    def __init__(self, manager: ServiceManager, status: str) -> None:
        self._manager = manager
        self._status = status
        self._ready = False

    def alive(self) -> None:
        if not self._ready:
            self._ready = True
            self._manager.ready(self._status)
        self._manager.feed_watchdog()

    def busy(self) -> None:
        if self._ready:
            self._manager.feed_watchdog()
        else:
            self._manager.extend_timeout(BUSY_S)


def _wait_for_config(path: Path, stop: Event, manager: ServiceManager) -> Config | None:
    """The configuration, waited for while the file is absent; None when told to stop meanwhile."""
    backoff = Backoff(log, "config", path=str(path))
    clock = SystemClock()
    told = False
    while not path.exists():
        error = ConfigError(f"reading {path}", "no such file", "copy config.example.toml there and edit it")
        wait_s = backoff.failed(error, clock.now().boot_s)
        if not told:
            manager.ready(f"waiting for {path}")
            told = True
        if clock.wait(stop, min(wait_s, CONFIG_LOOK_S)):
            return None
        manager.feed_watchdog()
    backoff.recovered()
    return load(path)


def _publisher_settings(config: Config) -> PublisherSettings:
    broker = config.broker
    return PublisherSettings(RowSettings(config.interval, broker.receipt, broker.late_rate), broker.window)


def broker_settings(config: Config, client_id: str, will: tuple[str, str]) -> BrokerSettings:
    """The broker of a configuration, as a client of that name meets it. Secrets that only the unit's credential folder
    would hold are read from where the unit loads them."""
    broker, tls = config.broker, config.broker.tls
    topics = Topics(broker.root, config.site, config.gateway)
    return BrokerSettings(
        host=broker.host,
        port=broker.port,
        client_id=client_id,
        will=will,
        filters=(*down_filters(topics), *_climate_sensors(config)),
        username=broker.username,
        password_file=None if broker.password_file is None else secret_file(broker.password_file),
        tls=None if tls is None else Tls(tls.ca, tls.cert, None if tls.key is None else secret_file(tls.key)),
        will_delay_s=WILL_DELAY_S,
    )


def _reader(sensor: Sensor, intake: Intake, clock: Clock, stop: Event) -> Reader:
    dialect = DIALECTS[sensor.dialect]
    duty = None if sensor.duty is None else (sensor.duty.every, sensor.duty.awake)
    settings = ReaderSettings(sensor.name, sensor.port, dialect, sensor.period, duty)

    def opener(port: str, baud: int) -> Line:
        return open_line(port, baud, dialect.longest)

    return Reader(settings, intake, opener, clock, stop)


def _climate_sensors(config: Config) -> dict[str, list[str]]:
    """The topics that bring climate, each with the sensors that it is for."""
    sensors: dict[str, list[str]] = {}
    for sensor in config.sensor:
        if isinstance(sensor.climate, TopicClimate):
            sensors.setdefault(sensor.climate.topic, []).append(sensor.name)
    return sensors


def _climate_topics(config: Config, intake: Intake, clock: Clock) -> dict[str, Callable[[bytes], None]]:
    def taker(names: list[str]) -> Callable[[bytes], None]:
        def take(payload: bytes) -> None:
            climate = from_message(payload, "mqtt")
            for name in names:
                intake.climate(name, climate, clock.now())

        return take

    return {topic: taker(names) for topic, names in _climate_sensors(config).items()}


def _offer_topics(topics: Topics, sensors: list[str], examiner: Examiner) -> dict[str, Other]:
    return {topics.calibration_offer(s): Standing(partial(examiner.offer, s)) for s in sensors}


def _climate_feed(config: Config, intake: Intake, now: Instant) -> ClimateFeed:
    """Fixed climate is set once, here; sysfs is read again and again."""
    sources = {}
    for sensor in config.sensor:
        match sensor.climate:
            case FixedClimate(rh=rh, t=t):
                intake.climate(sensor.name, Climate(rh, t, FIXED), now)
            case FileClimate(path=path):
                sources[sensor.name] = SysfsClimate(path).read
    return ClimateFeed(sources, intake)


def _set_up_logging(style: str) -> None:
    """One JSON line an event on stderr for the service manager's log, or text for people.

    Through the standard library's handlers: structlog's own printer would raise into the caller on a full disk.
    """
    logging.basicConfig(format="%(message)s", stream=sys.stderr, level=logging.INFO)
    logging.raiseExceptions = False
    logging.getLogger("apscheduler").setLevel(logging.WARNING)
    renderer: Any = (  # Any: structlog's processors share no narrower type
        structlog.processors.JSONRenderer() if style == "json" else structlog.dev.ConsoleRenderer(colors=False)
    )
    structlog.configure(
        processors=[
            structlog.processors.add_log_level,
            structlog.processors.TimeStamper(fmt="iso", utc=True),
            structlog.processors.format_exc_info,
            renderer,
        ],
        wrapper_class=structlog.make_filtering_bound_logger(logging.INFO),
        logger_factory=structlog.stdlib.LoggerFactory(),
        cache_logger_on_first_use=True,
    )
