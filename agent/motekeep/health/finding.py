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

# Usual cautions of the trade; each stands behind the remedies in which it can hurt.
OPENING = "Disconnect power before opening the unit: the laser inside is only eye-safe while its case is closed."
SOLVENT = "Isopropanol is flammable: use little of it, with good air and no flame near, and let it dry before power."
SUPPLY = "Check voltage and polarity before connecting: a wrong or reversed supply destroys the unit."


@dataclass(frozen=True, slots=True)
class Kind:
    """What is fixed about a code: category, the flag that readings get while it holds (None: none), the remedy.

    `explains` lists the codes that this one accounts for, those of them included: while it is open they are not raised
    beside it.
    """

    category: Category
    flag: int | None
    remedy: str
    explains: tuple[str, ...] = ()


F, C, S, M = PRIORITY

# A flag is given where the number itself is in doubt. `warming-up` gives none: frames of warm-up are left out of the
# statistics, so what an interval holds besides is good, and a sensor that sleeps between is not suspect for life.
KINDS: dict[str, Kind] = {
    "fan-stopped": Kind(
        F,
        4,
        f"Take a spare unit, listen for the fan, clear its inlet, and replace the unit if it stays still. {OPENING}",
        explains=(
            "output-frozen",
            "channels-inconsistent",
            "sensor-error",  # of a unit that watches its own fan
            "fan-weak",
            "fan-surging",
            "optics-fouled",
            "twin-disagrees",
        ),
    ),
    "fan-weak": Kind(
        M,
        3,
        f"Take a spare unit; check the unit's 5 V under load and clear its inlet, then replace it. {OPENING} {SUPPLY}",
        explains=("optics-fouled", "twin-disagrees"),
    ),
    "fan-surging": Kind(
        M,
        3,
        f"Take a spare unit; check the unit's 5 V for ripple, then replace the unit: its fan is near its end. {SUPPLY}",
        explains=("twin-disagrees",),
    ),
    "optics-fouled": Kind(
        M,
        3,
        f"Clean the unit as its maker says, or replace it, and tell `motekeep service add`. {OPENING} {SOLVENT}",
        explains=("twin-disagrees",),
    ),
    "floor-raised": Kind(
        M,
        3,
        f"Clean the unit with dry air, look for an insect or fibre in its inlet, else replace it. {OPENING} {SOLVENT}",
        explains=("twin-disagrees",),
    ),
    "light-leak": Kind(
        M,
        3,
        f"Shade inlet and case from daylight, and check that the case is whole and closed. {OPENING}",
        explains=("floor-raised", "twin-disagrees"),
    ),
    "twin-disagrees": Kind(
        M,
        3,
        "Park a third unit beside both for a day: it tells which of the two is wrong, and that one is to be replaced.",
    ),
    "counts-saturated": Kind(
        S,
        3,
        "Nothing to repair: the air held more than the counter can tell, so read these minutes as 'at least'.",
    ),
    "mass-clipped": Kind(
        S,
        3,
        "Nothing to repair after smoke or dust; replace the unit if its mass stays outside the range in clean air.",
    ),
    "output-frozen": Kind(
        F, 4, f"Switch the sensor's supply off and on, and replace the unit if it freezes again. {SUPPLY}"
    ),
    "channels-inconsistent": Kind(
        F, 4, "Compare the configured dialect with what `motekeep listen` shows, then replace the unit if they agree."
    ),
    "frames-corrupt": Kind(
        M, None, "Reseat the plug, check cable and ground, and lead the cable shorter and away from motors and radios."
    ),
    "frames-missing": Kind(
        F,
        None,
        f"Check plug, cable and 5 V at the sensor, then try another adapter, then a spare unit. {SUPPLY}",
        explains=("frames-corrupt",),
    ),
    "sensor-error": Kind(
        F,
        4,
        f"Switch the sensor's supply off and on, and replace the unit if it reports the fault again. {OPENING}",
    ),
    "active-check": Kind(C, None, "Nothing to do: the sensor sleeps for ten minutes, to show its fan start."),
    "warming-up": Kind(C, None, "Nothing to do: the sensor has just started, and its first half minute is left out."),
    "humidity-high": Kind(
        S, 3, "Nothing to repair: in fog a counter weighs water, and no correction holds; read these hours as too high."
    ),
    "service-visit": Kind(
        C, 3, "Nothing to do: somebody is at the case, or was, and what was measured meanwhile is not the air's alone."
    ),
    "unit-swapped": Kind(
        C,
        3,
        "Enter `motekeep service add SENSOR unit-replaced` if it was, and check that its calibration is of this unit.",
        explains=("fan-surging",),  # its noise is compared with that of the unit before it
    ),
    "dose-due": Kind(
        M,
        None,
        f"Clean the unit as its maker says, or replace it, and tell `motekeep service add`. {OPENING} {SOLVENT}",
    ),
    "hours-due": Kind(
        M, None, f"Take a new unit on the next visit, and tell `motekeep service add SENSOR unit-replaced`. {SUPPLY}"
    ),
    "calibration-missing": Kind(
        S, 3, "Put a calibration document of this sensor in place, or set `required = false` under [calibration]."
    ),
    "calibration-expired": Kind(
        S, None, "Park a reference beside the sensor and renew its calibration: what it says now is not vouched for."
    ),
    "calibration-out-of-range": Kind(
        S,
        None,
        "Nothing to repair: the air is unlike that of the calibration; if it stays so, calibrate again in such air.",
    ),
    "clock-unsynced": Kind(
        M,
        None,
        "Let the gateway reach a time service, or give it a battery-backed clock, so that its readings can be dated.",
    ),
    "store-degraded": Kind(
        M,
        None,
        "Replace the memory card soon, keep the journal file that was set aside, and check the gateway's 5 V supply.",
    ),
    "store-full": Kind(
        M, None, "Bring the uplink back or raise `max_bytes` under [store]: old minutes are being merged into hours."
    ),
    "disk-low": Kind(M, None, "Free space on the gateway's disk, or put in a larger card."),
    "gateway-hot": Kind(
        M, None, "Shade the gateway's case or give it air: it slows itself down, and its warmth reaches its sensors."
    ),
    "supply-low": Kind(
        M, None, f"Replace the gateway's power supply or its cable: a weak 5 V slows the fans of its sensors. {SUPPLY}"
    ),
    "uplink-lost": Kind(
        M, None, "Check the gateway's network and the broker: nothing is lost while the journal has room."
    ),
    "uplink-refused": Kind(
        M,
        None,
        "Check this gateway's login, topic rights, quota and packet size at the broker: what it refuses is kept here.",
    ),
}


def casts_doubt(code: str) -> bool:
    """Whether the sensor's own numbers are in doubt while this is open, so that nothing may be learnt from them."""
    return KINDS[code].flag is not None and not code.startswith("calibration-")


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
    """A finding opened or closed at `at` (Unix seconds). `until`: one that opened is known to have ended then; None
    while it goes on."""

    finding: Finding
    opened: bool
    at: float
    until: float | None = None


@dataclass(frozen=True, slots=True)
class Suspicion:
    """What a check holds at the moment: the condition is there, since when (boot seconds), how sure, on what evidence.

    `until` is how far the evidence reaches, for checks that learn only at an interval's end; None means up to now.
    """

    since: float
    confidence: float
    evidence: str
    until: float | None = None
