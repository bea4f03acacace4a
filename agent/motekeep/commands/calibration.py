"""`calibration`: a document from a stick into force, what was in force, and back to an earlier one.

Owns the words and the waiting. Puts nothing into force itself: the daemon does, by the same checks as for an offer from
afar. What is asked without a daemon waits for its next start, and the command says so.
"""

import time
from pathlib import Path

import click
from pydantic import ValidationError

from motekeep.config import Config
from motekeep.edges.calibration_spool import CalibrationSpool
from motekeep.edges.clock import SystemClock
from motekeep.edges.journal_view import JournalView
from motekeep.edges.shelf import Shelf, read_pair
from motekeep.edges.signers import Signers
from motekeep.errors import ConfigError, DocumentError
from motekeep.instant import rfc3339
from motekeep.measure.document_text import parse
from motekeep.message.calibration_record import Accepted, CalibrationAnswer, CalibrationAsk, recalled, record_name

# The daemon looks every second; examining takes a second on a slow board, behind what others have asked.
ANSWER_S = 45.0
TELL_AFTER_S = 5.0
LOOK_S = 0.2


def install(config: Config, path: Path) -> bool:
    """Hand a signed document to the daemon; whether it is in force. Raises what the daemon would refuse it for, where
    that shows without it."""
    pair = read_pair(path)
    if pair is None:
        raise ConfigError(
            f"reading {path}", "it cannot be read", "name the document, FILE.toml, with FILE.toml.sig beside it"
        )
    text, signature = pair
    now = SystemClock(trust_rtc=config.store.trust_rtc).now()
    signers = Signers(config.calibration.signers, config.calibration.revoked)
    signer = signers.verify(text, signature, now.utc if now.trusted else None)
    document = parse(text)
    if why := document.not_for(config.site, config.gateway, document.sensor):
        raise DocumentError(str(path), why, "install it there")
    _check_sensor(config, document.sensor)
    click.echo(f"issue {document.issue} for {document.sensor}, signed by {signer.principal} with {signer.key}")
    ask = CalibrationAsk(
        kind="install", sensor=document.sensor, document=text.decode(), signature=signature.decode("ascii")
    )
    return _ask(config, ask)


def restore(config: Config, sensor: str, issue: int | None) -> bool:
    """Ask the daemon to go back; whether the earlier document is in force."""
    _check_sensor(config, sensor)
    return _ask(config, CalibrationAsk(kind="restore", sensor=sensor, issue=issue))


def show(config: Config, sensor: str | None, as_json: bool) -> None:
    """What the journal knows of each sensor's documents, the newest last."""
    if sensor is not None:
        _check_sensor(config, sensor)
    names = [s.name for s in config.sensor if sensor in (None, s.name)]
    with JournalView(config.store.path) as view:
        texts = {name: view.kept(record_name(name)) for name in names}
    for name in names:
        record = recalled(texts[name])
        if as_json:
            click.echo(f'{{"sensor":"{name}","record":{texts[name] or "null"}}}')
        elif record is None or not record.accepted:
            click.echo(f"{name}: no signed document was ever accepted{_by_hand(config, name)}")
        else:
            click.echo(f"{name}:")
            for entry in record.accepted:
                click.echo(f"  {_line(entry, in_force=entry.digest == record.in_force)}")
            if record.in_force is None:
                click.echo(f"  none is in force since {record.since}")


def _line(entry: Accepted, *, in_force: bool) -> str:
    if in_force:
        state = "in force" if entry.proven else "in force, soaking"
    else:
        state = "kept" if entry.withdrawn is None else f"withdrawn ({entry.withdrawn})"
    return (
        f"issue {entry.issue}: {state}; accepted {entry.at}, signed by {entry.signer} with {entry.key},"
        f" valid until {entry.valid_until}, {entry.digest[:19]}"
    )


def _by_hand(config: Config, sensor: str) -> str:
    if Signers(config.calibration.signers, config.calibration.revoked).exist:
        return ""
    try:
        document = Shelf(config.calibration.folder, config.site, config.gateway).in_force(sensor)
    except DocumentError as error:
        return f"; the one put there by hand is refused ({error})"
    if document is None:
        return ""
    return f"; issue {document.issue} was put there by hand, valid until {rfc3339(document.valid_until)}"


def _check_sensor(config: Config, sensor: str) -> None:
    if config.sensor_named(sensor) is None:
        known = ", ".join(s.name for s in config.sensor)
        raise ConfigError(f"sensor {sensor!r}", "it is not in the configuration", f"known are {known}")


def _ask(config: Config, ask: CalibrationAsk) -> bool:
    spool = CalibrationSpool(config.calibration.folder)
    ticket = spool.put(ask.json_text().encode())
    began, told = time.monotonic(), False
    while (waited_s := time.monotonic() - began) < ANSWER_S:
        if (body := spool.answer_to(ticket)) is not None:
            try:
                answer = CalibrationAnswer.model_validate_json(body)
            except ValidationError:
                break
            click.echo(answer.said, err=not answer.done)
            return answer.done
        if waited_s > TELL_AFTER_S and not told:
            told = True
            click.echo("waiting for the daemon; what is asked stays for its next start when you leave here", err=True)
        time.sleep(LOOK_S)
    click.echo(
        "no answer: the daemon does not run, or has no journal. It acts on this at its next start;"
        " look with `motekeep calibration list`",
        err=True,
    )
    return False
