"""Scenarios: TOML files that say what a site is, what happens in its air and what goes wrong with its sensors.

Owns the reading and refusing. Must not know physics. Every refusal is one line that names file, key and mend.

    site, start, duration         and optional: about, seed, period (seconds between frames of every sensor)
    [air]                         aerosol, pm2_5, coarse, kappa and the weather (`weather.Climate`)
    [air.often]                   how many events of each kind happen in 30 days, at random by the seed
    [[event]]                     kind (`events.KINDS`), at, lasts, strength
    [[sensor]]                    name, dialect, length, seed, period, cold, duty = { every, awake },
                                  probe = { every, rh_error, temperature_error }
    [sensor.unit]                 parameters of the personality set by hand (`unit.Unit`)
    [[sensor.fault]]              kind (`faults.KINDS`), at, lasts, ramp, strength
    [[sensor.service]]            kind of service record, at

Durations are seconds or texts such as "2d6h", "90m"; `at` counts from the start.
"""

import re
import tomllib
from dataclasses import fields
from importlib.resources import files
from math import inf
from pathlib import Path

from motekeep.errors import ConfigError
from motekeep.wire.dialects import DIALECTS
from motesim import events, faults
from motesim.aerosol import CATALOGUE
from motesim.air import AirPlan
from motesim.line import layout_of
from motesim.plan import Duty, Probe, SensorPlan, Service, SitePlan
from motesim.table import Table
from motesim.unit import OVERRIDABLE
from motesim.weather import Climate

_NAME = re.compile(r"[a-z0-9][a-z0-9_-]{0,62}")
_SERVICES = ("cleaned", "fan-replaced", "unit-replaced", "moved", "note")
_MOST_SENSORS = 64

_CLIMATE_KEYS = tuple(field.name for field in fields(Climate))
# physical bounds of what a scenario may ask for, both ends allowed
_BOUNDS: dict[str, tuple[float, float]] = {
    "temperature": (-60.0, 60.0),
    "swing": (0.0, 30.0),
    "season": (0.0, 40.0),
    "humidity": (1.0, 100.0),
    "latitude": (-90.0, 90.0),
    "variability": (0.0, 3.0),
    "gusts": (0.0, 1.0),
    "rush": (0.0, 3.0),
    "pm2_5": (0.01, 5000.0),
    "coarse": (0.0, 100.0),
    "kappa": (0.0, 1.5),
}


def load(path: Path) -> SitePlan:
    """The plan in this file. Raises ConfigError."""
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as error:
        raise ConfigError(f"read scenario {path}", str(error), "give the path of a scenario file") from error
    return parse(text, str(path))


def shipped() -> dict[str, SitePlan]:
    """The scenarios inside the package, by name."""
    found = {}
    for entry in files("motesim").joinpath("scenarios").iterdir():
        if entry.name.endswith(".toml"):
            found[entry.name.removesuffix(".toml")] = parse(entry.read_text(encoding="utf-8"), entry.name)
    return dict(sorted(found.items()))


def find(name: str) -> SitePlan:
    """A shipped scenario by its bare name, else the file of that path. Raises ConfigError."""
    entry = files("motesim").joinpath("scenarios", f"{name}.toml")
    if _NAME.fullmatch(name) and entry.is_file():
        return parse(entry.read_text(encoding="utf-8"), f"{name}.toml")
    return load(Path(name))


def parse(text: str, source: str) -> SitePlan:
    """The plan in this text; `source` is what refusals call it. Raises ConfigError."""
    try:
        tree = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(f"read scenario {source}", str(error), "mend the TOML at that place") from error
    return _site(Table(tree, source, ""))


def _site(top: Table) -> SitePlan:
    name = top.text("site")
    if not _NAME.fullmatch(name):
        top.refuse("site", f"is {name!r}", "use small letters, digits, - and _")
    about = top.text("about", "")
    seed = top.whole("seed", 1, 0, 2**31 - 1)
    start = top.instant("start")
    if start % 60.0:
        top.refuse("start", "is not on a full minute", "leave the seconds at 00")
    seconds = top.duration("duration", low=60.0)
    cadence = top.duration("period", 1.0, low=0.1, high=3600.0)
    air = top.table("air")
    happenings: tuple[events.Event, ...] = ()
    plan = AirPlan()
    if air is not None:
        rates = air.table("often")
        plan = _air(air)
        if rates is not None:
            happenings = events.drawn(rates.numbers(events.KINDS, lambda _key: (0.0, 10_000.0)), seed, start, seconds)
    listed = tuple(_event(table, index, seed, start) for index, table in enumerate(top.tables("event")))
    sensors = tuple(_sensor(table, index, seed, start, cadence) for index, table in enumerate(top.tables("sensor")))
    if not 1 <= len(sensors) <= _MOST_SENSORS:
        top.refuse("sensor", f"appears {len(sensors)} times", f"write 1 to {_MOST_SENSORS} [[sensor]] tables")
    names = [sensor.name for sensor in sensors]
    for name_twice in {n for n in names if names.count(n) > 1}:
        top.refuse("sensor", f"has {name_twice!r} more than once", "give each sensor its own name")
    top.finish()
    merged = tuple(sorted((*happenings, *listed), key=lambda event: event.at))
    return SitePlan(name, seed, start, seconds, sensors, plan, merged, about)


def _air(table: Table) -> AirPlan:
    def bounded(key: str, default: float) -> float:
        return table.number(key, default, *_BOUNDS[key])

    usual = AirPlan()
    usual_climate = usual.climate
    climate = Climate(**{key: bounded(key, getattr(usual_climate, key)) for key in _CLIMATE_KEYS})
    plan = AirPlan(
        aerosol=table.choice("aerosol", CATALOGUE, usual.aerosol),
        pm2_5=bounded("pm2_5", usual.pm2_5),
        coarse=bounded("coarse", usual.coarse),
        kappa=bounded("kappa", 0.0) if "kappa" in table else None,
        climate=climate,
    )
    table.number("kappa", 0.0)
    table.finish()
    return plan


def _event(table: Table, index: int, seed: int, start: float) -> events.Event:
    kind = table.choice("kind", events.KINDS)
    usual = events.KINDS[kind]
    event = events.Event(
        kind,
        start + table.duration("at"),
        table.duration("lasts", usual.lasts_s, low=1.0),
        table.number("strength", usual.strength, 0.0, 1.0 if kind == "clean-front" else 1e5),
        seed * 1000 + index,
    )
    table.finish()
    return event


def _sensor(table: Table, index: int, seed: int, start: float, cadence: float) -> SensorPlan:
    name = table.text("name")
    if not _NAME.fullmatch(name):
        table.refuse("name", f"is {name!r}", "use small letters, digits, - and _")
    dialect = table.choice("dialect", DIALECTS, "bm")
    length = table.whole("length", 0, 0, 255) or None
    overrides = table.table("unit")
    plan = SensorPlan(
        name=name,
        dialect=dialect,
        length=length,
        seed=table.whole("seed", seed * 1000 + index, 0, 2**31 - 1),
        period_s=table.duration("period", cadence, low=0.1, high=3600.0),
        duty=_duty(table.table("duty")),
        probe=_probe(table.table("probe")),
        cold=table.flag("cold", default=False),
        unit=overrides.numbers(OVERRIDABLE, _unit_bounds) if overrides is not None else {},
        faults=tuple(_fault(item, start) for item in table.tables("fault")),
        services=tuple(_service(item, start) for item in table.tables("service")),
    )
    try:
        layout_of(plan)
    except ValueError as error:
        known = ", ".join(layout.name for layout in DIALECTS[dialect].layouts)
        table.refuse("length", f"cannot be: {error}", f"known: {known}")
    table.finish()
    return plan


def _unit_bounds(key: str) -> tuple[float, float]:
    if key.endswith("_error") or key in ("warm_gain", "clock_ppm"):
        return -500.0, 500.0
    if key == "averaging":
        return 1.0, 120.0
    if key == "revision":
        return 0.0, 255.0
    if key in ("floor", "burst", "sensing_volume", "warmth", "draught"):
        return 0.0, 1e5
    return 1e-3, 1e3


def _duty(table: Table | None) -> Duty | None:
    if table is None:
        return None
    every = table.duration("every", low=10.0)
    duty = Duty(every, table.duration("awake", low=1.0, high=every))
    table.finish()
    return duty


def _probe(table: Table | None) -> Probe | None:
    if table is None:
        return None
    probe = Probe(
        table.duration("every", 60.0, low=1.0),
        table.number("rh_error", 0.0, -50.0, 50.0),
        table.number("temperature_error", 0.0, -20.0, 20.0),
    )
    table.finish()
    return probe


def _fault(table: Table, start: float) -> faults.Fault:
    kind = table.choice("kind", faults.KINDS)
    usual = faults.KINDS[kind]
    fault = faults.Fault(
        kind,
        start + table.duration("at"),
        table.duration("lasts", inf, low=0.1),
        table.duration("ramp", 0.0),
        table.number("strength", usual.strength, 0.0, usual.most),
    )
    table.finish()
    return fault


def _service(table: Table, start: float) -> Service:
    service = Service(start + table.duration("at"), table.choice("kind", _SERVICES))
    table.finish()
    return service
