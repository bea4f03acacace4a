"""The command `moteferry`: words in, exit codes out.

Owns arguments and the translation of named errors: 0 done, 1 what was asked about is not well, 2 usage or input error
in one line. Each command is imported when it is called: fitting needs numpy and scipy, signing nothing.
"""

from datetime import datetime
from pathlib import Path

import click

from moteferry.duration import Duration
from motekeep import __version__
from motekeep.errors import MotekeepError


class Group(click.Group):
    """Named errors end in one line and exit code 2."""

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except MotekeepError as error:
            click.echo(f"moteferry: {error}", err=True)
            ctx.exit(2)
        except BrokenPipeError:
            raise  # whoever reads has read enough; click ends quietly on it
        except OSError as error:
            click.echo(f"moteferry: {error}; check the path and its permissions", err=True)
            ctx.exit(2)


@click.group(cls=Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="moteferry")
def main() -> None:
    """Fits, signs and rolls calibration documents onto the gateways of a fleet.

    Readings are indicative: not a regulatory instrument, not a smoke alarm, not a life-safety device.
    """


FILE = click.Path(exists=True, dir_okay=False, path_type=Path)
THERE = click.Path(exists=True, path_type=Path)
REGISTER = Path(click.get_app_dir("moteferry")) / "register.db"
register_option = click.option(
    "--register",
    type=click.Path(dir_okay=False, path_type=Path),
    default=REGISTER,
    show_default=True,
    envvar="MOTEFERRY_REGISTER",
    help="The SQLite file that knows every roll.",
)
json_option = click.option("--json", "as_json", is_flag=True, help="For scripts: one JSON document on standard output.")


# Listed here and not asked of the fit: to show the help must not import numpy.
MODELS = ("scale", "linear", "linear-rh", "growth", "linear-rh-t", "piecewise")


@main.command()
@click.option("--device", type=FILE, required=True, help="Readings: ndjson, or csv as `motekeep export` writes it.")
@click.option("--reference", type=FILE, required=True, help="CSV: start,seconds,pm2_5 and optionally u; UTC.")
@click.option("--out", type=click.Path(file_okay=False, path_type=Path), required=True, help="Folder for the results.")
@click.option("--sensor", help="Which, where the readings are of several.")
@click.option("--channel", type=click.Choice(["pm1", "pm2_5", "pm4", "pm10"]), default="pm2_5", show_default=True)
@click.option("--issue", type=click.IntRange(1, 2**53), default=1, show_default=True, help="Must rise with each.")
@click.option("--valid-from", metavar="TIME", help="Like 2026-12-01T09:15:00Z; now without it.")
@click.option("--valid-days", type=click.FloatRange(0.0, 3660.0, min_open=True), default=365.0, show_default=True)
@click.option("--fits-revision", type=click.IntRange(0, 65535), help="The revision byte of the sensor it is for.")
@click.option("--reference-words", default="reference record beside the sensor", help="What the reference is.")
@click.option("--model", type=click.Choice(MODELS), help="This form, and not the simplest that is good enough.")
@click.option("--robust", is_flag=True, help="Hours that stick out weigh less (Huber).")
@click.option(
    "--limit-value",
    type=click.FloatRange(1.0, 1000.0),
    default=30.0,
    show_default=True,
    help="ug/m3 at which the expanded uncertainty is stated.",
)
@click.option(
    "--reference-random",
    type=click.FloatRange(0.0, 1.0),
    default=0.75,
    show_default=True,
    help="Share of the variance u^2 of the reference that is drawn anew each time; the rest is the same all along.",
)
@click.option(
    "--u-rh",
    type=click.FloatRange(0.0, 50.0),
    default=1.0,
    show_default=True,
    help="What the humidity sensor may be off by since the fit, %.",
)
@json_option
def fit(  # noqa: PLR0913, PLR0917 (an option each)
    device: Path,
    reference: Path,
    out: Path,
    sensor: str | None,
    channel: str,
    issue: int,
    valid_from: str | None,
    valid_days: float,
    fits_revision: int | None,
    reference_words: str,
    model: str | None,
    robust: bool,
    limit_value: float,
    reference_random: float,
    u_rh: float,
    as_json: bool,
) -> None:
    """Fit a calibration document to readings of a sensor that stood beside a reference.

    Writes <sensor>.toml, metrics.json and page.html into --out. Look at the page, rehearse the document, then sign it.
    """
    from dataclasses import replace  # noqa: PLC0415 (see above)

    from moteferry.fit import command  # noqa: PLC0415
    from moteferry.fit.folder import Sources  # noqa: PLC0415

    request = command.request_of(issue, valid_from, valid_days, reference_words, u_rh, fits_revision)
    request = replace(request, model=model, robust=robust, limit_value=limit_value)
    command.run(Sources(device, reference, channel, sensor, reference_random), request, out, as_json=as_json)


@main.command()
@click.argument("document", type=FILE)
@click.option("--device", type=FILE, required=True, help="Recorded readings, readings.ndjson.")
@click.option("--out", type=click.Path(dir_okay=False, path_type=Path), required=True, help="Where the new ones go.")
@click.option("--sensor", help="Which one, where the readings are of several.")
@click.option("--max-shift", type=float, default=0.5, show_default=True, help="As the device's config has it.")
@json_option
def rehearse(document: Path, device: Path, out: Path, sensor: str | None, max_shift: float, as_json: bool) -> None:
    """What DOCUMENT would have made of recorded readings: readings of the same schema, and how far they moved.

    Exit code 1 when a device would refuse it for that.
    """
    from moteferry import rehearsal  # noqa: PLC0415 (see above)

    _exit(rehearsal.rehearsal(document, device, out, sensor, max_shift, as_json=as_json))


@main.command()
@click.argument("documents", nargs=-1, type=FILE, required=True)
@click.option("--key", type=FILE, required=True, help="Private key, or the .pub of one in the agent or on a token.")
@click.option(
    "--signers", type=THERE, help="Allowed signers, file or folder: also say whether its devices would take it."
)
@click.option("--revoked", type=FILE, help="With --signers: their revocation list.")
@json_option
def sign(documents: tuple[Path, ...], key: Path, signers: Path | None, revoked: Path | None, as_json: bool) -> None:
    """Sign DOCUMENTS, each x.toml as x.toml.sig beside it, by `ssh-keygen -Y sign`.

    A document that no device would read is not signed, and a signature that is not good is not kept.
    """
    from moteferry import signing_command  # noqa: PLC0415 (see above)

    signing_command.sign_all(documents, key, signers, revoked, as_json=as_json)


@main.group()
def signers() -> None:
    """Whose signatures devices accept: the allowed-signers file and the revocation list."""


@signers.command("add")
@click.argument("file", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--key", type=FILE, required=True, help="The .pub file.")
@click.option("--principal", required=True, help="What the signer is called, like anna@example.")
@click.option("--until", type=click.DateTime(["%Y-%m-%d"]), help="The first day on which it no longer holds, UTC.")
def signers_add(file: Path, key: Path, principal: str, until: datetime | None) -> None:
    """Trust a public key for calibration, and nothing else, in the allowed-signers FILE (made when it is not there)."""
    from moteferry import signing_command  # noqa: PLC0415

    signing_command.add(file, key, principal, until.date() if until is not None else None)


@signers.command("revoke")
@click.argument("file", type=click.Path(dir_okay=False, path_type=Path))
@click.option("--key", type=FILE, required=True, help="The .pub file.")
def signers_revoke(file: Path, key: Path) -> None:
    """Put a public key on the revocation list FILE (made when it is not there), [calibration] revoked of a device.

    What it has signed goes out of force on the devices that get the list, and issue numbers it used up are free again.
    """
    from moteferry import signing_command  # noqa: PLC0415

    signing_command.revoke(file, key)


@signers.command("list")
@click.argument("file", type=FILE)
@click.option("--revoked", type=FILE, help="Say of each key whether it stands on this list.")
@json_option
def signers_list(file: Path, revoked: Path | None, as_json: bool) -> None:
    """The keys of the allowed-signers FILE."""
    from moteferry import signing_command  # noqa: PLC0415

    signing_command.show(file, revoked, as_json=as_json)


@main.command()
@click.argument("documents", nargs=-1, type=FILE)
@click.option("--broker", default="localhost", show_default=True, metavar="HOST[:PORT]", help="Port 8883 with TLS.")
@click.option("--root", default="motekeep", show_default=True, help="The first level of all topics.")
@click.option("--waves", default="1,10%,rest", show_default=True, help="Numbers, shares of all, and `rest`.")
@click.option("--hold", type=Duration(), default="30m", show_default=True, help="How long each wave is watched.")
@click.option("--patience", type=Duration(), default="10m", show_default=True, help="How long to wait for an answer.")
@click.option("--yes", is_flag=True, help="Roll; without it only the plan is shown.")
@click.option("--go-on", is_flag=True, help="Go past those that stopped the roll before.")
@click.option("--undo", is_flag=True, help="Take the documents back, or without any those of the last roll.")
@click.option(
    "--key", type=click.Path(path_type=Path), help="With --undo: what to sign with; .pub of a key in an agent."
)
@click.option("--out", type=click.Path(file_okay=False, path_type=Path), default="undo", show_default=True)
@click.option("--known", type=FILE, multiple=True, help="An earlier document that the register does not have.")
@click.option("--tls", is_flag=True, help="TLS with the authorities of this system.")
@click.option("--tls-ca", type=FILE, help="PEM; turns TLS on.")
@click.option("--tls-cert", type=FILE, help="PEM; turns TLS on.")
@click.option("--tls-key", type=FILE)
@click.option("--username")
@click.option("--password-file", type=FILE, help="Its first line; never the password itself.")
@register_option
@json_option
def roll(  # noqa: PLR0913, PLR0917 (an option each)
    documents: tuple[Path, ...],
    broker: str,
    root: str,
    waves: str,
    hold: float,
    patience: float,
    yes: bool,
    go_on: bool,
    undo: bool,
    key: Path | None,
    out: Path,
    known: tuple[Path, ...],
    tls: bool,
    tls_ca: Path | None,
    tls_cert: Path | None,
    tls_key: Path | None,
    username: str | None,
    password_file: Path | None,
    register: Path,
    as_json: bool,
) -> None:
    """Carry signed DOCUMENTS (x.toml with x.toml.sig beside it) to their gateways, in waves.

    Shows the plan; with --yes acts on it. A wave goes on to the next when every device has accepted, held its document
    for --hold and is no worse than before. Anything else stops the roll. The same command again goes on where it was.
    """
    from moteferry.roll import command  # noqa: PLC0415 (see above)
    from moteferry.roll.gate import Rule  # noqa: PLC0415
    from motekeep.edges.login import BrokerSettings, Tls  # noqa: PLC0415

    if not documents and not undo:
        raise click.UsageError("name the documents to roll")
    secure = Tls(tls_ca, tls_cert, tls_key) if tls or tls_ca or tls_cert else None
    host, port = _address(broker, 1883 if secure is None else 8883)
    settings = BrokerSettings(host, port, "", username=username, password_file=password_file, tls=secure)
    wish = command.Wish(settings, root, register, waves, Rule(hold, patience), yes, go_on, as_json)
    if undo:
        well = command.undo(wish, documents, known, command.UndoWish(key, out))
    else:
        well = command.roll(wish, documents, known)
    _exit(well)


@main.command()
@register_option
@click.option("--site")
@click.option("--gateway")
@click.option("--sensor")
@click.option("--at", metavar="TIME", help="Only what was in force then, like 2026-12-01T09:15:00Z.")
@json_option
def history(
    register: Path, site: str | None, gateway: str | None, sensor: str | None, at: str | None, as_json: bool
) -> None:
    """Who had which calibration when, as far as the register saw it."""
    from moteferry.roll import command  # noqa: PLC0415 (see above)

    try:
        _exit(command.history(register, (site, gateway, sensor), at, as_json=as_json))
    except ValueError as error:
        raise click.BadParameter(str(error), param_hint="--at") from error


def _address(text: str, port: int) -> tuple[str, int]:
    """`host`, `host:port`, `[::1]:port`."""
    host, colon, number = text.rpartition(":")
    if not colon or text.endswith("]"):
        return text.strip("[]"), port
    if not number.isdigit():
        raise click.BadParameter(f"{text!r} is no HOST[:PORT]", param_hint="--broker")
    return host.strip("[]"), int(number)


def _exit(well: bool) -> None:
    if not well:
        click.get_current_context().exit(1)
