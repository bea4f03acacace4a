"""The composition root: from a configuration to a running daemon.

Owns which edge meets which loop. Nothing here decides anything about data.
"""

import logging
import signal
import sys
from collections.abc import Callable
from pathlib import Path
from threading import Event
from typing import Any

import structlog

from motekeep import __version__
from motekeep.config import Config, FileClimate, FixedClimate, FrameClimate, Sensor, TopicClimate, load
from motekeep.edges.broker import BrokerSettings, MqttBroker, Tls
from motekeep.edges.clock import SystemClock
from motekeep.edges.host import Host
from motekeep.edges.ports import Clock, Line
from motekeep.edges.serial_line import open_line
from motekeep.edges.systemd import ServiceManager
from motekeep.errors import ConfigError
from motekeep.loops.backoff import Backoff
from motekeep.loops.intake import Intake
from motekeep.loops.publisher import Publisher, PublisherSettings
from motekeep.loops.reader import Reader, ReaderSettings
from motekeep.loops.recorder import Recorder, RecorderSettings
from motekeep.loops.supervisor import Hand, Supervisor
from motekeep.message.compose import Place
from motekeep.message.topics import Topics
from motekeep.pipeline import Pipeline, SensorSetup
from motekeep.wire.dialects import DIALECTS

log = structlog.get_logger()


def sensor_setups(config: Config) -> list[SensorSetup]:
    """The sensors of a configuration as the pipeline knows them, live and in replay."""
    return [
        SensorSetup(
            name=sensor.name,
            dialect=DIALECTS[sensor.dialect],
            period_s=sensor.period,
            frame_climate=isinstance(sensor.climate, FrameClimate),
            climate_max_age_s=_climate_max_age_s(sensor),
        )
        for sensor in config.sensor
    ]


def _climate_max_age_s(sensor: Sensor) -> float:
    match sensor.climate:
        case FileClimate(max_age=max_age) | TopicClimate(max_age=max_age):
            return max_age
        case FixedClimate():
            return float("inf")
    return 900.0
