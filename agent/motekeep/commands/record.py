"""`capture`: what comes from the ports, burst by burst, as a replayable text file."""

import gzip
import sys
import time
from pathlib import Path
from queue import Empty, Queue
from threading import Event, Thread
from typing import IO, cast

import click

from motekeep.capture import FrameRecord, format_record
from motekeep.config import Config, Sensor
from motekeep.edges.clock import SystemClock
from motekeep.edges.serial_line import open_line
from motekeep.errors import CaptureError, PortError
from motekeep.loops.reader import Rhythm
from motekeep.wire.dialects import DIALECTS

WAITING_BURSTS = 10_000  # some minutes of 16 sensors: a disk that slow is told, not waited for


def record(config: Config, seconds: float, out: Path) -> bool:
    """Record for `seconds`; whether every sensor was heard. Raises PortError when a port cannot be opened."""
    bursts: Queue[FrameRecord | PortError] = Queue(WAITING_BURSTS)
    stop = Event()
    threads = [
        Thread(target=_read, args=(sensor, bursts, stop), name=f"capture-{sensor.name}", daemon=True)
        for sensor in config.sensor
    ]
    heard = {sensor.name: 0 for sensor in config.sensor}
    end = time.monotonic() + seconds
    try:
        with _open(out) as file:
            file.write(f"# capture of site {config.site}, gateway {config.gateway}\n")
            for thread in threads:
                thread.start()
            while (left := end - time.monotonic()) > 0:
                _tell(heard, left)
                try:
                    burst = bursts.get(timeout=min(left, 1.0))
                except Empty:
                    continue
                if isinstance(burst, PortError):
                    raise burst
                heard[burst.sensor] += 1
                file.write(format_record(burst) + "\n")
    except OSError as error:
        raise CaptureError(f"writing {out}", str(error), "name a file in a folder that exists and has room") from error
    finally:
        stop.set()
    _tell(heard, 0.0, last=True)
    return all(heard.values())


def _open(out: Path) -> IO[str]:
    return cast("IO[str]", gzip.open(out, "wt")) if out.suffix == ".gz" else out.open("w", encoding="ascii")


def _read(sensor: Sensor, bursts: "Queue[FrameRecord | PortError]", stop: Event) -> None:
    dialect = DIALECTS[sensor.dialect]
    clock = SystemClock()
    try:
        line = open_line(sensor.port, dialect.baud, dialect.longest)
        if dialect.start:
            line.write(dialect.start)
        rhythm = Rhythm(dialect, sensor.period, None, clock.now().boot_s)
        while not stop.is_set():
            now = clock.now()
            if rhythm.next(now.boot_s) == "poll":
                line.write(dialect.commands.read or b"")
            data = line.read(rhythm.patience(now.boot_s))
            if data:
                bursts.put(FrameRecord(clock.now().utc, sensor.name, data))
    except PortError as error:
        bursts.put(error)


def _tell(heard: dict[str, int], left: float, *, last: bool = False) -> None:
    text = ", ".join(f"{name} {count} bursts" for name, count in heard.items())
    if last:
        click.echo(f"recorded: {text}", err=True)
    elif sys.stderr.isatty():
        click.echo(f"\r{left:5.0f} s left: {text} ", nl=False, err=True)
