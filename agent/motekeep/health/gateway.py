"""The health of the gateway itself: clock, store, disk, supply and uplink.

Owns the limits at which facts become findings. Must not know how facts are come by, nor any sensor.
"""

from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass

from motekeep.health.finding import Finding, FindingEvent, Suspicion
from motekeep.health.ledger import Ledger, Terms
from motekeep.instant import Instant

# A gateway that boots with its network finds a time service within a minute or two; five leave room for a slow modem.
CLOCK_S = 300.0
# ext4 keeps 5 % for root, and from there on it fragments; below 64 MiB neither the journal's WAL nor the system's
# own log has room. Closes at half as much again, so that a log that is rotated does not make it flap.
DISK_SHARE = 0.05
DISK_BYTES = 64 * 1024 * 1024
DISK_BACK = 1.5
# One sag when something is plugged in is no finding: a minute of alarm without a break, or the third within an hour.
SUPPLY_S = 60.0
SUPPLY_TIMES = 3
SUPPLY_WINDOW_S = 3600.0
# Raspberry-class boards slow themselves down at 80 to 85 degC (common practice, no source). A minute of work on a warm
# day is no finding, five are; a board that slows itself down hovers about its limit, so a little less counts on until
# then. It closes well below.
HOT_C, HOVERS_C, COOL_C = 80.0, 77.0, 72.0
HOT_S = 300.0
# A half-open link is noticed after twice the keep-alive (two minutes at 60 s), reconnecting backs off to about a
# minute; five minutes without progress are neither.
UPLINK_S = 300.0
# A refused row is tried again and set aside; a broker that still refuses something has not changed its mind.
REFUSED_HOLDS_S = 900.0


@dataclass(frozen=True, slots=True)
class GatewayFacts:
    """What is known of the gateway at one moment. None is "cannot be known", and then nothing is found.

    `untrusted_s`: how long the clock has gone without a time service's word in this boot (0 while trusted).
    `store_degraded` is the reason in words. `link_idle_s`: how long the uplink has made no progress it should have
    made: since the connection was lost, or, while rows wait, since the last acknowledgement or connection; 0 when
    it is well. `link_why` is the last reason in words. `refused` counts refusals of messages since the daemon started,
    `refused_why` is the last one in words. `connection_refused`: the broker answers and does not let this gateway in.
    """

    clock_trusted: bool
    untrusted_s: float = 0.0
    store_degraded: str | None = None
    store_full: bool = False
    rows_waiting: int = 0
    rows_in_memory: int = 0
    disk_free_bytes: int | None = None
    disk_total_bytes: int | None = None
    supply_alarm: bool | None = None
    temperature_c: float | None = None
    link_connected: bool = True
    link_idle_s: float = 0.0
    link_why: str = ""
    refused: int = 0
    refused_why: str = ""
    connection_refused: str | None = None


TERMS: Mapping[str, Terms] = {
    "clock-unsynced": Terms(clear_s=0.0, again_s=CLOCK_S + 60.0),
    "store-degraded": Terms(clear_s=60.0),
    # pruning makes a little room that the next minutes take: half an hour with room is room
    "store-full": Terms(clear_s=1800.0),
    "disk-low": Terms(clear_s=60.0),
    # a weak supply sags under load and recovers in between
    # ten minutes of rest, and the five that a new proof takes
    "gateway-hot": Terms(clear_s=600.0 + HOT_S, again_s=HOT_S + 60.0),
    "supply-low": Terms(clear_s=SUPPLY_WINDOW_S, again_s=SUPPLY_WINDOW_S),
    # a link that flaps is not back before it has held for two minutes
    "uplink-lost": Terms(clear_s=120.0, again_s=UPLINK_S + 60.0),
    "uplink-refused": Terms(clear_s=60.0, again_s=REFUSED_HOLDS_S),
}


class GatewayHealth:
    """Judges the facts of the gateway; asked with each new set of them, every few seconds."""

    def __init__(self) -> None:
        self._ledger = Ledger(None, TERMS)
        self._checks: Mapping[str, Callable[[GatewayFacts, float], Suspicion | None]] = {
            "clock-unsynced": self._clock,
            "store-degraded": self._degraded,
            "store-full": self._full,
            "disk-low": self._disk,
            "gateway-hot": self._hot,
            "supply-low": self._supply,
            "uplink-lost": self._lost,
            "uplink-refused": self._not_taken,
        }
        self._since: dict[str, float] = {}  # when each condition that needs persistence was last not there
        self._disk_low = False
        self._warm = False
        self._hottest_c = 0.0
        self._supply_alarm = False
        self._sags: list[float] = []  # beginnings of the last SUPPLY_TIMES alarms
        self._refused = 0
        self._refused_at: float | None = None
        self._refused_since = 0.0

    def judge(self, facts: GatewayFacts, at: Instant) -> list[FindingEvent]:
        """The findings that open and close with these facts."""
        raised: dict[str, Suspicion] = {}
        for code, check in self._checks.items():
            suspicion = check(facts, at.boot_s)
            if suspicion is not None:
                raised[code] = suspicion
        return self._ledger.update(raised, at)

    def open(self) -> list[Finding]:
        return self._ledger.open()

    def dump(self) -> list[dict[str, str | float]]:
        """What `restore` needs in the daemon's next life, as plain values fit for JSON."""
        return self._ledger.dump()

    def restore(self, kept: Iterable[Mapping[str, object]], at: Instant) -> None:
        """Take up what `dump` gave; what cannot be used is left out."""
        self._ledger.restore(kept, at)

    def _held(self, code: str, holds: bool, now: float) -> float:
        """Since when a condition has held without a break, by the judgements made."""
        if not holds:
            self._since.pop(code, None)
            return now
        return self._since.setdefault(code, now)

    def _clock(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        if facts.clock_trusted or facts.untrusted_s < CLOCK_S:
            return None
        evidence = f"no time service for {_span(facts.untrusted_s)}; readings are marked unsynced"
        return Suspicion(now - facts.untrusted_s, 1.0, evidence)

    def _degraded(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        since = self._held("store-degraded", facts.store_degraded is not None, now)
        if facts.store_degraded is None:
            return None
        memory = f"; {facts.rows_in_memory} readings held in memory only" if facts.rows_in_memory else ""
        return Suspicion(since, 1.0, facts.store_degraded + memory)

    def _full(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        since = self._held("store-full", facts.store_full, now)
        if not facts.store_full:
            return None
        return Suspicion(since, 1.0, f"the journal is at its limit with {facts.rows_waiting} readings waiting")

    def _disk(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        free, total = facts.disk_free_bytes, facts.disk_total_bytes
        if free is None:
            return None
        limit = max(DISK_SHARE * (total or 0), DISK_BYTES)
        if total:
            limit = min(limit, 0.5 * total)  # a store on a tiny file system of its own is not low from birth
        self._disk_low = free < limit * (DISK_BACK if self._disk_low else 1.0)
        since = self._held("disk-low", self._disk_low, now)
        if not self._disk_low:
            return None
        of = f" of {total / 1e6:.0f}" if total else ""
        return Suspicion(since, 1.0, f"{free / 1e6:.0f}{of} MB free; the limit is {limit / 1e6:.0f} MB")

    def _hot(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        warm_c = facts.temperature_c
        if warm_c is None:
            return None
        lasting = self._warm and now - self._held("gateway-hot", True, now) >= HOT_S
        self._warm = warm_c >= (COOL_C if lasting else HOVERS_C if self._warm else HOT_C)
        since = self._held("gateway-hot", self._warm, now)
        self._hottest_c = max(warm_c, self._hottest_c) if self._warm else 0.0
        if not self._warm or now - since < HOT_S:
            return None
        evidence = f"processor at {warm_c:.0f} Cel, {self._hottest_c:.0f} at the most, for {_span(now - since)}"
        return Suspicion(since, 0.95, f"{evidence}; boards slow down from {HOT_C:.0f} on")

    def _supply(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        alarm = facts.supply_alarm is True
        if alarm and not self._supply_alarm:
            self._sags = [*self._sags, now][-SUPPLY_TIMES:]
        self._supply_alarm = alarm
        since = self._held("supply-low", alarm, now)
        self._sags = [t for t in self._sags if now - t < SUPPLY_WINDOW_S or (alarm and t == since)]
        lasting = alarm and now - since >= SUPPLY_S
        if not lasting and len(self._sags) < SUPPLY_TIMES:
            return None
        told = f"{_span(now - since)} without a break" if lasting else f"{len(self._sags)} times within the hour"
        warm = f"; processor at {facts.temperature_c:.0f} Cel" if facts.temperature_c is not None else ""
        return Suspicion(self._sags[0] if self._sags else since, 0.95, f"under-voltage alarm {told}{warm}")

    def _lost(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        if facts.link_idle_s < UPLINK_S or facts.connection_refused is not None:  # the refusal says it better
            return None
        state = "connected but nothing is acknowledged" if facts.link_connected else "not connected"
        why = f" ({facts.link_why})" if facts.link_why else ""
        evidence = f"{state} for {_span(facts.link_idle_s)}{why}; {facts.rows_waiting} readings wait"
        return Suspicion(now - facts.link_idle_s, 1.0, evidence)

    def _not_taken(self, facts: GatewayFacts, now: float) -> Suspicion | None:
        if facts.connection_refused is not None:
            since = self._held("uplink-refused", True, now)
            return Suspicion(since, 1.0, f"the broker does not let this gateway in: {facts.connection_refused}")
        self._held("uplink-refused", False, now)
        if facts.refused > self._refused:
            if self._refused_at is None:
                self._refused_since = now
            self._refused_at = now
        self._refused = facts.refused
        if self._refused_at is not None and now - self._refused_at >= REFUSED_HOLDS_S:
            self._refused_at = None
        if self._refused_at is None:
            return None
        evidence = f"{facts.refused} messages refused since the start, last: {facts.refused_why or 'no reason given'}"
        return Suspicion(self._refused_since, 1.0, evidence)


def _span(seconds: float) -> str:
    """A span as people say it: `45 s`, `12 min`, `5.0 h`."""
    if seconds < 120.0:
        return f"{seconds:.0f} s"
    return f"{seconds / 60.0:.0f} min" if seconds < 7200.0 else f"{seconds / 3600.0:.1f} h"
