"""The one pipeline, shared by the readers, the inbox and the recorder, behind one lock.

Owns the lock; what happens under it is a few microseconds of pure work a frame, never I/O: a slow commit must not
reach a serial reader.
"""

from collections.abc import Callable, Iterable, Mapping
from threading import Lock

from motekeep.health.check import LineState
from motekeep.health.finding import Finding
from motekeep.health.gateway import GatewayFacts
from motekeep.instant import Instant
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.interval import Climate
from motekeep.message.documents import ReadingDocument, ServiceDocument
from motekeep.message.health import SensorAccount
from motekeep.pipeline import Harvest, Pipeline


class Intake:
    def __init__(self, pipeline: Pipeline) -> None:
        self._pipeline = pipeline
        self._lock = Lock()

    def receive(self, sensor: str, data: bytes, at: Instant) -> None:
        with self._lock:
            self._pipeline.receive(sensor, data, at)

    def line(self, sensor: str, state: LineState, at: Instant, why: str = "") -> None:
        with self._lock:
            self._pipeline.line(sensor, state, at, why)

    def active_check(self, sensor: str, at: Instant) -> bool:
        """Whether the sensor is to be put to sleep now, for an active check; asking counts as beginning it."""
        with self._lock:
            return self._pipeline.active_check(sensor, at)

    def climate(self, sensor: str, climate: Climate, at: Instant) -> None:
        with self._lock:
            self._pipeline.climate(sensor, climate, at)

    def service(self, record: ServiceDocument, at: Instant) -> None:
        with self._lock:
            self._pipeline.record_service(record, at)

    def resume(self, next_seq: Callable[[str], int], kept: Callable[[str], str | None], at: Instant) -> None:
        """Go on where the journal says that the last life ended."""
        with self._lock:
            memory = {key: text for key in self._pipeline.kept_names if (text := kept(key)) is not None}
            self._pipeline.resume({name: next_seq(name) for name in self._pipeline.sensors}, memory, at)

    def harvest(self, at: Instant, facts: GatewayFacts | None = None) -> Harvest:
        """Everything that is finished by `at`."""
        with self._lock:
            self._pipeline.advance(at)
            if facts is not None:
                self._pipeline.gateway(facts, at)
            return self._pipeline.harvest()

    def finish(self, at: Instant) -> Harvest:
        """Everything, the span under way included."""
        with self._lock:
            self._pipeline.finish(at)
            return self._pipeline.harvest()

    def findings(self) -> Mapping[str | None, list[Finding]]:
        with self._lock:
            return self._pipeline.findings()

    def accounts(self) -> Mapping[str, SensorAccount]:
        with self._lock:
            return self._pipeline.accounts()

    def calibrate(self, sensor: str, document: CalibrationDocument | None, *, damaged: bool = False) -> None:
        with self._lock:
            self._pipeline.calibrate(sensor, document, damaged=damaged)

    def remember(self, sensor: str, stored: Iterable[ReadingDocument]) -> None:
        with self._lock:
            self._pipeline.remember(sensor, stored)
