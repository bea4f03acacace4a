"""Feeds climate from the gateway's own sensors into the pipeline, every quarter of a minute.

Owns the pace. Has no thread: the supervisor turns it.
"""

from collections.abc import Callable, Mapping

import structlog

from motekeep.errors import ClimateError
from motekeep.instant import Instant
from motekeep.loops.backoff import Backoff
from motekeep.loops.intake import Intake
from motekeep.measure.interval import Climate

log = structlog.get_logger()

EVERY_S = 15.0  # four looks a minute: humidity indoors and out moves slower than that


class ClimateFeed:
    """`sources` gives each sensor's reader; one that fails is tried again with backoff, the others go on."""

    def __init__(self, sources: Mapping[str, Callable[[], Climate]], intake: Intake) -> None:
        self._sources = sources
        self._intake = intake
        self._due = dict.fromkeys(sources, float("-inf"))
        self._trouble = {sensor: Backoff(log, "climate", sensor=sensor) for sensor in sources}

    def turn(self, at: Instant) -> None:
        for sensor, read in self._sources.items():
            if at.boot_s < self._due[sensor]:
                continue
            try:
                climate = read()
            except ClimateError as error:
                self._due[sensor] = at.boot_s + self._trouble[sensor].failed(error, at.boot_s)
                continue
            self._trouble[sensor].recovered()
            self._due[sensor] = at.boot_s + EVERY_S
            self._intake.climate(sensor, climate, at)
