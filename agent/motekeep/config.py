"""The configuration: pydantic models of config.toml and how its faults are told.

Owns the keys, their limits and the one-line errors that name file, key and mend. Reads one file; knows nothing of
what the values are for.
"""

import difflib
import tomllib
from ipaddress import ip_address
from pathlib import Path
from typing import Annotated, Any, Literal, get_args

from pydantic import BaseModel, ConfigDict, Field, ValidationError, field_validator, model_validator

from motekeep.errors import ConfigError
from motekeep.wire.dialects import DIALECTS

# A name is one level of a topic and part of a file name: no slash, no wildcard, no space.
Name = Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$")]
Seconds = Annotated[float, Field(gt=0, le=86400)]


class Section(BaseModel):
    model_config = ConfigDict(extra="forbid", frozen=True)


class FrameClimate(Section):
    from_: Literal["frame"] = Field(alias="from")


class FileClimate(Section):
    """Linux IIO or hwmon: the folder of the device in sysfs."""

    from_: Literal["iio"] = Field(alias="from")
    path: Path
    max_age: Seconds = 120.0


class TopicClimate(Section):
    """An MQTT topic with {"rh": %, "t": Cel}; too old after `max_age` seconds."""

    from_: Literal["mqtt"] = Field(alias="from")
    topic: Annotated[str, Field(min_length=1, max_length=200, pattern=r"^[^+#]+$")]
    max_age: Seconds = 900.0


class FixedClimate(Section):
    from_: Literal["fixed"] = Field(alias="from")
    rh: float = Field(ge=0, le=100)
    t: float | None = Field(default=None, ge=-60, le=85)


ClimateSource = Annotated[FrameClimate | FileClimate | TopicClimate | FixedClimate, Field(discriminator="from_")]


class Duty(Section):
    every: Seconds
    awake: Seconds

    @model_validator(mode="after")
    def _fits(self) -> "Duty":
        if self.awake >= self.every:
            raise ValueError("awake must be shorter than every")
        return self


class Limits(Section):
    dose_ug: float = Field(default=700.0, gt=0)
    laser_hours: float = Field(default=8000.0, gt=0)


class Sensor(Section):
    name: Name
    port: Annotated[str, Field(min_length=1)]
    dialect: str
    period: float = Field(default=1.0, ge=0.2, le=600)
    flow: float = Field(default=0.1, gt=0, le=50)
    twin: str | None = None
    climate: ClimateSource | None = None
    duty: Duty | None = None
    mounting: Literal["optics-down", "sideways", "optics-up"] = "optics-down"
    limits: Limits = Limits()

    @field_validator("dialect")
    @classmethod
    def _known(cls, value: str) -> str:
        if value not in DIALECTS:
            raise ValueError(f"no dialect {value!r}; known are {', '.join(DIALECTS)}")
        return value

    @model_validator(mode="after")
    def _can_sleep(self) -> "Sensor":
        if self.duty is not None and DIALECTS[self.dialect].commands.sleep is None:
            raise ValueError(f"duty needs a sleep command, which dialect {self.dialect!r} does not have")
        if isinstance(self.climate, FrameClimate) and not any(x.climate for x in DIALECTS[self.dialect].layouts):
            raise ValueError(f"climate from frame: dialect {self.dialect!r} carries none")
        return self


class Tls(Section):
    ca: Path | None = None
    cert: Path | None = None
    key: Path | None = None

    @model_validator(mode="after")
    def _pair(self) -> "Tls":
        if (self.cert is None) != (self.key is None):
            raise ValueError("cert and key go together")
        return self


class Broker(Section):
    host: Annotated[str, Field(min_length=1)]
    port: int = Field(default=8883, ge=1, le=65535)
    root: Annotated[str, Field(pattern=r"^[^+#\s]{1,100}$")] = "motekeep"
    receipt: Literal["puback", "taken"] = "puback"
    username: str | None = None
    password_file: Path | None = None
    tls: Tls | None = None
    window: int = Field(default=20, ge=1, le=1000)
    late_rate: float = Field(default=5.0, ge=0, le=1000)

    @field_validator("host")
    @classmethod
    def _alone(cls, value: str) -> str:
        """A name that no resolver can take would stop the daemon from measuring, not only from sending."""
        sound = value.isprintable() and not set(" /") & set(value)
        try:
            value.encode("idna")
            if ":" in value:
                ip_address(value)
        except ValueError:  # UnicodeError is one
            sound = False
        if not sound:
            raise ValueError("not a host's name or address alone; the port has a key of its own")
        return value

    @model_validator(mode="after")
    def _login(self) -> "Broker":
        if self.password_file is not None and self.username is None:
            raise ValueError("password_file needs a username")
        return self


class Store(Section):
    path: Path = Path("/var/lib/motekeep/journal.db")
    keep_days: int = Field(default=400, ge=1, le=36500)
    # under 4 MiB there is no room for the tables, a day of minutes and the reserve at once
    max_bytes: int = Field(default=536_870_912, ge=4_194_304)
    clock_wait: float = Field(default=900.0, ge=0, le=604_800)
    trust_rtc: bool = False


class Calibration(Section):
    folder: Path = Path("/var/lib/motekeep/calibration")
    signers: Path = Path("/etc/motekeep/signers")
    revoked: Path | None = None
    max_shift: float = Field(default=0.5, gt=0, le=10)
    soak: float = Field(default=3600.0, ge=0)
    required: bool = False


class Health(Section):
    every: float = Field(default=60.0, ge=5, le=3600)
    active: float = Field(default=4.0, ge=0, le=24)  # a day


class Config(Section):
    """All of config.toml."""

    site: Name
    gateway: Name
    interval: int = Field(default=60, ge=10, le=3600)
    sensor: Annotated[tuple[Sensor, ...], Field(min_length=1, max_length=16)]
    broker: Broker
    store: Store = Store()
    calibration: Calibration = Calibration()
    health: Health = Health()

    @field_validator("interval")
    @classmethod
    def _divides(cls, value: int) -> int:
        if 3600 % value:
            raise ValueError(f"{value} s does not divide an hour; use 10, 30, 60, 300, 600 ...")
        return value

    @model_validator(mode="after")
    def _sensors(self) -> "Config":
        names = [s.name for s in self.sensor]
        for sensor in self.sensor:
            if names.count(sensor.name) > 1:
                raise ValueError(f"sensor {sensor.name!r} stands twice; each needs its own name")
            if sensor.twin is not None and (sensor.twin == sensor.name or sensor.twin not in names):
                raise ValueError(f"twin {sensor.twin!r} of {sensor.name!r} is not another sensor of this file")
            if sensor.period * 2 > self.interval:
                raise ValueError(
                    f"sensor {sensor.name!r}: period {sensor.period:g} s leaves too few frames an interval"
                )
        return self

    def sensor_named(self, name: str) -> Sensor | None:
        return next((s for s in self.sensor if s.name == name), None)


def load(path: Path) -> Config:
    """Read and check a configuration file. Raises ConfigError with one line: file, key, mend."""
    attempted = f"reading {path}"
    try:
        text = path.read_text(encoding="utf-8")
    except FileNotFoundError as error:
        raise ConfigError(attempted, "no such file", "copy config.example.toml there and edit it") from error
    except (OSError, UnicodeDecodeError) as error:
        raise ConfigError(attempted, str(error), "make it a readable UTF-8 text file") from error
    return parse(text, str(path))


def parse(text: str, name: str) -> Config:
    """Check the text of a configuration file; `name` is what errors call it."""
    try:
        data = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise ConfigError(name, f"not valid TOML: {error}", "mend that line") from error
    try:
        return Config.model_validate(data)
    except ValidationError as error:
        raise _told(error, data, name) from error


def _told(error: ValidationError, data: dict[str, Any], name: str) -> ConfigError:
    """The first fault as one line. Any: raw TOML, walked only to name the sensor that a fault is in."""
    # an unknown key is told before a missing one: mostly the one is the other, misspelt
    first = min(error.errors(), key=lambda fault: fault["type"] != "extra_forbidden")
    levels = [x for x in first["loc"] if x not in get_args(Literal["frame", "iio", "mqtt", "fixed"])]
    key = ""
    for level in levels:
        if isinstance(level, int):
            entry = data.get("sensor", [])[level]
            label = entry.get("name", level + 1) if isinstance(entry, dict) else level + 1
            key += f"[{label}]"
        else:
            key += f".{level}" if key else str(level)
    if first["type"] == "extra_forbidden":
        unknown = str(levels[-1])
        near = difflib.get_close_matches(unknown, _known_keys(), n=1)
        mend = f"did you mean {near[0]!r}?" if near else "remove it; config.example.toml has every key"
        return ConfigError(name, f"{key}: unknown key", mend)
    if first["type"] == "missing":
        return ConfigError(name, f"{key}: missing", "add it; config.example.toml shows how")
    why = str(first["msg"]).removeprefix("Value error, ")
    given = first.get("input")
    shown = f" (got {given!r})" if isinstance(given, str | int | float | bool) else ""
    return ConfigError(name, f"{key + ': ' if key else ''}{why}{shown}", "mend that key")


def _known_keys() -> list[str]:
    sections: list[type[Section]] = [Config, Sensor, Broker, Store, Calibration, Health, Tls, Duty, Limits]
    sections += [FixedClimate, FileClimate, TopicClimate]
    return sorted({field.alias or key for section in sections for key, field in section.model_fields.items()})
