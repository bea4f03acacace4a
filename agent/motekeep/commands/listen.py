"""`listen`: a live table at the bench, straight from the ports. No broker, no journal, no correction.

Owns the table. The daemon must be stopped, or other ports named: two readers of one line each get half of it.
"""

import sys
import time
from dataclasses import dataclass, field
from pathlib import Path

import click

from motekeep.config import load
from motekeep.edges.clock import SystemClock
from motekeep.edges.serial_line import SerialLine, open_line
from motekeep.errors import ConfigError
from motekeep.loops.reader import Rhythm
from motekeep.message.compose import size_key
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Decoder, Dialect, Frame
from motekeep.wire.guess import guess

GUESS_S = 6.0  # a handful of frames at one a second
GUESS_BYTES = 16384
BAUDS = (9600, 115200)


@dataclass(slots=True)
class _Ear:
    """One port being listened to."""

    name: str
    dialect: Dialect
    line: SerialLine
    rhythm: Rhythm
    decoder: Decoder
    last: Frame | None = None
    good: int = 0
    bad: int = 0
    tail: bytes = field(default=b"")

    def hear(self, now_s: float) -> None:
        if self.rhythm.next(now_s) == "poll":
            self.line.write(self.dialect.commands.read or b"")
        data = self.line.read(0.05)
        if data:
            self.tail = (self.tail + data)[-16:]
        for event in self.decoder.feed(data):
            if isinstance(event, Frame):
                self.last = event
                self.good += 1
            else:
                self.bad += 1

    def row(self) -> str:
        frame = self.last
        if frame is None:
            heard = f"bytes but no frames: ...{self.tail.hex(' ')}" if self.tail else "silence"
            return f"{self.name:<12} {self.dialect.name:<11} {self.good:>6} {self.bad:>4}  {heard}"
        mass = "  ".join(f"{n} {v:g}" for n, v in zip(frame.layout.mass, frame.mass, strict=True))
        counts = "  ".join(f">{size_key(s)} {c:g}" for s, c in zip(frame.layout.sizes_um, frame.counts, strict=True))
        climate = "" if frame.rh_pct is None else f"  rh {frame.rh_pct:g} %  t {frame.temperature_c or 0:g} Cel"
        fault = f"  error bits {frame.error:#x}" if frame.error else ""
        head = f"{self.name:<12} {self.dialect.name:<11} {self.good:>6} {self.bad:>4}"
        return f"{head}  {mass} ug/m3  {counts} /dL{climate}{fault}"


def listen(config_path: Path, port: str | None, dialect: str | None, seconds: float | None) -> None:
    """Show the table until interrupted, or for `seconds`. Raises PortError when a port cannot be opened."""
    if port is not None:
        ears = [_ear("port", port, _named(dialect) if dialect else _guessed(port), 1.0)]
    else:
        ears = [_ear(s.name, s.port, DIALECTS[s.dialect], s.period) for s in load(config_path).sensor]
    end = None if seconds is None else time.monotonic() + seconds
    drawn = 0.0
    live = sys.stdout.isatty()
    click.echo(f"{'sensor':<12} {'dialect':<11} {'frames':>6} {'bad':>4}  last")
    try:
        while end is None or time.monotonic() < end:
            for ear in ears:
                ear.hear(time.monotonic())
            if time.monotonic() - drawn >= 1.0:
                if live and drawn:
                    click.echo(f"\x1b[{len(ears)}F", nl=False)
                for ear in ears:
                    click.echo(ear.row() + ("\x1b[K" if live else ""))
                drawn = time.monotonic()
    except KeyboardInterrupt:
        click.echo()
    finally:
        for ear in ears:
            ear.line.close()


def _ear(name: str, port: str, dialect: Dialect, period_s: float) -> _Ear:
    line = open_line(port, dialect.baud, dialect.longest)
    if dialect.start:
        line.write(dialect.start)
    return _Ear(name, dialect, line, Rhythm(dialect, period_s, None, time.monotonic()), dialect.decoder())


def _named(dialect: str) -> Dialect:
    if dialect not in DIALECTS:
        raise ConfigError("--dialect", f"no dialect {dialect!r}", f"known are {', '.join(DIALECTS)}")
    return DIALECTS[dialect]


def _guessed(port: str) -> Dialect:
    """The most plausible dialect of what comes, said aloud. Tries both line rates."""
    clock = SystemClock()
    for baud in BAUDS:
        speakers = [d for d in DIALECTS.values() if d.baud == baud]
        line = open_line(port, baud, max(d.longest for d in speakers))
        try:
            for speaker in speakers:
                line.write(speaker.start)
            heard, end = b"", clock.now().boot_s + GUESS_S
            while clock.now().boot_s < end and len(heard) < GUESS_BYTES:
                for speaker in speakers:
                    if speaker.polled:
                        line.write(speaker.commands.read or b"")
                heard += line.read(1.0)
        finally:
            line.close()
        guesses = guess(heard)
        if guesses:
            best = guesses[0]
            click.echo(f"at {baud} baud it looks like {best.dialect} ({best.confidence:.0%} sure: {best.reason})")
            return DIALECTS[best.dialect]
        click.echo(f"at {baud} baud: {f'{len(heard)} bytes, no frame of any dialect' if heard else 'silence'}")
    raise ConfigError(
        "guessing the dialect", "nothing that is understood came", "check wiring and supply, or name --dialect"
    )
