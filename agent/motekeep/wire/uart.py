"""What a UART makes of bytes that were sent at another rate. A model for telling a wrong baud rate, and for tests.

Owns the bit times of 8N1. Must not know a dialect.

The model (common practice, no source): a falling edge starts a byte; its bits are sampled in their middle by the
receiver's own clock; data bits are delivered even when the stop bit is missing (what Linux does without INPCK); then
the line must have been high before the next edge counts. Real receivers differ in the last point, so only the first
byte of a burst is certain and the rest is likely.
"""

BITS = 10  # start, eight data bits with the lowest first, stop


def misread(sent: bytes, ratio: float, idle_bits: float = 20.0) -> bytes:
    """The bytes of one burst as heard at `ratio` times the rate it was sent at.

    The line is high before the burst and for `idle_bits` of the sender after it.
    """
    levels = line_levels(sent)
    end = len(levels) + idle_bits
    heard = bytearray()
    at = 0.0
    while True:
        edge = falling_edge(levels, at)
        if edge is None:
            return bytes(heard)
        centre = edge + 0.5 / ratio
        if level(levels, centre):  # too short to be a start bit
            at = centre
            continue
        bits = [level(levels, centre + (1 + bit) / ratio) for bit in range(8)]
        heard.append(sum(value << bit for bit, value in enumerate(bits)))
        at = centre + 9.0 / ratio
        if at >= end:
            return bytes(heard)


def line_levels(sent: bytes) -> list[int]:
    """The level in each bit time of the sender."""
    return [level for byte in sent for level in (0, *[byte >> bit & 1 for bit in range(8)], 1)]


def level(levels: list[int], at: float) -> int:
    index = int(at)
    return levels[index] if index < len(levels) else 1


def falling_edge(levels: list[int], at: float) -> float | None:
    """When the line next goes from high to low at or after `at`; the line was high before the first bit."""
    index = int(at)
    if index == at and index < len(levels) and not levels[index] and (index == 0 or levels[index - 1]):
        return at
    for low in range(index + 1, len(levels)):
        if levels[low - 1] and not levels[low]:
            return float(low)
    return None


def leading_bytes(header: bytes, ratio: float) -> bytes:
    """The bytes heard of a burst that begins with `header`, as far as they do not depend on what follows it."""
    calm, busy = misread(header + b"\xff" * 8, ratio), misread(header + b"\x00" * 8, ratio)
    mixed = misread(header + b"\xaa" * 8, ratio)
    size = 0
    for heard in zip(calm, busy, mixed, strict=False):
        if len(set(heard)) > 1:
            break
        size += 1
    return calm[:size]
