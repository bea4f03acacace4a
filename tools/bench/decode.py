"""How fast the decoders are: frames a second, the multiple of a 9600 baud line, the ratio to a bare loop.

    python tools/bench/decode.py [--frames N] [--rounds N]

The peer, timed in the same rounds, is what no decoder in this language can do without: one `struct.unpack` and one
`sum` a frame, over frames that were split before. Each figure is the median of the rounds. Exit 1 when one decoder is
below 500 times the line rate.
"""

import argparse
import sys
from collections.abc import Callable
from random import Random
from statistics import median
from struct import Struct
from time import perf_counter

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Dialect, Frame, Layout

BAR = 500
LINE_BYTES_S = 960  # 9600 baud, ten bits a byte


def ordinary_frame(layout: Layout, random: Random) -> Frame:
    """A frame of ordinary air."""
    fine = float(random.randrange(5, 60))
    mass = tuple(fine + step for step, _ in enumerate(layout.mass))
    counts = tuple(sorted((float(random.randrange(4000)) for _ in layout.sizes_um), reverse=True))
    climate = (50.0, 20.0) if layout.climate else (None, None)
    return Frame(layout, mass, counts, b"", mass if layout.ambient else (), *climate, revision=0x97)


def one_by_one(dialect: Dialect, units: list[bytes]) -> Callable[[], None]:
    """One whole frame a feed: a burst from the port, a line of a capture."""

    def run() -> None:
        feed = dialect.decoder().feed
        for unit in units:
            feed(unit)

    return run


def in_pieces(dialect: Dialect, data: bytes, size: int) -> Callable[[], None]:
    pieces = [data[at : at + size] for at in range(0, len(data), size)]

    def run() -> None:
        feed = dialect.decoder().feed
        for piece in pieces:
            feed(piece)

    return run


def peer(units: list[bytes]) -> Callable[[], None]:
    unpacks = [(Struct(f">{len(unit) // 2}H").unpack_from, unit) for unit in units]

    def run() -> None:
        for unpack, unit in unpacks:
            unpack(unit)
            sum(unit)

    return run


def seconds(run: Callable[[], None]) -> float:
    begin = perf_counter()
    run()
    return perf_counter() - begin


def hit(unit: bytes) -> bytes:
    return unit[:-1] + bytes([unit[-1] ^ 1])


def main() -> int:
    parser = argparse.ArgumentParser(description="decoders against the line rate and a bare loop")
    parser.add_argument("--frames", type=int, default=20_000, help="frames a round")
    parser.add_argument("--rounds", type=int, default=7)
    options = parser.parse_args()
    random = Random(1)
    cases: list[tuple[str, int, int, Callable[[], None], Callable[[], None]]] = []
    for dialect in DIALECTS.values():
        for layout in dialect.layouts:
            pool = [dialect.encode(ordinary_frame(layout, random)) for _ in range(1000)]
            units = [pool[index % len(pool)] for index in range(options.frames)]
            size = sum(map(len, units))
            cases.append((layout.name, len(units), size, one_by_one(dialect, units), peer(units)))
    bm, units = DIALECTS["bm"], [DIALECTS["bm"].encode(ordinary_frame(DIALECTS["bm"].layouts[1], random))] * 2000
    whole = b"".join(units)
    spoilt = b"".join([hit(unit) if index % 2 else unit for index, unit in enumerate(units)])
    for name, data, piece in (
        ("bm-28, 4 KiB a feed", whole, 4096),
        ("bm-28, 8 bytes a feed", whole, 8),
        ("bm-28, every second hit", spoilt, 32),
        ("bm, nothing but false starts", b"\x42\x4d\x00\x24" * (len(whole) // 4), 4096),
        ("bm, random bytes", random.randbytes(len(whole)), 4096),
    ):
        cases.append((name, len(data) // 32, len(data), in_pieces(bm, data, piece), peer(units)))

    print(f"{'':30}{'us/frame':>10}{'frames/s':>12}{'x line':>9}{'x peer':>9}   median of {options.rounds}")
    worst = float("inf")
    for name, frames, size, run, bare in cases:
        times = [(seconds(run), seconds(bare)) for _ in range(options.rounds)]
        took = median([mine for mine, _ in times])
        ratio = median([mine / theirs for mine, theirs in times])
        multiple = size / took / LINE_BYTES_S
        worst = min(worst, multiple)
        print(f"{name:30}{took / frames * 1e6:10.2f}{frames / took:12,.0f}{multiple:9,.0f}{ratio:9.1f}")
    print(f"slowest: {worst:,.0f} times a 9600 baud line (bar {BAR}); peer: one unpack and one sum a frame")
    return 0 if worst >= BAR else 1


if __name__ == "__main__":
    sys.exit(main())
