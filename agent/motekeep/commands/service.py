"""`service add` and `service list`: what people did at the sensors.

Owns what is asked of a record before it goes on its way, and the layout of the list. Writes into the spool only: the
journal belongs to the daemon.
"""

import difflib
import json
import secrets
from pathlib import Path

import click

from motekeep.config import Config
from motekeep.edges.clock import SystemClock
from motekeep.edges.journal_view import JournalView
from motekeep.edges.service_spool import LATEST, ServiceSpool
from motekeep.errors import ConfigError, ServiceError
from motekeep.instant import Instant, from_rfc3339, rfc3339
from motekeep.measure.dose import ServiceKind
from motekeep.message.documents import ServiceDocument

NOTE_LONGEST = 500
EARLIEST = 946_684_800.0  # 2000: what a person says was before is a slip of the pen
FUTURE_S = 60.0  # between two watches that are both right


def add(config: Config, config_path: Path, sensor: str, kind: str, said: tuple[str | None, str]) -> None:
    """Leave a record for the daemon. `said` is --at and --note. Raises ConfigError for what was mistyped, StoreError
    when the spool cannot be written."""
    now = SystemClock(trust_rtc=config.store.trust_rtc).now()
    done_at, note = said
    names = [s.name for s in config.sensor]
    record = ServiceDocument(
        schema="motekeep/service/1",
        site=config.site,
        gateway=config.gateway,
        sensor=_known(sensor, names, f"SENSOR {sensor!r}", f"no such sensor in {config_path}"),
        id=f"{round(now.utc * 1000):013x}-{secrets.token_hex(4)}",
        kind=ServiceKind(_known(kind, [k.value for k in ServiceKind], f"KIND {kind!r}", "no such kind")).value,
        at=rfc3339(now.utc if done_at is None else _moment(done_at, now)),
        clock="stated" if done_at is not None else ("synced" if now.trusted else "unsynced"),
        entered=rfc3339(now.utc),
        boot=now.boot_id,
        boot_s=round(now.boot_s, 3),
        note=_line(note),
    )
    ServiceSpool(config.store.path).put(record)
    click.echo(f"{record.sensor}: {record.kind} at {record.at} is left for the daemon ({record.id})")
    if record.clock == "unsynced":
        click.echo("motekeep: no time service vouches for the clock; give --at if that time is wrong", err=True)


def show(config: Config, config_path: Path, sensor: str | None, as_json: bool) -> None:
    """Print the records of the journal by the time of what was done, then those that wait in the spool.

    Raises StoreError when there is a journal that cannot be read."""
    if sensor is not None:
        _known(sensor, [s.name for s in config.sensor], f"--sensor {sensor!r}", f"no such sensor in {config_path}")
    recorded = []
    if config.store.path.exists():  # before the daemon's first start there is none, and nothing is wrong
        with JournalView(config.store.path) as view:
            recorded = [ServiceDocument.model_validate_json(body) for body in view.services(sensor)]
    known = {record.id for record in recorded}
    pending = [r for r in _pending(ServiceSpool(config.store.path)) if r.id not in known and sensor in (None, r.sensor)]
    for state, records in (("recorded", recorded), ("pending", pending)):
        for record in records:
            click.echo(_json(record, state) if as_json else _text(record, state))
    if not recorded and not pending and not as_json:
        click.echo("no service record yet")


def _pending(spool: ServiceSpool) -> list[ServiceDocument]:
    """What waits for the daemon; what it will refuse is told."""
    records = []
    for name in spool.waiting():
        try:
            records.append(spool.read(name))
        except FileNotFoundError:
            continue  # taken up this moment
        except ServiceError as error:
            click.echo(f"motekeep: {error}", err=True)
    return records


def _json(record: ServiceDocument, state: str) -> str:
    return json.dumps({**json.loads(record.json_text()), "state": state}, ensure_ascii=False, separators=(",", ":"))


def _text(record: ServiceDocument, state: str) -> str:
    doubt = " (clock unsynced)" if record.clock == "unsynced" else ""
    waits = "  PENDING: the daemon has not taken it up" if state == "pending" else ""
    note = f"  {record.note}" if record.note else ""
    return f"{record.at}{doubt}  {record.sensor:<12} {record.kind:<13}{note}{waits}"


def _known(word: str, known: list[str], what: str, why: str) -> str:
    if word in known:
        return word
    near = difflib.get_close_matches(word, known, n=1, cutoff=0.5)
    raise ConfigError(what, why, f"did you mean {near[0]!r}?" if near else f"known are {', '.join(known)}")


def _moment(text: str, now: Instant) -> float:
    """Unix seconds of --at. On a clock that nobody vouches for, nothing says what is the future."""
    try:
        moment = from_rfc3339(text)
    except ValueError as error:
        raise ConfigError(f"--at {text!r}", "not a time", "write it like 2026-12-01T09:15:00Z") from error
    if now.trusted and moment > now.utc + FUTURE_S:
        raise ConfigError(f"--at {text!r}", f"that is to come, now it is {rfc3339(int(now.utc))}", "give when it was")
    if not EARLIEST <= moment < LATEST:
        raise ConfigError(f"--at {text!r}", "that is not of this century or the next", "check the year")
    return moment


def _line(note: str) -> str:
    if len(note) > NOTE_LONGEST:
        raise ConfigError("--note", f"{len(note)} characters", f"keep it within {NOTE_LONGEST}")
    if not note.isprintable():
        raise ConfigError("--note", "it has line breaks or control characters", "write one line")
    return note
