"""The command `motesim`.

Owns arguments, words for people and exit codes: 0 done, 2 usage or scenario error in one line.
"""

import signal
import sys
import time
from pathlib import Path

import click

from motekeep.errors import MotekeepError
from motesim import scenario
from motesim.capture import write_capture
from motesim.run import Run

DAY_S = 86_400.0


class _Plain(click.Group):
    """Named errors end in one line and exit code 2."""

    def invoke(self, ctx: click.Context) -> object:
        try:
            return super().invoke(ctx)
        except MotekeepError as error:
            click.echo(f"motesim: {error}", err=True)
            ctx.exit(2)
        except OSError as error:
            click.echo(f"motesim: {error}; check the path and its permissions", err=True)
            ctx.exit(2)


@click.group(cls=_Plain, context_settings={"help_option_names": ["-h", "--help"]})
def main() -> None:
    """Emulated laser dust sensors with a physical model behind them.

    SCENARIO is the name of a shipped scenario (`motesim scenarios`) or the path of a TOML file.
    """


@main.command()
def scenarios() -> None:
    """List the scenarios that are shipped."""
    for name, plan in scenario.shipped().items():
        click.echo(f"{name:14} {plan.seconds / DAY_S:4.0f} d  {plan.about}")


@main.command()
@click.argument("name", metavar="SCENARIO")
@click.argument("out", type=click.Path(path_type=Path, dir_okay=False))
@click.option("--truth", type=click.Path(path_type=Path, dir_okay=False), help="What was really so, JSON lines.")
@click.option(
    "--reference",
    type=click.Path(path_type=Path, dir_okay=False),
    help="An hourly reference instrument beside the sensors, CSV.",
)
def capture(name: str, out: Path, truth: Path | None, reference: Path | None) -> None:
    """Write a capture as fast as it goes; OUT ending in .gz is compressed."""
    plan = scenario.find(name)
    began = time.monotonic()
    talkative = sys.stderr.isatty()

    def told(share: float, frames: int) -> None:
        if talkative:
            rate = frames / max(time.monotonic() - began, 1e-3)
            days = share * plan.seconds / DAY_S
            click.echo(
                f"\r{100 * share:5.1f} %  {days:.1f} of {plan.seconds / DAY_S:.1f} days  {rate:,.0f} frames/s",
                err=True,
                nl=False,
            )

    frames = write_capture(plan, out, truth=truth, reference=reference, told=told)
    if talkative:
        click.echo(err=True)
    seconds = time.monotonic() - began
    click.echo(f"{frames:,} frames of {len(plan.sensors)} sensors in {seconds:.1f} s: {out}")


@main.command()
@click.argument("name", metavar="SCENARIO")
@click.option(
    "--link",
    type=click.Path(path_type=Path, file_okay=False),
    required=True,
    help="Folder for the ports: a link a sensor, and the fifo `control`.",
)
@click.option(
    "--speed",
    type=click.FloatRange(0.1, 10_000.0),
    default=1.0,
    show_default=True,
    help="How much faster the air changes and the faults' clock runs; frames keep their pace.",
)
def run(name: str, link: Path, speed: float) -> None:
    """Play a scenario in real time on pseudo-terminals.

    Ends with the scenario, on SIGTERM or SIGINT. Write orders to LINK/control, one a line: `fault north fan-stopped`,
    `clear north fan-stopped`, `unplug north`, `plug north`, `quit`.
    """
    playing = Run(scenario.find(name), link, speed=speed, told=click.echo)
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: playing.stop())
    playing.play()
