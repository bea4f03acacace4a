"""`sign` and `signers` from the command line: what is said of them."""

import json
from collections.abc import Sequence
from datetime import date
from pathlib import Path

import click

from moteferry import trust
from moteferry.signing import Signed
from moteferry.signing import sign as sign_one
from motekeep.edges.signers import Signers
from motekeep.instant import rfc3339


def sign_all(
    documents: Sequence[Path], key: Path, allowed: Path | None, revoked: Path | None, *, as_json: bool
) -> None:
    """Sign one after the other; the first that cannot be ends it, and those before it stay signed."""
    judge = None if allowed is None else Signers(allowed, revoked)
    done: list[Signed] = []
    for path in documents:
        signed = sign_one(path, key, judge)
        done.append(signed)
        if not as_json:
            click.echo(_line(signed))
    if as_json:
        click.echo(json.dumps([_entry(signed) for signed in done], indent=1))


def add(file: Path, key: Path, principal: str, until: date | None) -> None:
    line = trust.add(file, key, principal, until)
    held = "" if until is None else f", until {until}"
    click.echo(f"{line.principal} with {line.fingerprint} may sign calibrations{held}; put {file} on the devices")


def revoke(file: Path, key: Path) -> None:
    click.echo(f"{trust.revoke(file, key)} is revoked; put {file} on the devices as [calibration] revoked")


def show(file: Path, revoked: Path | None, *, as_json: bool) -> None:
    lines = trust.lines(file, revoked)
    if as_json:
        entries = [
            {"principal": li.principal, "key": li.fingerprint, "options": li.options, "revoked": li.revoked}
            for li in lines
        ]
        click.echo(json.dumps(entries, indent=1))
        return
    for line in lines:
        state = "REVOKED  " if line.revoked else ""
        click.echo(f"{line.principal}  {line.fingerprint}  {state}{line.options}")


def _line(signed: Signed) -> str:
    document = signed.document
    where = f"{document.site}/{document.gateway}/{document.sensor}"
    judged = "" if signed.signer is None else f", which its devices know as {signed.signer}"
    return (
        f"{signed.signature}: issue {document.issue} for {where}, valid until {rfc3339(document.valid_until)},"
        f" signed with {signed.key}{judged}"
    )


def _entry(signed: Signed) -> dict[str, object]:
    document = signed.document
    return {
        "signature": str(signed.signature),
        "site": document.site,
        "gateway": document.gateway,
        "sensor": document.sensor,
        "issue": document.issue,
        "digest": document.digest,
        "key": signed.key,
        "signer": signed.signer,
    }
