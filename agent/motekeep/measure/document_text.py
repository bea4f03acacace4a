"""The text of a calibration document: TOML, checked whole before any of it is used.

Owns the text form and its refusals, each a DocumentError with the path of the key. Must not know how a document is
applied, signed or stored.

The form is TOML. Every parameter states its standard uncertainty. `[residual]` says which mass channels the document
corrects and what its fit left over for each: it is taken to be there whatever the parameters say. `[range]` says where
the fit holds. `[[covariance]]` ties parameters that were fitted together, named `step.parameter`, a step being called
by its `name`, or by its kind when it has none:

    issue = 7
    site = "quarry"
    gateway = "east-gate"
    sensor = "north"
    made_at = 2026-11-20T10:00:00Z
    valid_from = 2026-11-20T12:00:00Z
    valid_until = 2027-11-20T00:00:00Z
    fits_revision = 151                       # optional: of the sensor

    [range]                                   # raw ug/m3 of each corrected channel; rh in %, t in Cel
    pm2_5 = [0.0, 150.0]
    rh = [20.0, 85.0]

    [[step]]
    kind = "humidity-growth"
    kappa = { value = 0.35, u = 0.05 }

    [[step]]
    kind = "linear"
    channels = ["pm2_5"]                      # optional: all of [residual] without it
    slope = { value = 0.92, u = 0.03 }
    offset = { value = 0.4, u = 0.2 }

    [[covariance]]
    of = ["linear.slope", "linear.offset"]
    value = -0.004

    [residual]                                # ug/m3, and as a share of the figure, added in quadrature
    pm2_5 = { u = 0.8, relative = 0.05 }

    [climate]                                 # optional: the sensor of RH and T
    u_rh = 3.0
    u_t = 0.5
    max_age = 300.0

    [basis]                                   # optional: what it was made from, for people
    reference = "filter sampler beside the inlet, weighed daily"
    data = "sha256:..."
    hours = 1340
    metrics = { r2 = 0.91, rmse = 1.4 }
"""

import tomllib
from collections.abc import Mapping
from datetime import UTC, datetime

from motekeep.errors import DocumentError
from motekeep.measure.covariance import covariance_matrix
from motekeep.measure.document import (
    CHANNELS,
    CLIMATE_MAX_AGE_S,
    U_RH_PCT,
    U_T_C,
    Basis,
    CalibrationDocument,
    CalibrationStep,
    ClimateStatement,
    Estimate,
    Residual,
    digest,
)
from motekeep.measure.steps import STEPS
from motekeep.measure.steps.step import Need, Numbers, Parameter, StepKind, StepRefusedError
from motekeep.measure.strict_table import Table

# A document of twelve steps is 4 kB. The limit keeps a hostile one from costing a device memory before it is refused.
LARGEST_BYTES = 64 * 1024
# Documents have three levels; more is rubbish, and a parser that recurses must not be led there.
DEEPEST = 8
# tomllib takes time with the square of the parts of a dotted key (a minute for one of 64 KiB), and a key is one line.
LONGEST_LINE = 500
MOST_STEPS = 12
MOST_POINTS = 12
MOST_PARAMETERS = 48
MOST_PAIRS = MOST_PARAMETERS * (MOST_PARAMETERS - 1) // 2
MOST_METRICS = 32

# One byte in most dialects; `aa` has two bytes of identity in its place.
MOST_REVISION = 65535

EARLIEST = datetime(2020, 1, 1, tzinfo=UTC).timestamp()
LATEST = datetime(2200, 1, 1, tzinfo=UTC).timestamp()

RANGES = {"rh": (0.0, 100.0, "%"), "t": (-60.0, 85.0, "Cel")} | dict.fromkeys(CHANNELS, (0.0, 20000.0, "ug/m3"))


def parse(text: bytes) -> CalibrationDocument:
    """Read a document from its exact bytes. Raises DocumentError naming the key at fault, before anything is used."""
    top = Table(_toml(text))
    issue = top.whole("issue", 1, 2**53)
    site, gateway, sensor = top.text("site"), top.text("gateway"), top.text("sensor")
    made_at, valid_from, valid_until = _dates(top)
    fits_revision = top.whole("fits_revision", 0, MOST_REVISION) if top.has("fits_revision") else None
    residual = _residual(top.table("residual"))
    steps = _steps(top, tuple(residual))
    ranges = _ranges(top.table("range"), steps, residual)
    estimates = [e for s in steps for e in s.parameters]
    pairs = top.tables("covariance", MOST_PAIRS) if top.has("covariance") else []
    covariance = covariance_matrix(pairs, estimates)
    climate = _climate(top.table("climate")) if top.has("climate") else ClimateStatement()
    basis = _basis(top.table("basis")) if top.has("basis") else None
    top.finish(("fits_revision", "covariance", "climate", "basis"))
    return CalibrationDocument(
        issue=issue,
        site=site,
        gateway=gateway,
        sensor=sensor,
        made_at=made_at,
        valid_from=valid_from,
        valid_until=valid_until,
        fits_revision=fits_revision,
        ranges=ranges,
        steps=steps,
        covariance=covariance,
        residual=residual,
        climate=climate,
        basis=basis,
        digest=digest(text),
    )


def _toml(text: bytes) -> dict[str, object]:
    whole = "<text>"
    if len(text) > LARGEST_BYTES:
        raise DocumentError(whole, f"has {len(text)} bytes", f"{LARGEST_BYTES} are possible")
    try:
        decoded = text.decode()
    except UnicodeDecodeError as error:
        raise DocumentError(whole, f"is not UTF-8 at byte {error.start}", "save it as UTF-8") from error
    for number, line in enumerate(decoded.split("\n"), 1):
        if len(line) > LONGEST_LINE:
            raise DocumentError(whole, f"has {len(line)} characters in line {number}", f"{LONGEST_LINE} are possible")
    try:
        items = tomllib.loads(decoded)
    except RecursionError as error:
        raise DocumentError(whole, "is nested too deeply", "three levels are all that a document has") from error
    except ValueError as error:  # TOMLDecodeError, and dates or numbers that Python cannot hold
        why = "".join(c if c.isprintable() else "?" for c in str(error)[:200])
        raise DocumentError(whole, f"is not TOML: {why}", "mend the line") from error
    _check_depth(items, whole)
    return items


def _check_depth(items: object, path: str) -> None:
    level = [items]
    for _ in range(DEEPEST):
        level = [
            child
            for item in level
            if isinstance(item, dict | list)
            for child in (item.values() if isinstance(item, dict) else item)
        ]
        if not level:
            return
    raise DocumentError(path, "is nested too deeply", "three levels are all that a document has")


def _dates(top: Table) -> tuple[float, float, float]:
    keys = ("made_at", "valid_from", "valid_until")
    moments = [top.moment(key) for key in keys]
    for key, moment in zip(keys, moments, strict=True):
        if not EARLIEST <= moment <= LATEST:
            raise top.refuse(key, "lies outside of the years 2020 to 2199", "state the true date")
    made_at, valid_from, valid_until = moments
    if valid_until <= valid_from:
        raise top.refuse("valid_until", "is not after valid_from", "state the later date")
    if valid_until <= made_at:
        raise top.refuse("valid_until", "is not after made_at", "a document cannot have expired when it is made")
    return made_at, valid_from, valid_until


def _residual(table: Table) -> dict[str, Residual]:
    residual: dict[str, Residual] = {}
    for channel in [c for c in CHANNELS if table.has(c)]:
        entry = table.table(channel)
        u = entry.number("u", 0.0, 1000.0, "ug/m3")
        relative = entry.number("relative", 0.0, 2.0) if entry.has("relative") else 0.0
        entry.finish(("relative",))
        if u == 0.0 and relative == 0.0:
            raise DocumentError(entry.path, "claims a fit that left nothing over", "state the residual of the fit")
        residual[channel] = Residual(u, relative)
    table.finish(CHANNELS)
    if not residual:
        raise DocumentError(table.path, "names no mass channel", f"state one or more of {', '.join(CHANNELS)}")
    return residual


def _steps(top: Table, covered: tuple[str, ...]) -> tuple[CalibrationStep, ...]:
    steps: list[CalibrationStep] = []
    for table in top.tables("step", MOST_STEPS):
        step = _step(table, covered)
        if any(step.name == earlier.name for earlier in steps):
            raise table.refuse("name", f"{step.name!r} is taken by an earlier step", "give each step its own `name`")
        steps.append(step)
    if sum(len(s.parameters) for s in steps) > MOST_PARAMETERS:
        raise top.refuse("step", "has too many parameters", f"{MOST_PARAMETERS} are possible")
    idle = [c for c in covered if not any(c in s.channels for s in steps)]
    if idle:
        raise top.refuse("residual." + idle[0], "is a channel that no step corrects", "add it to a step or drop it")
    return tuple(steps)


def _step(table: Table, covered: tuple[str, ...]) -> CalibrationStep:
    kind_name = table.text("kind")
    kind = STEPS.get(kind_name)
    if kind is None:
        raise table.refuse("kind", f"{kind_name!r} is not known", f"known are {', '.join(STEPS)}")
    name = table.text("name") if table.has("name") else kind_name
    channels = _channels(table, covered) if table.has("channels") else covered
    settings = _settings(table, kind)
    parameters, values = _parameters(table, kind, name)
    table.finish(("name", "channels", *[p.name for p in kind.parameters], *[s.name for s in kind.settings]))
    try:
        step = kind.build(values, settings)
    except StepRefusedError as error:
        raise table.refuse(error.key, error.why, f"see what {kind_name} asks for") from error
    return CalibrationStep(name, kind_name, channels, parameters, step)


def _channels(table: Table, covered: tuple[str, ...]) -> tuple[str, ...]:
    channels: list[str] = []
    for i, channel in enumerate(table.elements("channels", len(CHANNELS))):
        if not isinstance(channel, str) or channel not in covered or channel in channels:
            raise table.refuse(
                f"channels[{i}]", "is no channel of [residual], or there twice", f"choose from {', '.join(covered)}"
            )
        channels.append(channel)
    return tuple(channels)


def _settings(table: Table, kind: StepKind) -> dict[str, tuple[float, ...]]:
    settings: dict[str, tuple[float, ...]] = {}
    for s in kind.settings:
        if not s.required and not table.has(s.name):
            if s.default is not None:
                settings[s.name] = (s.default,)
        elif s.many:
            settings[s.name] = table.numbers(s.name, s.low, s.high, s.unit, MOST_POINTS)
        else:
            settings[s.name] = (table.number(s.name, s.low, s.high, s.unit),)
    return settings


def _parameters(table: Table, kind: StepKind, step: str) -> tuple[tuple[Estimate, ...], Numbers]:
    estimates: list[Estimate] = []
    values: dict[str, tuple[float, ...]] = {}
    for p in kind.parameters:
        if not p.required and not table.has(p.name):
            continue
        if p.many:
            elements = table.elements(p.name, MOST_POINTS)
            own = [_estimate(e, f"{table.at(p.name)}[{i}]", p, f"{step}.{p.name}[{i}]") for i, e in enumerate(elements)]
        else:
            single = table.anything(p.name, "{ value = ..., u = ... }")
            own = [_estimate(single, table.at(p.name), p, f"{step}.{p.name}")]
        estimates += own
        values[p.name] = tuple([e.value for e in own])
    return tuple(estimates), values


def _estimate(item: object, path: str, parameter: Parameter, name: str) -> Estimate:
    if not isinstance(item, dict):
        raise DocumentError(path, "states no uncertainty", "state { value = ..., u = ... }; u = 0 where it is exact")
    table = Table(item, path)
    value = table.number("value", parameter.low, parameter.high, parameter.unit)
    u = table.number("u", 0.0, parameter.high - parameter.low, parameter.unit)
    table.finish()
    return Estimate(name, value, u)


def _ranges(
    table: Table, steps: tuple[CalibrationStep, ...], residual: Mapping[str, Residual]
) -> dict[str, tuple[float, float]]:
    needed = set(residual) | {need.value for s in steps for need in s.step.needs if need is not Need.COUNT}
    ranges: dict[str, tuple[float, float]] = {}
    for name, (lowest, highest, unit) in RANGES.items():
        if not table.has(name) and name not in needed:
            continue
        ends = table.numbers(name, lowest, highest, unit, 2)
        if len(ends) != 2 or not ends[0] < ends[1]:
            raise table.refuse(name, "is not a range", "state [low, high] with low below high")
        ranges[name] = (ends[0], ends[1])
    table.finish(RANGES)
    return ranges


def _climate(table: Table) -> ClimateStatement:
    statement = ClimateStatement(
        u_rh=table.number("u_rh", 0.0, 50.0, "%") if table.has("u_rh") else U_RH_PCT,
        u_t=table.number("u_t", 0.0, 20.0, "Cel") if table.has("u_t") else U_T_C,
        max_age_s=table.number("max_age", 1.0, 86400.0, "s") if table.has("max_age") else CLIMATE_MAX_AGE_S,
    )
    table.finish(("u_rh", "u_t", "max_age"))
    return statement


def _basis(table: Table) -> Basis:
    metrics: dict[str, float] = {}
    if table.has("metrics"):
        entries = table.table("metrics")
        names = entries.keys()
        if len(names) > MOST_METRICS:
            raise table.refuse("metrics", f"has {len(names)} entries", f"{MOST_METRICS} are possible")
        metrics = {name: entries.number(name, -1e12, 1e12) for name in names}
    basis = Basis(
        reference=table.text("reference") if table.has("reference") else None,
        data=table.text("data") if table.has("data") else None,
        hours=table.number("hours", 0.0, 1e6, "h") if table.has("hours") else None,
        metrics=metrics,
    )
    table.finish(("reference", "data", "hours", "metrics"))
    return basis
