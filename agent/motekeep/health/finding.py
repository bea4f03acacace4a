"""A finding: one diagnosed condition, and the table of all codes.

Owns the words of diagnosis: codes, NE 107 categories, remedies, what a code does to the flag of a reading. Knows no
check: those say when a finding holds.
"""

from dataclasses import dataclass
from enum import StrEnum


class Category(StrEnum):
    """The state of NAMUR NE 107 (2017) that a finding leads to."""

    FAILURE = "failure"
    FUNCTION_CHECK = "function_check"
    OUT_OF_SPECIFICATION = "out_of_specification"
    MAINTENANCE_REQUIRED = "maintenance_required"


# Worst first. NE 107 itself is quoted with two orders of C, S and M; this one follows the 2017 edition from memory.
PRIORITY = (
    Category.FAILURE,
    Category.FUNCTION_CHECK,
    Category.OUT_OF_SPECIFICATION,
    Category.MAINTENANCE_REQUIRED,
)

OPEN_UNIT = "Disconnect power before opening the unit: the laser inside is only eye-safe while the case is closed."


@dataclass(frozen=True, slots=True)
class Kind:
    """What is fixed about a code: category, the flag that readings get while it holds (None: none), the remedy.

    `explains` lists the codes that this one accounts for: while it is open they are not raised beside it.
    """

    category: Category
    flag: int | None
    remedy: str
    explains: tuple[str, ...] = ()


F, C, S, M = PRIORITY

KINDS: dict[str, Kind] = {
    "fan-stopped": Kind(
        F,
        4,
        "Listen for the fan; blow out the inlet, else replace the unit; take a spare unit along. " + OPEN_UNIT,
        explains=("output-frozen", "channels-inconsistent"),
    ),
    "counts-saturated": Kind(S, 3, "Nothing to repair: the counter ran full; read these minutes as 'at least'."),
    "mass-clipped": Kind(S, 3, "Nothing to repair unless it stays in clean air: the mass is outside its range."),
    "output-frozen": Kind(
        F, 4, "Power-cycle the sensor; replace it if the output stays frozen. Check the supply polarity first."
    ),
    "channels-inconsistent": Kind(
        F, 4, "Check that the configured dialect is the sensor's; then power-cycle it, else replace the unit."
    ),
    "frames-corrupt": Kind(
        M, None, "Check cable, ground and connector; shorten the line; keep it away from motors and radios."
    ),
    "frames-missing": Kind(
        F, None, "Check plug, cable and 5 V supply at the sensor; then replace the adapter, then the unit."
    ),
    "sensor-error": Kind(
        F, 4, "The sensor reports a fault of its own; power-cycle it, else replace the unit. " + OPEN_UNIT
    ),
    "warming-up": Kind(C, 3, "Nothing to do: the sensor has just started."),
    "clock-unsynced": Kind(M, None, "Give the gateway a time service or a battery clock; check its network."),
    "store-degraded": Kind(
        M, None, "Replace the SD card soon and keep the set-aside journal file; check the 5 V supply of the gateway."
    ),
    "store-full": Kind(M, None, "Bring the uplink back or raise [store] max_bytes; old minutes are being merged."),
    "disk-low": Kind(M, None, "Free space on the gateway's disk or put in a larger card."),
    "supply-low": Kind(
        M,
        None,
        "Replace the power supply or its cable: a weak 5 V slows the fan. Check polarity before connecting.",
    ),
    "uplink-lost": Kind(M, None, "Check network and broker; nothing is lost while the journal has room."),
    "uplink-refused": Kind(
        M, None, "Look at the broker's access rules, quota and packet size for this gateway; rows wait or are set aside."
    ),
}


@dataclass(frozen=True, slots=True)
class Finding:
    """One diagnosed condition. `sensor` is None for the gateway itself; `since` is Unix seconds, when it began.

    `confidence` is 0..1; `evidence` holds numbers that a person can check.
    """

    code: str
    sensor: str | None
    since: float
    confidence: float
    evidence: str

    @property
    def category(self) -> Category:
        return KINDS[self.code].category

    @property
    def remedy(self) -> str:
        return KINDS[self.code].remedy

    @property
    def flag(self) -> int | None:
        return KINDS[self.code].flag


@dataclass(frozen=True, slots=True)
class FindingEvent:
    """A finding opened or closed at `at` (Unix seconds)."""

    finding: Finding
    opened: bool
    at: float


@dataclass(frozen=True, slots=True)
class Suspicion:
    """What a check holds at the moment: the condition is there, since when (boot seconds), how sure, on what evidence."""

    since: float
    confidence: float
    evidence: str
