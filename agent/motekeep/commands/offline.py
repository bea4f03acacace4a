"""`replay` from the command line: the configuration's sensors, unsigned documents, a progress bar."""

from pathlib import Path

import click

from motekeep.app import sensor_setups
from motekeep.commands.progress import bytes_bar
from motekeep.config import Config
from motekeep.errors import ConfigError, DocumentError
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.message.compose import Place
from motekeep.replay import Plan, replay


def run_captures(config: Config, captures: list[Path], out: Path, documents: list[Path]) -> bool:
    """Replay and tell what was left out; whether there was anything to replay."""
    calibrations = [_document(path, config) for path in documents]
    names = [document.sensor for document in calibrations]
    if twice := next((name for name in names if names.count(name) > 1), None):
        raise ConfigError("--calibration", f"two documents are for sensor {twice!r}", "give one a sensor")
    plan = Plan(Place(config.site, config.gateway), config.interval, sensor_setups(config), calibrations)
    with bytes_bar("replay", captures) as progress:
        summary = replay(captures, out, plan, progress)
    if summary.unknown_sensors:
        click.echo(
            f"motekeep: not in the configuration, left out: {', '.join(sorted(summary.unknown_sensors))}", err=True
        )
    if summary.first is None:
        click.echo("motekeep: no line of a sensor of this configuration; nothing was replayed", err=True)
        return False
    return True


def _document(path: Path, config: Config) -> CalibrationDocument:
    try:
        document = parse(path.read_bytes())
    except DocumentError as error:
        raise DocumentError(f"{path}, {error.path}", error.why, error.mend) from error
    except OSError as error:
        raise ConfigError(f"reading {path}", str(error), "name a calibration document") from error
    if config.sensor_named(document.sensor) is None:
        raise DocumentError(str(path), f"it is for sensor {document.sensor!r}", "add that sensor to the configuration")
    if why := document.not_for(config.site, config.gateway, document.sensor):
        raise DocumentError(str(path), why, "replay it with the configuration of that gateway")
    return document
