"""What a scenario asks for: a site, its air, its sensors and what happens to them.

Owns the plain records. Must not know TOML (`scenario`) or physics (`emulator`).
"""

from dataclasses import dataclass, field

from motesim.air import AirPlan
from motesim.events import Event
from motesim.faults import Fault


@dataclass(frozen=True, slots=True)
class Duty:
    """The sensor sleeps except for the first `awake_s` of every `every_s`, counted from the start."""

    every_s: float
    awake_s: float


@dataclass(frozen=True, slots=True)
class Probe:
    """A humidity and temperature probe beside the sensor; its lines go into a capture.

    It sits in the warmth of the sensing cell and reads off by `rh_error` % and `temperature_error` degC.
    """

    every_s: float = 60.0
    rh_error: float = 0.0
    temperature_error: float = 0.0


@dataclass(frozen=True, slots=True)
class Service:
    """What a person did at the sensor, as a line of the capture."""

    at: float
    kind: str


@dataclass(frozen=True, slots=True)
class SensorPlan:
    """One sensor. `length` picks the layout of a dialect that has several (None: its usual one).

    `unit` overrides parameters of the personality that `seed` draws. `cold` begins with power-on at the start.
    """

    name: str
    dialect: str = "bm"
    length: int | None = None
    seed: int = 1
    period_s: float = 1.0
    duty: Duty | None = None
    probe: Probe | None = None
    cold: bool = False
    unit: dict[str, float] = field(default_factory=dict)
    faults: tuple[Fault, ...] = ()
    services: tuple[Service, ...] = ()


@dataclass(frozen=True, slots=True)
class SitePlan:
    """One site: its air from `start` (Unix seconds) on for `seconds`, and its sensors, which all breathe it."""

    name: str
    seed: int
    start: float
    seconds: float
    sensors: tuple[SensorPlan, ...]
    air: AirPlan = field(default_factory=AirPlan)
    events: tuple[Event, ...] = ()
    about: str = ""

    def sensor(self, name: str) -> SensorPlan:
        """Raises KeyError on a name that is not there."""
        for sensor in self.sensors:
            if sensor.name == name:
                return sensor
        raise KeyError(name)
