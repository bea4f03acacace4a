"""The capture format: a text recording of what came from the ports, replayable.

One line each: `T SENSOR frame HEX`, `T SENSOR climate RH TEMP`, `T SENSOR service KIND`, `T SENSOR line asleep|awake`;
T is Unix seconds with decimals, HEX is what came from the port, whole or damaged, `#` starts a comment. `line` says
that the sensor was put to sleep or woken, so that its silence is no fault and its first frames are warm-up; a capture
of sensors that never sleep has none. Owns lines to records and back; opens no file.
"""

from dataclasses import dataclass

from motekeep.errors import CaptureError
from motekeep.health.check import LineState
from motekeep.measure.dose import ServiceKind

# the longest burst that one read of a line gives, in hex, with its time and name
LONGEST_LINE = 9000


@dataclass(frozen=True, slots=True)
class FrameRecord:
    t: float
    sensor: str
    data: bytes


@dataclass(frozen=True, slots=True)
class ClimateRecord:
    t: float
    sensor: str
    rh_pct: float
    temperature_c: float | None


@dataclass(frozen=True, slots=True)
class ServiceRecord:
    t: float
    sensor: str
    kind: str


@dataclass(frozen=True, slots=True)
class LineRecord:
    """The sensor was put to sleep (`asleep`) or woken."""

    t: float
    sensor: str
    asleep: bool

    @property
    def state(self) -> LineState:
        return LineState.ASLEEP if self.asleep else LineState.AWAKE


Record = FrameRecord | ClimateRecord | ServiceRecord | LineRecord


def parse_line(line: str, name: str = "capture", number: int = 0) -> Record | None:
    """One line to its record; None for an empty line or a comment. Raises CaptureError naming file and line."""
    fields = line.split()
    if not fields or fields[0].startswith("#"):
        return None
    try:
        t, sensor, kind = float(fields[0]), fields[1], fields[2]
        if kind == "frame":
            return FrameRecord(t, sensor, bytes.fromhex(fields[3]))
        if kind == "climate":
            warm = None if len(fields) < 5 or fields[4] == "-" else float(fields[4])
            return ClimateRecord(t, sensor, float(fields[3]), warm)
        if kind == "service":
            return ServiceRecord(t, sensor, ServiceKind(fields[3]).value)
        if kind == "line":
            return LineRecord(t, sensor, _TURNS[fields[3]])
    except (ValueError, LookupError) as error:
        raise CaptureError(f"{name}, line {number}", f"not a capture line ({error})", _MEND) from error
    raise CaptureError(f"{name}, line {number}", f"unknown kind {kind!r}", _MEND)


_TURNS = {"asleep": True, "awake": False}
_MEND = (
    "a line is `T SENSOR frame HEX`, `T SENSOR climate RH TEMP`, `T SENSOR service KIND` or "
    "`T SENSOR line asleep|awake`; `#` starts a comment"
)


def format_record(record: Record) -> str:
    """The line of a record, without its end."""
    head = f"{record.t:.3f} {record.sensor}"
    match record:
        case FrameRecord(data=data):
            return f"{head} frame {data.hex()}"
        case ClimateRecord(rh_pct=rh_pct, temperature_c=warm):
            return f"{head} climate {rh_pct:.1f} {'-' if warm is None else format(warm, '.1f')}"
        case ServiceRecord(kind=kind):
            return f"{head} service {kind}"
        case LineRecord(asleep=asleep):
            return f"{head} line {'asleep' if asleep else 'awake'}"
