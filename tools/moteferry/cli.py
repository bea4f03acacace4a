"""The command `moteferry`: words in, exit codes out.

Owns arguments and the translation of named errors: 0 done, 1 what was asked about is not well, 2 usage or input error in
one line. Each command is imported when it is called: fitting needs numpy and scipy, signing nothing.
"""

import click

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
        except OSError as error:
            click.echo(f"moteferry: {error}; check the path and its permissions", err=True)
            ctx.exit(2)


@click.group(cls=Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="moteferry")
def main() -> None:
    """Fits, signs and rolls calibration documents onto the gateways of a fleet.

    Readings are indicative: not a regulatory instrument, not a smoke alarm, not a life-safety device.
    """
