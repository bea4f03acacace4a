"""`check`: line by line what would stop the daemon from working.

Owns the list of what is looked at and the words. Changes nothing: no file is made, no retained message is left.
"""

import os
import time
from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path

import click

from motekeep.app import broker_settings
from motekeep.config import Config, FileClimate, Sensor
from motekeep.edges.broker import MqttBroker
from motekeep.edges.climate import SysfsClimate
from motekeep.edges.clock import SystemClock
from motekeep.edges.host import Host
from motekeep.edges.ports import Connected, Disconnected, SubscriptionRefused
from motekeep.edges.serial_line import open_line
from motekeep.edges.signers import check_files, count_keys, trust_files, why_no_program
from motekeep.errors import BrokerError, ClimateError, PortError, SignersError
from motekeep.loops.reader import Rhythm
from motekeep.message.topics import Topics
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from motekeep.wire.garbage import Kind, explain

BROKER_S = 20.0  # a name look-up, a TLS handshake and a slow modem
BURSTS_BYTES = 65536


@dataclass(frozen=True, slots=True)
class Line:
    """One thing looked at. `level` is ok, warn (works, but read it) or bad (would stop the daemon from working)."""

    level: str
    what: str
    said: str


def check(config: Config, seconds: float) -> bool:
    """Print every line; whether none is bad."""
    click.echo(f"ok    config: site {config.site}, gateway {config.gateway}, {len(config.sensor)} sensors")
    well = True
    for line in _lines(config, seconds):
        click.echo(f"{line.level:<5} {line.what}: {line.said}")
        well = well and line.level != "bad"
    return well


def _lines(config: Config, seconds: float) -> Iterator[Line]:
    for sensor in config.sensor:
        yield from _sensor(sensor, seconds)
        yield from _climate(sensor)
    yield _clock(config)
    yield from _store(config)
    yield _signers(config)
    yield from _broker(config)


def _sensor(sensor: Sensor, seconds: float) -> Iterator[Line]:
    what, dialect = f"sensor {sensor.name}", DIALECTS[sensor.dialect]
    try:
        line = open_line(sensor.port, dialect.baud, dialect.longest)
    except PortError as error:
        holders = Host().holders(sensor.port) if "://" not in sensor.port else []
        if any(holder.command.startswith("motekeep") for holder in holders):
            yield Line("ok", what, "held by the running daemon; `motekeep status` says how it is")
        else:
            yield Line("bad", what, str(error))
        return
    heard, frames = b"", 0
    try:
        line.write(dialect.start)
        decoder = dialect.decoder()
        rhythm = Rhythm(dialect, sensor.period, None, time.monotonic())
        end = time.monotonic() + seconds
        while time.monotonic() < end and len(heard) < BURSTS_BYTES:
            if rhythm.next(time.monotonic()) == "poll":
                line.write(dialect.commands.read or b"")
            data = line.read(min(rhythm.patience(time.monotonic()), 1.0))
            heard += data
            frames += sum(isinstance(event, Frame) for event in decoder.feed(data))
    except PortError as error:
        yield Line("bad", what, str(error))
        return
    finally:
        line.close()
    yield _heard(what, sensor, seconds, heard, frames)
    if sensor.mounting == "optics-up":
        yield Line("warn", what, "mounted optics-up: dust settles on the detector; turn it optics-down where you can")


def _heard(what: str, sensor: Sensor, seconds: float, heard: bytes, frames: int) -> Line:
    told = explain(heard, sensor.dialect, DIALECTS[sensor.dialect].baud)
    if told.kind is not Kind.FRAMES:
        return Line("bad", what, f"{told.kind.value} ({told.confidence:.0%} sure): {told.reason}")
    due = seconds / sensor.period
    if frames < 0.5 * due:
        return Line(
            "warn", what, f"{frames} frames in {seconds:.0f} s, {due:.0f} were due; set period to what it sends"
        )
    return Line("ok", what, f"{frames} frames in {seconds:.0f} s, dialect {sensor.dialect}")


def _climate(sensor: Sensor) -> Iterator[Line]:
    if not isinstance(sensor.climate, FileClimate):
        return
    try:
        climate = SysfsClimate(sensor.climate.path).read()
    except ClimateError as error:
        yield Line("bad", f"climate of {sensor.name}", str(error))
    else:
        warm = "" if climate.temperature_c is None else f", {climate.temperature_c:.1f} Cel"
        yield Line("ok", f"climate of {sensor.name}", f"{climate.rh_pct:.0f} % RH{warm}")


def _clock(config: Config) -> Line:
    clock = SystemClock(trust_rtc=config.store.trust_rtc)
    now = datetime.fromtimestamp(clock.now().utc, UTC).strftime("%Y-%m-%d %H:%M:%S UTC")
    voucher = clock.voucher()
    if voucher is None:
        return Line(
            "warn",
            "clock",
            f"{now}, vouched for by no time service; readings go out unsynced after {config.store.clock_wait:.0f} s",
        )
    return Line("ok", "clock", f"{now}, by {voucher.value}")


def _store(config: Config) -> Iterator[Line]:
    path = config.store.path
    folder = _existing(path.parent)
    if folder != path.parent:
        yield Line("bad", "store", f"the folder {path.parent} does not exist; make it, or mend [store] path")
        return
    if not os.access(folder, os.W_OK) or (path.exists() and not os.access(path, os.W_OK)):
        yield Line("bad", "store", f"{path} is not writable for this user; run as root, or give the folder to motekeep")
        return
    disk = Host().disk(folder)
    if disk is None:
        yield Line("warn", "store", f"the disk of {folder} cannot be asked for its free space")
    elif disk.free < config.store.max_bytes:
        yield Line(
            "warn",
            "store",
            f"{disk.free / 1e6:.0f} MB free, less than [store] max_bytes ({config.store.max_bytes / 1e6:.0f} MB)",
        )
    else:
        yield Line("ok", "store", f"{path}, {disk.free / 1e6:.0f} MB free")


def _existing(folder: Path) -> Path:
    return folder if folder.is_dir() else _existing(folder.parent)


def _signers(config: Config) -> Line:
    """Without signers documents are taken unsigned: that works, and whoever can write to the folder decides."""
    calibration = config.calibration
    allowed, revoked = trust_files(calibration.signers, calibration.revoked)
    if not allowed.exists():
        said = (
            f"there is no {allowed}; offers are refused, and documents put into {calibration.folder} are not verified"
        )
        return Line("bad" if calibration.required else "warn", "signers", said)
    if why := check_files(allowed, revoked) or why_no_program():
        return Line("bad", "signers", why)
    try:
        keys = count_keys(allowed)
    except SignersError as error:
        return Line("bad", "signers", str(error))
    if not keys:
        return Line("bad", "signers", f"{allowed} holds no key; add one with `moteferry signers add`")
    told = "" if revoked is None else f", revoked by {revoked}"
    return Line("ok", "signers", f"{keys} {'key' if keys == 1 else 'keys'} in {allowed}{told}")


def _broker(config: Config) -> Iterator[Line]:
    broker = config.broker
    what = f"broker {broker.host}:{broker.port}"
    topics = Topics(broker.root, config.site, config.gateway)
    # not the daemon's own name: a second client of one name throws the first one out
    settings = broker_settings(
        config, f"motekeep-check-{config.site}-{config.gateway}-{os.getpid()}", (f"{topics.health}/check", "")
    )
    link = MqttBroker(settings, SystemClock())
    try:
        link.start()
        end = time.monotonic() + BROKER_S
        while (left := end - time.monotonic()) > 0:
            event = link.event(min(left, 1.0))
            if isinstance(event, Disconnected):
                yield Line("bad", what, event.why)
                return
            if isinstance(event, Connected):
                tls = ", with TLS" if broker.tls else ", in clear"
                yield Line("ok", what, f"MQTT 5{tls}, at most {event.receive_maximum} messages in flight")
                event = link.event(2.0)
                if isinstance(event, SubscriptionRefused):
                    yield Line("warn", what, f"may not subscribe to {event.topic_filter}: {event.why}")
                return
        yield Line("bad", what, f"no answer in {BROKER_S:.0f} s; look at the network")
    except BrokerError as error:
        yield Line("bad", what, str(error))
    finally:
        link.stop(None, 1.0)
