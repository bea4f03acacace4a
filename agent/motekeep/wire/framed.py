"""Framing by `42 4D`: header, length word, big-endian words, the 16-bit sum of all bytes before it.

Owns search, length, sum and the reading of words by a form. Must not know which forms a dialect has: `bm` and
`bm_climate` do. Layouts from memory, common practice.
"""

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from struct import Struct
from typing import Final

from motekeep.wire.frame import Commands, Frame, Layout
from motekeep.wire.search import MORE, Search, Verdict

HEADER: Final = b"\x42\x4d"
WORD: Final = Struct(">H")
COUNT_TOP: Final = 65535.0
DECLARED_TOP: Final = 1000.0  # ug/m3; common practice, no source: effective to 500, declared to 1000

# The answer to a command: length word 4, the command, its parameter. Neither data nor damage.
ANSWER_LENGTH: Final = b"\x00\x04"
ANSWER_SIZE: Final = 8


@dataclass(frozen=True, slots=True)
class Form:
    """How the bytes of one length are read.

    `words` is the struct format of what lies between length and sum, which ends with the bytes revision and error.
    The first six words are the masses, factory triple first; the counts of the layout follow. `climate_at` is the
    index of the temperature among the fields, humidity follows it. What no field of a frame holds is skipped.
    """

    layout: Layout
    words: str
    climate_at: int = 0
    struct: Struct = field(init=False)
    size: int = field(init=False)
    length: bytes = field(init=False)
    counts_end: int = field(init=False)

    def __post_init__(self) -> None:
        struct = Struct(">" + self.words)
        object.__setattr__(self, "struct", struct)
        object.__setattr__(self, "size", struct.size + 6)
        object.__setattr__(self, "length", WORD.pack(struct.size + 2))
        object.__setattr__(self, "counts_end", 6 + len(self.layout.sizes_um))

    def frame(self, payload: bytes) -> Frame:
        fields = self.struct.unpack(payload)
        pm1, pm2_5, pm10, ambient1, ambient2_5, ambient10 = fields[:6]
        at = self.climate_at
        return Frame(
            self.layout,
            (float(pm1), float(pm2_5), float(pm10)),
            tuple(map(float, fields[6 : self.counts_end])),
            payload,
            (float(ambient1), float(ambient2_5), float(ambient10)),
            fields[at + 1] / 10 if at else None,
            fields[at] / 10 if at else None,
            fields[-2],
            fields[-1],
        )


class FramedDecoder(Search):
    """Frames of any of the forms it was made with, told apart by the length word."""

    __slots__ = ("_forms",)

    def __init__(self, forms: Sequence[Form]) -> None:
        super().__init__(HEADER, max(form.size for form in forms))
        self._forms: Mapping[bytes, Form] = {form.length: form for form in forms}

    def judge(self, buffer: bytes, start: int) -> Verdict:
        length = buffer[start + 2 : start + 4]
        form = self._forms.get(length)
        if form is None:
            if len(length) < 2:
                return MORE
            return self._judge_answer(buffer, start) if length == ANSWER_LENGTH else (4, "length")
        end = start + form.size
        if end > len(buffer):
            return (form.size, "checksum") if self._hides_unit(buffer, start) else MORE
        body = buffer[start : end - 2]
        # the sum of 38 bytes stays below 2**16: nothing to cut off
        if sum(body) != buffer[end - 2] << 8 | buffer[end - 1]:
            return form.size, "checksum"
        return form.size, form.frame(body[4:])

    def _judge_answer(self, buffer: bytes, start: int) -> Verdict:
        end = start + ANSWER_SIZE
        if end > len(buffer):
            return (ANSWER_SIZE, "checksum") if self._hides_unit(buffer, start) else MORE
        good = WORD.unpack_from(buffer, end - 2)[0] == sum(buffer[start : end - 2])
        return ANSWER_SIZE, None if good else "checksum"

    def _hides_unit(self, buffer: bytes, start: int) -> bool:
        """Whether a whole good unit stands inside an unfinished one, which proves that one false: without this a
        false start that claims the longest length would keep a good short frame waiting for bytes of the next."""
        inside = buffer.find(HEADER, start + 1)
        while inside >= 0:
            size, outcome = self.judge(buffer, inside)
            if size and not isinstance(outcome, str):
                return True
            inside = buffer.find(HEADER, inside + 1)
        return False


def encoder(forms: Sequence[Form]) -> Callable[[Frame], bytes]:
    """The way back for frames of these forms: values are rounded and clipped to what their field can carry.

    Words that no field of a frame holds are zero, unless `payload` already says the same as the fields: then it is
    repeated as it is. Raises ValueError for a frame of another layout.
    """
    by_name = {form.layout.name: form for form in forms}

    def encode(frame: Frame) -> bytes:
        form = by_name.get(frame.layout.name)
        if form is None:
            raise ValueError(f"a frame of layout {frame.layout.name} cannot be encoded as {', '.join(by_name)}")
        payload = frame.payload
        if len(payload) != form.struct.size or form.frame(payload) != frame:
            payload = packed(form, frame)
        body = HEADER + form.length + payload
        return body + WORD.pack(sum(body))

    return encode


def packed(form: Form, frame: Frame) -> bytes:
    """The payload of a frame from its fields alone."""
    fields = list(form.struct.unpack(bytes(form.struct.size)))
    fields[0:3] = [clipped(value, 0, 65535) for value in frame.mass]
    fields[3:6] = [clipped(value, 0, 65535) for value in frame.mass_ambient or frame.mass]
    fields[6 : 6 + len(form.layout.sizes_um)] = [clipped(value, 0, 65535) for value in frame.counts]
    if form.climate_at:
        fields[form.climate_at] = clipped((frame.temperature_c or 0.0) * 10, -32768, 32767)
        fields[form.climate_at + 1] = clipped((frame.rh_pct or 0.0) * 10, 0, 65535)
    fields[-2] = clipped(frame.revision or 0, 0, 255)
    fields[-1] = clipped(frame.error, 0, 255)
    return form.struct.pack(*fields)


def clipped(value: float, low: int, high: int) -> int:
    """The nearest whole number within the range of a field."""
    return round(min(max(value, low), high))


def command(code: int, parameter: int = 0) -> bytes:
    """`42 4D CMD DH DL SUMH SUML`."""
    body = HEADER + bytes([code]) + WORD.pack(parameter)
    return body + WORD.pack(sum(body))


MODE, READ, SLEEP = 0xE1, 0xE2, 0xE4

COMMANDS: Final = Commands(
    sleep=command(SLEEP, 0),
    wake=command(SLEEP, 1),
    read=command(READ),
    stream=command(MODE, 1),
    poll_mode=command(MODE, 0),
)

# A daemon that was killed while its sensor slept must find it streaming again; harmless to one that streams.
START: Final = command(SLEEP, 1) + command(MODE, 1)
