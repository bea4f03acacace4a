"""Dialect `stuffed`: `7E` address command state length data checksum `7E`, escapes by `7D`. 115200 8N1, polled.

Owns its layout, decoder, encoder and commands. Layout and commands from memory, common practice; requests have the
same frame without the state byte. Ten big-endian floats answer "read measured values": mass PM1, 2.5, 4, 10 in ug/m3,
number from 0.3 um up to 0.5, 1, 2.5, 4, 10 um per cm3, typical size.

The numbers accumulate upwards. Here they become counts above a size per 0.1 L like everywhere else: above 0.3 um is the
whole number, above 0.5 um the whole less the number up to 0.5 um, and so on, times 100 cm3. Float rounding in the
sensor can make such a difference slightly negative, so it ends at zero.

What is neither data nor damage: answers to other commands; an empty answer with state 0 (nothing new yet). An answer
that carries an error state and no numbers is counted in the tally as `refused`: the sensor is not measuring.

`Frame.error` holds the fan-speed, fan and laser bits of the status word where that word has them, and the state byte in
bits 24 to 31. The status word has an answer of its own: its bits stay on all frames until the next one. Any non-zero
state of an answer with numbers is thus an error of the sensor: its top bit says that the status word has bits set, its
other bits that the command went wrong.
"""

from math import isfinite
from struct import Struct
from typing import Final

from motekeep.wire.frame import Commands, Dialect, Frame, Layout
from motekeep.wire.framed import clipped
from motekeep.wire.search import MORE, Search, Verdict

FLAG: Final = 0x7E
ESCAPE: Final = 0x7D
ESCAPED: Final = {original ^ 0x20: original for original in (0x11, 0x13, ESCAPE, FLAG)}

START, STOP, READ_VALUES, SLEEP, WAKE, READ_STATUS = 0x00, 0x01, 0x03, 0x10, 0x11, 0xD2

FAN_SPEED: Final = 1 << 21
LASER: Final = 1 << 5
FAN: Final = 1 << 4
STATUS_BITS: Final = FAN_SPEED | LASER | FAN
STATE_AT: Final = 24

VALUES: Final = Struct(">10f")
STATUS: Final = Struct(">Ix")
FLOAT_TOP: Final = Struct(">f").unpack(b"\x7f\x7f\xff\xff")[0]
CM3_PER_DL: Final = 100.0

OVERHEAD: Final = 5  # address, command, state, length, checksum
# The longest answer that is asked for here is the one with the values; every byte of it can come escaped. Longer units
# exist in the protocol (255 bytes of data) and are given up as damage.
LONGEST: Final = 2 + 2 * (OVERHEAD + VALUES.size)

# A float near the declared top of 1000 ug/m3 moves in steps of 6.1e-5.
STUFFED: Final = Layout("stuffed", ("pm1", "pm2_5", "pm4", "pm10"), 1e-4, 1000.0, (0.3, 0.5, 1.0, 2.5, 4.0))


class StuffedDecoder(Search):
    """Units between flags. A closing flag may also open the next unit: when one flag was lost they share the other."""

    __slots__ = ("_status",)

    def __init__(self) -> None:
        super().__init__(bytes([FLAG]), LONGEST)
        self._status = 0

    def reset(self) -> None:
        super().reset()
        self._status = 0

    def judge(self, buffer: bytes, start: int) -> Verdict:
        close = buffer.find(FLAG, start + 1, start + LONGEST)
        if close < 0:
            return (LONGEST, "length") if len(buffer) - start >= LONGEST else MORE
        if close == start + 1:
            return 1, "idle"
        size = close - start + 1
        body = unescaped(buffer[start + 1 : close])
        if body is None:
            return size, "escape"
        if len(body) < OVERHEAD or len(body) != OVERHEAD + body[3]:
            # One sensor on a line has address 0: what begins otherwise is rubbish between two units.
            return (size, "length") if body[0] == 0 else (1, "rubbish")
        if sum(body) & 0xFF != 0xFF:  # the checksum is the inverted low byte of the sum of all before it
            return size, "checksum"
        return size, self._answer(body[1], body[2], body[4:-1])

    def _answer(self, command: int, state: int, data: bytes) -> Frame | str | None:
        if command == READ_STATUS and len(data) == STATUS.size:
            self._status = STATUS.unpack(data)[0] & STATUS_BITS
        if command != READ_VALUES:
            return None
        if not data:
            if state:
                self.tally.drop("refused")
            return None
        if len(data) != VALUES.size:
            return "length"
        values = VALUES.unpack(data)
        if not all(map(isfinite, values)):
            return "rubbish"
        return frame_of(values, data, self._status | state << STATE_AT)


def frame_of(values: tuple[float, ...], data: bytes, error: int) -> Frame:
    whole = values[8]
    counts = (whole, *[max(whole - below, 0.0) for below in values[4:8]])
    return Frame(STUFFED, values[:4], tuple([CM3_PER_DL * count for count in counts]), data, error=error)


def unescaped(stuffed: bytes) -> bytes | None:
    """The bytes that were meant; None when an escape is followed by what is never escaped, or by nothing."""
    if ESCAPE not in stuffed:
        return stuffed
    first, *rest = stuffed.split(bytes([ESCAPE]))
    parts = [first]
    for part in rest:
        if not part or part[0] not in ESCAPED:
            return None
        parts += [bytes([ESCAPED[part[0]]]), part[1:]]
    return b"".join(parts)


def escaped(plain: bytes) -> bytes:
    return b"".join([bytes([ESCAPE, b ^ 0x20]) if b ^ 0x20 in ESCAPED else bytes([b]) for b in plain])


def unit(*head: int, data: bytes = b"") -> bytes:
    """A whole unit: the head is address, command and, in answers, state; length and checksum are added."""
    body = bytes([*head, len(data)]) + data
    return b"\x7e" + escaped(body + bytes([~sum(body) & 0xFF])) + b"\x7e"


def encode(frame: Frame) -> bytes:
    """What the sensor sends for this frame: the answer with the status word, then the one with the values.

    A typical size, which a frame does not hold, is zero unless `payload` already says the same as the fields.
    Raises ValueError for a frame of another layout.
    """
    if frame.layout.name != STUFFED.name:
        raise ValueError(f"a frame of layout {frame.layout.name} cannot be encoded as stuffed")
    data = frame.payload
    if len(data) != VALUES.size or frame_of(VALUES.unpack(data), data, frame.error) != frame:
        whole = frame.counts[0]
        numbers = [*[(whole - above) / CM3_PER_DL for above in frame.counts[1:]], whole / CM3_PER_DL]
        data = VALUES.pack(*[min(max(value, -FLOAT_TOP), FLOAT_TOP) for value in (*frame.mass, *numbers, 0.0)])
    status = STATUS.pack(frame.error & STATUS_BITS)
    state = clipped(frame.error >> STATE_AT, 0, 0xFF)
    return unit(0, READ_STATUS, state, data=status) + unit(0, READ_VALUES, state, data=data)


MEASURE: Final = unit(0, START, data=b"\x01\x03")  # as big-endian floats

# FF first: its edge wakes the interface of a sleeping sensor, which hears the command only after that. The sensor falls
# asleep only when it does not measure, and does not measure by itself after waking.
COMMANDS: Final = Commands(
    sleep=unit(0, STOP) + unit(0, SLEEP),
    wake=b"\xff" + unit(0, WAKE) + MEASURE,
    read=unit(0, READ_VALUES),
    stream=MEASURE,
    status=unit(0, READ_STATUS, data=b"\x01"),  # 01: forget them once told, so that a passing fault does not stay
)

DIALECT: Final = Dialect(
    name="stuffed",
    baud=115200,
    polled=True,
    layouts=(STUFFED,),
    decoder=StuffedDecoder,
    encode=encode,
    commands=COMMANDS,
    start=b"\xff" + unit(0, WAKE) + MEASURE,
    warm_up_s=30.0,
    longest=LONGEST,
    error_bits=((FAN_SPEED, "fan off its speed"), (LASER, "laser current out of range"), (FAN, "fan stands still")),
)
