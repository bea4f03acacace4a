"""A frame, the layout that gives its numbers their meaning, and what a decoder is.

Owns the types every dialect shares. Knows no clock and no port: when a frame came is the observation's business.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Protocol

from motekeep.instant import Instant


@dataclass(frozen=True, slots=True)
class Layout:
    """What the numbers of a frame mean, so that no check has to assume six counts.

    `mass` names the mass channels (`pm1`, `pm2_5`, `pm4`, `pm10`) in frame order, in ug/m3 with a step of
    `mass_resolution` and a declared end of range `mass_top`. `sizes_um` are the lower edges of the cumulative
    count channels, rising; counts are per 0.1 L (UCUM `/dL`). `count_top` is the largest value that the field
    can carry: a count there is censored, not a number; None where the field has no such end.
    """

    name: str
    mass: tuple[str, ...]
    mass_resolution: float
    mass_top: float
    sizes_um: tuple[float, ...] = ()
    count_top: float | None = None
    ambient: bool = False
    climate: bool = False


@dataclass(frozen=True, slots=True)
class Frame:
    """One valid protocol unit, decoded.

    `mass` and `counts` follow the order of the layout. `mass_ambient` is the second mass triple where the dialect
    has one (bent by the firmware at high values; kept beside, never used as raw). `error` holds the dialect's own
    error bits, 0 for none. `payload` is the part of the bytes that a frozen output would repeat.
    """

    layout: Layout
    mass: tuple[float, ...]
    counts: tuple[float, ...]
    payload: bytes
    mass_ambient: tuple[float, ...] = ()
    rh_pct: float | None = None
    temperature_c: float | None = None
    revision: int | None = None
    error: int = 0


@dataclass(frozen=True, slots=True)
class Damage:
    """Bytes that were not a frame: one event for each frame that was hit or each stretch of rubbish.

    `reason` is one of `checksum`, `length`, `tail`, `escape`, `rubbish`; `size` counts the bytes that were claimed or
    known to be lost when the event was told.
    """

    reason: str
    size: int


@dataclass(slots=True)
class Tally:
    """What a decoder has seen since it was made: frames, bytes, headers, and what it dropped and why.

    `dropped` counts the `Damage` events by reason. A polled dialect also counts `refused` there: whole answers of a
    sensor that said no to a read.
    """

    frames: int = 0
    bytes: int = 0
    headers: int = 0
    dropped: dict[str, int] = field(default_factory=dict)

    def drop(self, reason: str) -> None:
        self.dropped[reason] = self.dropped.get(reason, 0) + 1


class Decoder(Protocol):
    """A state machine from bytes to frames, fed with any split of them.

    Never raises on input, holds no more than one longest frame between calls, loses at most the frame that was
    hit: after a rejected frame it searches again from the byte after the false start. `reset` forgets a half
    frame, after the port was opened again.
    """

    tally: Tally

    def feed(self, data: bytes) -> list[Frame | Damage]: ...

    def reset(self) -> None: ...


@dataclass(frozen=True, slots=True)
class Commands:
    """The bytes of sensor commands; None where the dialect has no such command.

    `wake` also makes the sensor measure, and in a streaming dialect leaves its mode as it was. `status` asks for the
    sensor's own error bits where its data frames do not carry them in full; to be sent apart from `read`, after the
    answer to it.
    """

    sleep: bytes | None = None
    wake: bytes | None = None
    read: bytes | None = None
    stream: bytes | None = None
    poll_mode: bytes | None = None
    status: bytes | None = None


@dataclass(frozen=True, slots=True)
class Dialect:
    """One wire dialect: how its line is set, how it is decoded, what can be sent to it.

    `encode` is the way back, for the emulator and the tests: the bytes whose decoding gives this frame. `polled`
    dialects speak only after `commands.read`. `start` is sent after opening the line, before anything else
    is expected of it. `warm_up_s` is how long after power or wake its numbers are not to be trusted.
    `error_bits` names the bits of `Frame.error` whose meaning is known.
    """

    name: str
    baud: int
    polled: bool
    layouts: tuple[Layout, ...]
    decoder: Callable[[], Decoder]
    encode: Callable[[Frame], bytes]
    commands: Commands
    start: bytes = b""
    warm_up_s: float = 30.0
    longest: int = 64
    error_bits: tuple[tuple[int, str], ...] = ()


@dataclass(frozen=True, slots=True)
class Observation:
    """A frame with its time stamps."""

    frame: Frame
    at: Instant
