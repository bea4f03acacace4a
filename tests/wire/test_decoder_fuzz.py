"""Mutated streams and pure random bytes into every decoder, against the reference decoder.

The long form (`pytest -m long tests/wire`) runs 100,000 inputs a dialect.
"""

from collections.abc import Iterator
from random import Random

import pytest

from motekeep.wire.dialects import DIALECTS
from streams import damage_of, fed, frames_of, random_frame, reference, split

STARTS = (
    b"\x42\x4d",
    b"\x42\x4d\x00\x24",
    b"\x42\x4d\x00\x04",
    b"\xaa\xc0",
    b"\xaa",
    b"\x7e",
    b"\x7e\x00\x03\x00\x28",
    b"\x7d",
)
POOL = 300
dialects = pytest.mark.parametrize("name", DIALECTS)


def mutated(unit: bytes, random: Random) -> bytes:
    """The unit with one thing done to it; never the unit itself."""
    at = random.randrange(len(unit))
    end = random.randrange(at, len(unit)) + 1
    while True:
        spoilt = random.choice(
            (
                unit[:at] + bytes([unit[at] ^ random.randrange(1, 256)]) + unit[at + 1 :],
                unit[:at] + random.randbytes(end - at) + unit[end:],
                unit[:at] + unit[end:],
                unit[:at],
                unit[:at] + random.choice(STARTS) + unit[at:],
                unit[:end] + unit[at:end] + unit[end:],
                unit[:at] + random.randbytes(random.randrange(1, 60)) + unit[at:],
                unit[:at] + unit[at:end][::-1] + unit[end:],
            )
        )
        if spoilt != unit:
            return spoilt
        at, end = 0, len(unit)


def spoilt_stream(pool: list[bytes], random: Random) -> tuple[bytes, list[bytes]]:
    """A stream and its units that were left alone, two of them at its end."""
    parts, alone = [], []
    for unit in random.choices(pool, k=random.randrange(1, 7)):
        if random.random() < 0.5:
            parts.append(mutated(unit, random))
        else:
            parts.append(unit)
            alone.append(unit)
    ending = random.choices(pool, k=2)
    return b"".join(parts + ending), alone + ending


def random_bytes(random: Random) -> bytes:
    pieces = [random.choice((random.randbytes(random.randrange(60)), random.choice(STARTS))) for _ in range(8)]
    return b"".join(pieces)


def is_among(wanted: list[bytes], heard: list[bytes]) -> bool:
    """Whether all of `wanted` come in `heard` in this order."""
    rest: Iterator[bytes] = iter(heard)
    return all(payload in rest for payload in wanted)


def fuzz(name: str, inputs: int) -> int:
    """How many inputs lost a frame that was left alone: only by a chance that the reference meets too."""
    random = Random(f"{name} {inputs}")
    dialect = DIALECTS[name]
    pool = [dialect.encode(random_frame(random.choice(dialect.layouts), random)) for _ in range(POOL)]
    payloads = {unit: reference(name, unit)[0] for unit in pool}
    swallowed = 0
    for _ in range(inputs):
        data, alone = spoilt_stream(pool, random) if random.random() < 0.8 else (random_bytes(random), [])
        decoder = dialect.decoder()
        events = []
        for piece in split(data, random):
            events += decoder.feed(piece)
            assert decoder.held < dialect.longest
        heard = [frame.payload for frame in frames_of(events)]
        assert heard == reference(name, data), data.hex()
        if not is_among([payloads[unit] for unit in alone], heard):
            swallowed += 1
        tally = decoder.tally
        assert tally.bytes == len(data)
        assert tally.frames == len(heard)
        told = sum(count for reason, count in tally.dropped.items() if reason != "refused")
        assert told == len(damage_of(events))
        assert len(damage_of(fed(dialect.decoder(), [data]))) == told
    return swallowed


# A spoilt unit can pass for a good one by chance and take bytes of the next with it: 16 bits of sum leave one in 65,536
# such tries; `aa` and `stuffed` have 8, and a tail or a length that must fit besides.
@dialects
def test_two_hundred_spoilt_streams(name: str) -> None:
    assert fuzz(name, 200) == 0


@pytest.mark.long
@dialects
def test_a_hundred_thousand_spoilt_streams(name: str) -> None:
    assert fuzz(name, 100_000) <= 10
