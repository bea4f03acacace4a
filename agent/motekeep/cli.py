"""The command line: words in, exit codes out. 0 done, 1 the thing asked about is not well, 2 usage or configuration.

Owns options and help. What a command does is in `commands/`, imported only when it is asked for: the daemon must not
carry the commands' memory.
"""

import sys
from pathlib import Path
from typing import Any

import click

from motekeep import __version__
from motekeep.errors import ConfigError, MotekeepError

DEFAULT_CONFIG = Path("/etc/motekeep/config.toml")


class Group(click.Group):
    """A named error is one line on stderr: exit 2 for the configuration, 1 for everything else."""

    # Any: click's own signature
    def invoke(self, ctx: click.Context) -> Any:
        try:
            return super().invoke(ctx)
        except MotekeepError as error:
            click.echo(f"motekeep: {error}", err=True)
            sys.exit(2 if isinstance(error, ConfigError) else 1)


with_config = click.option(
    "--config",
    "config_path",
    type=click.Path(path_type=Path, dir_okay=False),
    default=DEFAULT_CONFIG,
    show_default=True,
    help="The configuration file.",
)
existing = click.Path(path_type=Path, exists=True, dir_okay=False)


@click.group(cls=Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="motekeep")
def main() -> None:
    """Keeps the record of laser dust sensors answerable: reads, checks, journals and publishes.

    Readings are indicative: not a regulatory instrument, not a smoke alarm, not a life-safety device.
    """


@main.command()
@with_config
@click.option(
    "--log", "log_style", type=click.Choice(["json", "text"]), default="json", help="Form of the log on stderr."
)
def run(config_path: Path, log_style: str) -> None:
    """The daemon: runs until it is told to stop."""
    from motekeep.app import run as run_daemon  # noqa: PLC0415 (see the top of this file)

    sys.exit(run_daemon(config_path, log_style))


@main.command()
@with_config
@click.option("--seconds", default=10.0, show_default=True, help="How long to listen to each sensor.")
def check(config_path: Path, seconds: float) -> None:
    """Say line by line what would stop the daemon from working; exit 1 on any."""
    from motekeep.commands.check import check as run_check  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if run_check(load(config_path), seconds) else 1)


@main.command()
@with_config
@click.option("--port", help="Listen to this port instead of those of the configuration.")
@click.option("--dialect", help="With --port: its dialect; without it, it is guessed.")
@click.option("--seconds", type=float, help="Stop by itself after so long.")
def listen(config_path: Path, port: str | None, dialect: str | None, seconds: float | None) -> None:
    """A live table at the bench, without broker or journal."""
    from motekeep.commands.listen import listen as run_listen  # noqa: PLC0415

    run_listen(config_path, port, dialect, seconds)


@main.command()
@with_config
@click.option("--json", "as_json", is_flag=True, help="The health document itself.")
def status(config_path: Path, as_json: bool) -> None:
    """The health document for people; exit 1 unless it is normal and fresh."""
    from motekeep.commands.status import status as run_status  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if run_status(load(config_path), as_json) else 1)


@main.group()
def service() -> None:
    """What people did at the sensors: enter it, look it up."""


@service.command("add")
@with_config
@click.option("--at", "done_at", help="When it was done, RFC 3339, like 2026-12-01T09:15:00Z; without it: now.")
@click.option("--note", default="", help="A line for whoever reads the record later.")
@click.argument("sensor")
@click.argument("kind")
def service_add(config_path: Path, done_at: str | None, note: str, sensor: str, kind: str) -> None:
    """Enter what was done at SENSOR. KIND: cleaned, fan-replaced, unit-replaced, moved or note.

    The running daemon takes it up within seconds; without one it waits. Readings from ten minutes before it to twenty
    after it (of a note: none) are marked as made with somebody at the case.
    """
    from motekeep.commands.service import add  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    add(load(config_path), config_path, sensor, kind, (done_at, note))


@service.command("list")
@with_config
@click.option("--sensor", help="Only of this sensor.")
@click.option("--json", "as_json", is_flag=True, help="One JSON document a line, as published.")
def service_list(config_path: Path, sensor: str | None, as_json: bool) -> None:
    """The service records, those that wait for the daemon at the end."""
    from motekeep.commands.service import show  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    show(load(config_path), config_path, sensor, as_json)


@main.group()
def calibration() -> None:
    """Signed calibration documents at the gateway: put into force, listed, gone back from. Needs no network."""


@calibration.command("install")
@with_config
@click.argument("file", type=existing)
def calibration_install(config_path: Path, file: Path) -> None:
    """Put the document FILE into force; its signature lies beside it as FILE.sig. Exit 1 when it is refused.

    The same checks as for an offer from afar. Without a running daemon it waits for the next start.
    """
    from motekeep.commands.calibration import install  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if install(load(config_path), file) else 1)


@calibration.command("list")
@with_config
@click.option("--sensor", help="Only of this sensor.")
@click.option("--json", "as_json", is_flag=True, help="One JSON object a sensor, as the journal keeps it.")
def calibration_list(config_path: Path, sensor: str | None, as_json: bool) -> None:
    """The last documents of each sensor: in force, kept or withdrawn, and by whom they are signed."""
    from motekeep.commands.calibration import show  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    show(load(config_path), sensor, as_json)


@calibration.command("restore")
@with_config
@click.option("--issue", type=int, help="Which of the kept ones; without it the one before that in force.")
@click.argument("sensor")
def calibration_restore(config_path: Path, issue: int | None, sensor: str) -> None:
    """Put an earlier accepted document of SENSOR into force again.

    Recorded, and told on the state topic. The numbers stay: the next offer must still exceed the highest issue.
    """
    from motekeep.commands.calibration import restore  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if restore(load(config_path), sensor, issue) else 1)


@main.command()
@with_config
@click.option("--seconds", type=float, required=True, help="How long to record.")
@click.argument("out", type=click.Path(path_type=Path, dir_okay=False))
def capture(config_path: Path, seconds: float, out: Path) -> None:
    """Record what comes from the ports to OUT (text, gzip when it ends in .gz); the daemon must be stopped."""
    from motekeep.commands.record import record  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if record(load(config_path), seconds, out) else 1)


@main.command()
@with_config
@click.argument("captures", nargs=-1, required=True, type=existing)
@click.option("--out", required=True, type=click.Path(path_type=Path, file_okay=False), help="Folder for the results.")
@click.option("--calibration", "documents", multiple=True, type=existing, help="A document, unsigned; may repeat.")
def replay(config_path: Path, captures: tuple[Path, ...], out: Path, documents: tuple[Path, ...]) -> None:
    """Run captures through the daemon's own pipeline, as fast as it can."""
    from motekeep.commands.offline import run_captures  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    sys.exit(0 if run_captures(load(config_path), list(captures), out, list(documents)) else 1)


@main.command()
@with_config
@click.option("--from", "from_", required=True, help="Start, RFC 3339, like 2026-12-01T00:00:00Z.")
@click.option("--to", required=True, help="End, exclusive.")
@click.option("--format", "form", type=click.Choice(["csv", "cf", "ndjson", "senml"]), default="csv", show_default=True)
@click.option("--sensor", "sensors", multiple=True, help="Only this sensor; may repeat.")
@click.option("--out", type=click.Path(path_type=Path, dir_okay=False), help="A file instead of standard output.")
def export(config_path: Path, from_: str, to: str, form: str, sensors: tuple[str, ...], out: Path | None) -> None:
    """Readings of the journal, whatever became of their delivery. `cf` is CSV with CF names and units."""
    from motekeep.commands.export import export as run_export  # noqa: PLC0415
    from motekeep.config import load  # noqa: PLC0415

    run_export(load(config_path), (from_, to), form, sensors, out)


@main.command()
@click.option("--asyncapi", "as_asyncapi", is_flag=True, help="An AsyncAPI 3 document of all topics instead.")
def schema(as_asyncapi: bool) -> None:
    """JSON Schema of every document that is published."""
    import json  # noqa: PLC0415

    from motekeep.message.schema import asyncapi, json_schemas  # noqa: PLC0415

    click.echo(json.dumps(asyncapi(__version__) if as_asyncapi else json_schemas(), indent=1))
