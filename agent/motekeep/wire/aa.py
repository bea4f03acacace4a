"""Dialect `aa`: ten bytes `AA C0`, PM2.5 x10 and PM10 x10 little-endian, two id bytes, 8-bit sum, `AB`. 9600 8N1.

Owns its layout, decoder, encoder and commands. Layout and commands from memory, common practice. No counts. The two
id bytes stand in `Frame.revision`: another id is another unit. `AA C5` answers a command and is no data.
"""

from struct import Struct
from typing import Final

from motekeep.wire.frame import Commands, Dialect, Frame, Layout
from motekeep.wire.framed import clipped
from motekeep.wire.search import MORE, Search, Verdict

SIZE: Final = 10
DATA, ANSWER = 0xC0, 0xC5
TAIL: Final = 0xAB
FIELDS: Final = Struct("<HH2s")

AA: Final = Layout("aa", ("pm2_5", "pm10"), 0.1, 999.9)

REPORT, QUERY, IDENTITY, SLEEP, FIRMWARE, PERIOD = 2, 4, 5, 6, 7, 8
ANSWERED = (REPORT, IDENTITY, SLEEP, FIRMWARE, PERIOD)


class AaDecoder(Search):
    """Frames of ten bytes, told from the answers to commands by their second byte."""

    __slots__ = ()

    def __init__(self) -> None:
        super().__init__(b"\xaa", SIZE)

    def judge(self, buffer: bytes, start: int) -> Verdict:
        kind = buffer[start + 1 : start + 2]
        if not kind:
            return MORE
        if kind[0] != DATA and kind[0] != ANSWER:
            return 1, "rubbish"
        end = start + SIZE
        if end > len(buffer):
            return MORE
        payload = buffer[start + 2 : end - 2]
        tail_fits = buffer[end - 1] == TAIL
        if not tail_fits or sum(payload) & 0xFF != buffer[end - 2]:
            return SIZE, "checksum" if tail_fits else "tail"
        if kind[0] == DATA:
            return SIZE, frame_of(payload)
        # The sum does not cover the second byte, so a data frame hit there could pass for an answer.
        return (SIZE, None) if payload[0] in ANSWERED else (SIZE, "checksum")


def frame_of(payload: bytes) -> Frame:
    fine, coarse, identity = FIELDS.unpack(payload)
    return Frame(AA, (fine / 10, coarse / 10), (), payload, revision=int.from_bytes(identity, "big"))


def encode(frame: Frame) -> bytes:
    """The ten bytes of a frame, its values rounded to tenths and clipped to 16 bits.

    Raises ValueError for a frame of another layout.
    """
    if frame.layout.name != AA.name:
        raise ValueError(f"a frame of layout {frame.layout.name} cannot be encoded as aa")
    fine, coarse = [clipped(value * 10, 0, 65535) for value in frame.mass]
    payload = FIELDS.pack(fine, coarse, clipped(frame.revision or 0, 0, 65535).to_bytes(2, "big"))
    return bytes([0xAA, DATA]) + payload + bytes([sum(payload) & 0xFF, TAIL])


def command(code: int, *parameters: int) -> bytes:
    """`AA B4`, the command with its parameters padded to thirteen bytes, `FF FF` for any id, 8-bit sum, `AB`."""
    body = bytes([code, *parameters]).ljust(13, b"\0") + b"\xff\xff"
    return b"\xaa\xb4" + body + bytes([sum(body) & 0xFF, TAIL])


COMMANDS: Final = Commands(
    sleep=command(SLEEP, 1, 0),
    wake=command(SLEEP, 1, 1),
    read=command(QUERY),
    stream=command(REPORT, 1, 0),
    poll_mode=command(REPORT, 1, 1),
)

DIALECT: Final = Dialect(
    name="aa",
    baud=9600,
    polled=False,
    layouts=(AA,),
    decoder=AaDecoder,
    encode=encode,
    commands=COMMANDS,
    start=command(SLEEP, 1, 1) + command(REPORT, 1, 0),
    warm_up_s=30.0,
    longest=SIZE,
)
