"""Puts the calibration documents of the folder into force, at the start and when their files change.

Owns the pace and the words of a refusal. Has no thread: the supervisor turns it. A document that must not be used
changes nothing but the flag: readings go out raw, and say so.
"""

from collections.abc import Sequence
from typing import Protocol

import structlog

from motekeep.errors import DocumentError
from motekeep.instant import Instant
from motekeep.loops.intake import Intake
from motekeep.measure.document import CalibrationDocument

log = structlog.get_logger()

LOOK_EVERY_S = 30.0  # somebody who puts a file there by hand waits at most this and the rest of an interval


class Shelf(Protocol):
    """The calibration folder as `edges/shelf.py` reads it."""

    def changed(self, sensor: str) -> bool: ...

    def in_force(self, sensor: str) -> CalibrationDocument | None: ...


class CalibrationFeed:
    def __init__(self, shelf: Shelf, sensors: Sequence[str], intake: Intake) -> None:
        self._shelf = shelf
        self._sensors = sensors
        self._intake = intake
        self._due = float("-inf")

    def turn(self, at: Instant) -> None:
        if at.boot_s < self._due:
            return
        self._due = at.boot_s + LOOK_EVERY_S
        for sensor in self._sensors:
            if self._shelf.changed(sensor):
                self._switch(sensor)

    def _switch(self, sensor: str) -> None:
        try:
            document = self._shelf.in_force(sensor)
        except DocumentError as error:
            log.error("calibration.refused", sensor=sensor, error=str(error))
            self._intake.calibrate(sensor, None, damaged=True)
            return
        self._intake.calibrate(sensor, document)
        if document is not None:
            log.info("calibration.in_force", sensor=sensor, issue=document.issue, digest=document.digest)
