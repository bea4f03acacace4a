"""What bytes without a frame tell: silence, another dialect, a wrong baud rate, or noise.

Owns the reading of such bytes. Must not know ports: it is handed what was captured and the settings it was captured
with. Says so where it cannot tell.

The signs, from how a UART samples (see `uart`):
- read at twice the sender's rate or more, a level inside a byte never lasts for one bit alone; read far too fast,
  every low level becomes a byte 00;
- frames begin alike, so what a wrong rate makes of them begins alike too: the same few bytes come again and again,
  which noise does not do. A known header read at a wrong standard rate begins in a known way.
"""

from collections import Counter
from dataclasses import dataclass
from enum import StrEnum
from math import ceil, log2
from typing import Final

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from motekeep.wire.guess import guess
from motekeep.wire.uart import leading_bytes

LOOKED_AT: Final = 4096
STANDARD_RATES: Final = (1200, 2400, 4800, 9600, 19200, 38400, 57600, 115200)
TOO_FEW: Final = 8
ZEROS: Final = 0.9


class Kind(StrEnum):
    FRAMES = "frames"
    SILENCE = "silence"
    OTHER_DIALECT = "other-dialect"
    WRONG_BAUD = "wrong-baud"
    NOISE = "noise"


@dataclass(frozen=True, slots=True)
class Explanation:
    """What the bytes are, `confidence` 0..1 in that, and the reason with what to do about it."""

    kind: Kind
    confidence: float
    reason: str


def explain(data: bytes, dialect: str, baud: int) -> Explanation:
    """What `data` is, captured over several periods of a sensor that is configured as `dialect`, at `baud`."""
    if not data:
        asked = "it was asked and gave no answer" if DIALECTS[dialect].polled else "not one byte came"
        return Explanation(Kind.SILENCE, 1.0, f"{asked}: check power, wiring (its TX to our RX) and whether it sleeps")
    guesses = guess(data)
    own = next((g for g in guesses if g.dialect == dialect), None)
    if own is not None and own.confidence >= 0.5:
        return Explanation(Kind.FRAMES, own.confidence, own.reason)
    if guesses:
        best = guesses[0]
        if best.dialect != dialect:
            return Explanation(
                Kind.OTHER_DIALECT,
                best.confidence,
                f"configured as {dialect}, sounds like {best.dialect}: {best.reason}",
            )
        return Explanation(Kind.FRAMES, best.confidence, best.reason)
    return explain_garbage(data[-LOOKED_AT:], baud)


def explain_garbage(data: bytes, baud: int) -> Explanation:
    """The same for bytes in which no dialect found a frame."""
    if len(data) < TOO_FEW:
        return Explanation(Kind.NOISE, 0.4, f"only {len(data)} bytes: too few to tell noise from a wrong rate")
    if data.count(0) >= ZEROS * len(data):
        return Explanation(
            Kind.WRONG_BAUD,
            0.7,
            f"{data.count(0) / len(data):.0%} of {len(data)} bytes are 00: {baud} baud is many times the sender's rate, or "
            "the line is held low or inverted",
        )
    known = known_at_other_rate(data, baud)
    if known is not None:
        return known
    again = most_recurring(data)
    shaped, single = interior_runs(data)
    if shaped >= 2 * TOO_FEW and single <= 0.1 * shaped:
        return Explanation(
            Kind.WRONG_BAUD,
            0.8 if again else 0.6,
            f"no level lasts for a single bit in {1 - single / shaped:.0%} of {shaped} bytes: "
            f"{baud} baud is twice the sender's rate or more",
        )
    if again:
        return Explanation(
            Kind.OTHER_DIALECT,
            0.5,
            f"the same bytes ({again[0].hex(' ')}) came {again[1]} times, so somebody sends, in no dialect known here "
            f"or at a rate above {baud} baud",
        )
    return Explanation(Kind.NOISE, 0.7, f"{len(data)} bytes without a header and without anything that comes again")


def known_at_other_rate(data: bytes, baud: int) -> Explanation | None:
    """Whether a known header that was sent at another standard rate begins the bursts."""
    found: list[tuple[int, str, int]] = []
    for name, header in headers():
        for rate in STANDARD_RATES:
            lead = leading_bytes(header, baud / rate)
            if rate == baud or len(set(lead)) < 2:
                continue
            count = data.count(lead)
            by_chance = len(data) / 256 ** len(lead)
            if count >= 3 and count > 20 * by_chance:
                found.append((count * len(lead), name, rate))
    if not found:
        return None
    _, name, rate = max(found)
    return Explanation(
        Kind.WRONG_BAUD, 0.9, f"sounds like {name} sent at {rate} baud and read at {baud}: set the line to {rate}"
    )


def headers() -> list[tuple[str, bytes]]:
    """The bytes that every frame of a layout begins with, by the name of its dialect: what its lowest and its highest
    frame share. Polled dialects are left out: at a wrong rate they are never asked."""
    found = []
    for dialect in DIALECTS.values():
        for layout in [] if dialect.polled else dialect.layouts:
            low, high = [
                dialect.encode(
                    Frame(layout, (value,) * len(layout.mass), (value,) * len(layout.sizes_um), b"", revision=0)
                )
                for value in (0.0, 1e9)
            ]
            shared = next(at for at, pair in enumerate(zip(low, high, strict=True)) if pair[0] != pair[1])
            found.append((dialect.name, low[:shared]))
    return found


def interior_runs(data: bytes) -> tuple[int, int]:
    """How many bytes have a level that begins and ends inside them, and in how many one of these is a single bit."""
    counts = Counter(data)
    shaped = sum([count for byte, count in counts.items() if INTERIOR[byte]])
    return shaped, sum([count for byte, count in counts.items() if 1 in INTERIOR[byte]])


def interior_of(byte: int) -> tuple[int, ...]:
    """Lengths of the runs of equal bits in a byte, without the first and the last, which may go on outside it."""
    bits = f"{byte:08b}".replace("01", "0 1").replace("10", "1 0").split()
    return tuple(len(run) for run in bits[1:-1])


INTERIOR: Final = tuple(interior_of(byte) for byte in range(256))


def most_recurring(data: bytes) -> tuple[bytes, int] | None:
    """The string of bytes that comes most often, and how often; None when that may be chance.

    Its length is such that in noise of the same byte frequencies a given string has a chance of 2**-24.
    """
    total = len(data)
    entropy = sum([count / total * log2(total / count) for count in Counter(data).values()])
    size = min(max(ceil(24 / max(entropy, 0.1)), 3), 16)
    strings = Counter([data[at : at + size] for at in range(total - size + 1)])
    common, count = max(strings.items(), key=lambda item: item[1], default=(b"", 0))
    return (common, count) if count >= 3 and len(set(common)) > 1 else None
