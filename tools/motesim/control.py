"""What a running emulation can be told, one line each.

Owns the small language. Must not know ports.

    fault SENSOR KIND [STRENGTH] [RAMP_S]     lay a fault on, now
    clear SENSOR KIND                         end it
    unplug SENSOR                             the port goes away
    plug SENSOR                               it comes back, the sensor starts from power-on
    quit                                      end the emulation
"""

from dataclasses import dataclass
from math import isfinite

from motesim.faults import KINDS


@dataclass(frozen=True, slots=True)
class Order:
    """One line, understood. `verb` is the first word; what it does not need is empty."""

    verb: str
    sensor: str = ""
    kind: str = ""
    strength: float = 0.0
    ramp_s: float = 0.0


def understand(line: str, sensors: tuple[str, ...]) -> Order | None:
    """The order in this line, None for an empty one. Raises ValueError with a plain sentence."""
    words = line.split()
    if not words:
        return None
    verb, *rest = words
    if verb == "quit" and not rest:
        return Order("quit")
    needs = {"fault": (2, 4), "clear": (2, 2), "unplug": (1, 1), "plug": (1, 1)}
    if verb not in needs:
        raise ValueError(f"{verb!r} is no order; known: fault, clear, unplug, plug, quit")
    low, high = needs[verb]
    if not low <= len(rest) <= high:
        raise ValueError(f"`{verb}` takes SENSOR{' KIND' if low > 1 else ''}{' [STRENGTH] [RAMP_S]' * (high > 2)}")
    if rest[0] not in sensors:
        raise ValueError(f"no sensor {rest[0]!r}; there are {', '.join(sensors)}")
    if low == 1:
        return Order(verb, rest[0])
    if rest[1] not in KINDS:
        raise ValueError(f"no fault {rest[1]!r}; known: {', '.join(KINDS)}")
    return _of_fault(verb, rest[0], rest[1], rest[2:])


def _of_fault(verb: str, sensor: str, kind: str, words: list[str]) -> Order:
    try:
        numbers = [float(word) for word in words]
    except ValueError as error:
        raise ValueError(f"strength and ramp are numbers: {error}") from error
    if not all(isfinite(number) and number >= 0.0 for number in numbers):
        raise ValueError("strength and ramp are finite and not negative")
    usual = KINDS[kind]
    strength = numbers[0] if numbers else usual.strength
    if strength > usual.most:
        raise ValueError(f"the strength of {kind} is at most {usual.most:g} ({usual.unit})")
    return Order(verb, sensor, kind, strength, numbers[1] if len(numbers) > 1 else 0.0)
