"""Spans of time as people write them on a command line: `30m`, `90s`, `2h`, `1d`, and a plain number of seconds."""

import re

import click

UNITS = {"": 1.0, "s": 1.0, "m": 60.0, "h": 3600.0, "d": 86400.0}
FORM = re.compile(r"(\d+(?:\.\d+)?)\s*([smhd]?)", re.ASCII)


class Duration(click.ParamType[float]):
    """A click type; the value is seconds."""

    name = "duration"

    def convert(self, value: object, param: click.Parameter | None, ctx: click.Context | None) -> float:
        if isinstance(value, float):
            return value
        match = FORM.fullmatch(str(value).strip())
        if match is None:
            self.fail(f"{value!r} is no span of time; write it like 30m, 90s or 2h", param, ctx)
        return float(match[1]) * UNITS[match[2]]


def told(seconds: float) -> str:
    """`30 min`, `90 s`, `2 h`."""
    for size, unit in ((3600.0, "h"), (60.0, "min")):
        if seconds >= size and seconds % size == 0:
            return f"{seconds / size:.0f} {unit}"
    return f"{seconds:.0f} s"
