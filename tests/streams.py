"""Frames, streams and a reference decoder for the tests of `wire`.

The reference is written from the layouts alone and shares nothing with the decoders: at each place from the left it
asks whether a whole good unit stands there, and steps over it (its last byte may begin the next) or on by one byte.
"""

from collections.abc import Iterator, Sequence
from random import Random

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Decoder, Frame, Layout

LAYOUTS = {layout.name: (dialect, layout) for dialect in DIALECTS.values() for layout in dialect.layouts}


def random_frame(layout: Layout, random: Random, *, errors: bool = True) -> Frame:
    """A frame that the layout can carry exactly, its payload left out; small and extreme values are frequent."""

    def word(top: int = 65535) -> float:
        return float(random.choice((0, 1, top, random.randrange(200), random.randrange(top + 1))))

    if layout.name == "stuffed":
        upwards = sorted(random.randrange(1 << 16) / 64 for _ in layout.sizes_um)
        counts = (upwards[-1] * 100, *[(upwards[-1] - number) * 100 for number in upwards[:-1]])
        error = random.choice((0, 0, 1 << 21, 1 << 5 | 1 << 4, 0x80 << 24)) if errors else 0
        return Frame(layout, tuple(random.randrange(1 << 16) / 64 for _ in layout.mass), counts, b"", error=error)
    if layout.name == "aa":
        return Frame(layout, (word() / 10, word() / 10), (), b"", revision=int(word()))
    return Frame(
        layout,
        tuple(word() for _ in layout.mass),
        tuple(word() for _ in layout.sizes_um),
        b"",
        tuple(word() for _ in layout.mass),
        word() / 10 if layout.climate else None,
        random.randrange(-32768, 32768) / 10 if layout.climate else None,
        random.randrange(256),
        random.randrange(256),
    )


def split(data: bytes, random: Random) -> Iterator[bytes]:
    """The data in pieces of random sizes, empty ones among them."""
    at = 0
    while at < len(data):
        size = random.choice((0, 1, 1, 2, 3, random.randrange(1, 50), random.randrange(1, 500)))
        yield data[at : at + size]
        at += size


def fed(decoder: Decoder, pieces: Sequence[bytes] | Iterator[bytes]) -> list[Frame | Damage]:
    return [event for piece in pieces for event in decoder.feed(piece)]


def frames_of(events: Sequence[Frame | Damage]) -> list[Frame]:
    return [event for event in events if isinstance(event, Frame)]


def damage_of(events: Sequence[Frame | Damage]) -> list[Damage]:
    return [event for event in events if isinstance(event, Damage)]


def reasons_of(events: Sequence[Frame | Damage]) -> list[str]:
    """The order of what came out, without the sizes."""
    return [event.reason if isinstance(event, Damage) else "frame" for event in events]


def reference(dialect: str, data: bytes) -> list[bytes]:
    """The payloads of all frames in `data`."""
    unit_at, first = {
        "bm": (framed_at, 0x42),
        "bm-climate": (climate_at, 0x42),
        "aa": (aa_at, 0xAA),
        "stuffed": (stuffed_at, 0x7E),
    }[dialect]
    payloads, at = [], 0
    while at < len(data):
        size, payload = unit_at(data, at)
        if payload is not None:
            payloads.append(payload)
        at += max(size, 1)
        if size and data[at - 1] == first:
            at -= 1
    return payloads


def framed_at(data: bytes, at: int, lengths: tuple[int, ...] = (20, 28, 36)) -> tuple[int, bytes | None]:
    if data[at : at + 2] != b"BM":
        return 0, None
    length = int.from_bytes(data[at + 2 : at + 4], "big")
    end = at + 4 + length
    if length not in (4, *lengths) or end > len(data):
        return 0, None
    if sum(data[at : end - 2]) % 65536 != int.from_bytes(data[end - 2 : end], "big"):
        return 0, None
    return end - at, None if length == 4 else data[at + 4 : end - 2]


def climate_at(data: bytes, at: int) -> tuple[int, bytes | None]:
    return framed_at(data, at, (28,))


def aa_at(data: bytes, at: int) -> tuple[int, bytes | None]:
    if data[at] != 0xAA:
        return 0, None
    unit = data[at : at + 10]
    if len(unit) < 10 or unit[9] != 0xAB or sum(unit[2:8]) % 256 != unit[8]:
        return 0, None
    if unit[1] == 0xC0:
        return 10, unit[2:8]
    return (10 if unit[1] == 0xC5 and unit[2] in (2, 5, 6, 7, 8) else 0), None


def stuffed_at(data: bytes, at: int) -> tuple[int, bytes | None]:
    if data[at] != 0x7E:
        return 0, None
    end = data.find(b"\x7e", at + 1)
    if end < 0 or end + 1 - at > 92:
        return 0, None
    body, escaping = bytearray(), False
    for byte in data[at + 1 : end]:
        if escaping:
            if byte not in (0x5E, 0x5D, 0x31, 0x33):
                return 0, None
            body.append(byte ^ 0x20)
        elif byte != 0x7D:
            body.append(byte)
        escaping = byte == 0x7D and not escaping
    if escaping or len(body) < 5 or len(body) != body[3] + 5 or ~sum(body[:-1]) % 256 != body[-1]:
        return 0, None
    if body[1] != 3 or body[3] == 0:
        return end + 1 - at, None
    if body[3] != 40 or any(body[i] & 0x7F == 0x7F and body[i + 1] & 0x80 for i in range(4, 44, 4)):
        return 0, None  # not ten floats, or one of them infinite or not a number
    return end + 1 - at, bytes(body[4:-1])
