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
SURE: Final = 0.8  # below it the configuration is believed


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
    if not guesses:
        return explain_garbage(data[-LOOKED_AT:], baud)
    best = guesses[0]
    own = next((g for g in guesses if g.dialect == dialect), None)
    if own is not None and (own is best or best.confidence < SURE):
        return Explanation(Kind.FRAMES, own.confidence, own.reason)
    reason = f"configured as {dialect}, sounds like {best.dialect}: {best.reason}"
    return Explanation(Kind.OTHER_DIALECT, best.confidence, reason)


def explain_garbage(data: bytes, baud: int) -> Explanation:
    """The same for bytes in which no dialect found a frame: the first sign that is there."""
    return next(found for sign in SIGNS if (found := sign(data, baud)) is not None)


def too_few(data: bytes, _baud: int) -> Explanation | None:
    if len(data) >= TOO_FEW:
        return None
    return Explanation(Kind.NOISE, 0.4, f"only {len(data)} bytes: too few to tell noise from a wrong rate")


def nearly_all_zero(data: bytes, baud: int) -> Explanation | None:
    share = data.count(0) / len(data)
    if share < ZEROS:
        return None
    reason = (
        f"{share:.0%} of {len(data)} bytes are 00: {baud} baud is many times the sender's rate, "
        "or the line is held low or inverted"
    )
    return Explanation(Kind.WRONG_BAUD, 0.7, reason)


def known_at_other_rate(data: bytes, baud: int) -> Explanation | None:
    """Whether a known header that was sent at another standard rate begins the bursts.

    The strength of a find is how often it came times how unlikely it is by the frequencies of its bytes. One byte is a
    weak sign and has to make up a large part of all.
    """
    share = {byte: count / len(data) for byte, count in Counter(data).items()}
    found: list[tuple[float, int, str, int]] = []
    for name, header in headers():
        for rate in STANDARD_RATES:
            lead = leading_bytes(header, baud / rate)
            count = data.count(lead) if lead else 0
            if rate == baud or count < 3:
                continue
            surprise = sum([log2(1 / share[byte]) for byte in lead])
            if len(lead) > 1 and count > 4 * len(data) / 2**surprise:
                found.append((count * surprise, len(lead), name, rate))
            elif len(lead) == 1 and lead not in b"\x00\xff" and count > max(8.0, len(data) / 20):
                found.append((0.0, 1, name, rate))
    if not found:
        return None
    _, size, name, rate = max(found, key=lambda find: find[0])
    reason = f"sounds like {rate} baud (perhaps {name}) read at {baud}: set the line to {rate}"
    return Explanation(Kind.WRONG_BAUD, 0.9 if size > 1 else 0.6, reason)


def read_too_fast(data: bytes, baud: int) -> Explanation | None:
    """No level of a single bit. Bytes with no level inside them at all say that too, but only if they come again."""
    shaped, single = interior_runs(data)
    again = most_recurring(data)
    if single > 0.1 * shaped or (shaped < 2 * TOO_FEW and again is None):
        return None
    reason = (
        f"levels last for two bits or more in all but {single} of {len(data)} bytes: "
        f"{baud} baud is twice the sender's rate or more"
    )
    return Explanation(Kind.WRONG_BAUD, 0.6 if again is None else 0.8, reason)


def comes_again(data: bytes, baud: int) -> Explanation | None:
    again = most_recurring(data)
    if again is None:
        return None
    reason = (
        f"the same bytes ({again[0].hex(' ')}) came {again[1]} times, so somebody sends, "
        f"in no dialect known here or at a rate above {baud} baud"
    )
    return Explanation(Kind.OTHER_DIALECT, 0.5, reason)


def noise(data: bytes, baud: int) -> Explanation:
    if len(data) < 256 or entropy(data) < 6.0:
        reason = f"{len(data)} bytes without a header; a rate above {baud} baud can look like this too"
        return Explanation(Kind.NOISE, 0.4, reason)
    return Explanation(Kind.NOISE, 0.7, f"{len(data)} bytes without a header and without anything that comes again")


SIGNS: Final = (too_few, nearly_all_zero, known_at_other_rate, read_too_fast, comes_again, noise)


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
    size = min(max(ceil(24 / max(entropy(data), 0.1)), 3), 16)
    strings = Counter([data[at : at + size] for at in range(len(data) - size + 1)])
    common, count = max(strings.items(), key=lambda item: item[1], default=(b"", 0))
    return (common, count) if count >= 3 and len(set(common)) > 1 else None


def entropy(data: bytes) -> float:
    """Bits a byte, by the frequencies of the bytes alone."""
    return sum([count / len(data) * log2(len(data) / count) for count in Counter(data).values()])
