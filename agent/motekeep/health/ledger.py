"""The open findings of one sensor or of the gateway: opening, holding, closing, one cause one finding, memory.

Owns hysteresis and attribution. Must not know checks: it is told which conditions hold and turns that into events.

Rule, for each code:
  closed -- raised, and not explained by another -------------> open      (event opened)
  open   -- raised -------------------------------------------> open      (evidence is renewed, since stays)
  open   -- not raised for the code's clear_s ----------------> closed    (event closed)
  open   -- raised, and explained by another -----------------> closed    (event closed)
  remembered from before a restart counts as open:
         -- raised within the code's again_s -----------------> open      (no event, since stays)
         -- not raised in that time --------------------------> closed    (event closed)
A code is explained while a finding whose kind lists it in `explains` is raised or open.
"""

from collections import deque
from collections.abc import Iterable, Mapping
from dataclasses import dataclass

from motekeep.health.finding import KINDS, Finding, FindingEvent, Suspicion
from motekeep.health.memory import is_number
from motekeep.instant import Instant

# Findings that closed a while ago and may still reach into an interval that is being closed. Intervals are at most
# an hour; so many closings of flagged codes in an hour would be flapping, which clear_s rules out.
_CLOSED_KEPT = 64


@dataclass(frozen=True, slots=True)
class Terms:
    """How long a code must be absent to close, and how long one remembered from before a restart waits for proof."""

    clear_s: float
    again_s: float = 300.0


@dataclass(slots=True)
class _Entry:
    """An open finding in boot seconds. `until` is how far its evidence reaches, `deadline` when it closes unless
    raised again. `since_utc` is set for what began in another boot, of which boot seconds say nothing."""

    since: float
    until: float
    deadline: float
    confidence: float
    evidence: str
    since_utc: float | None = None


class Ledger:
    """The findings of one subject; `sensor` is None for the gateway."""

    def __init__(self, sensor: str | None, terms: Mapping[str, Terms]) -> None:
        self._sensor = sensor
        self._terms = terms
        self._open: dict[str, _Entry] = {}
        self._closed: deque[tuple[str, float, float]] = deque(maxlen=_CLOSED_KEPT)
        self._offset = 0.0
        self._boot = ""

    def update(self, raised: Mapping[str, Suspicion], at: Instant) -> list[FindingEvent]:
        """Take in all conditions that hold at `at`; the events that follow."""
        self._offset, self._boot = at.offset, at.boot_id
        if not raised and not self._open:
            return []
        explained = self._explained(raised)
        events: list[FindingEvent] = []
        for code in list(self._open):
            if code in explained and code in raised:
                events.append(self._close(code, at, f"explained by {explained[code]}"))
            elif code not in raised and at.boot_s >= self._open[code].deadline:
                events.append(self._close(code, at, None))
        for code, suspicion in raised.items():
            if code not in explained:
                evidence = _with_explained(code, suspicion.evidence, raised, explained)
                events += self._hold(code, suspicion, evidence, at)
        return events

    def _explained(self, raised: Mapping[str, Suspicion]) -> dict[str, str]:
        """Explained codes, each with the code that explains it."""
        holding = [*raised, *[code for code in self._open if code not in raised]]
        return {inner: outer for outer in holding for inner in KINDS[outer].explains}

    def _hold(self, code: str, suspicion: Suspicion, evidence: str, at: Instant) -> list[FindingEvent]:
        until = at.boot_s if suspicion.until is None else suspicion.until
        deadline = at.boot_s + self._terms[code].clear_s
        entry = self._open.get(code)
        if entry is not None:
            entry.until, entry.deadline = until, deadline
            entry.confidence, entry.evidence = suspicion.confidence, evidence
            return []
        since = min(suspicion.since, at.boot_s)
        self._open[code] = _Entry(since, until, deadline, suspicion.confidence, evidence)
        ended = None if suspicion.until is None else suspicion.until + self._offset
        return [FindingEvent(self._finding(code), opened=True, at=at.utc, until=ended)]

    def _close(self, code: str, at: Instant, why: str | None) -> FindingEvent:
        finding = self._finding(code)
        entry = self._open.pop(code)
        if KINDS[code].flag is not None:
            self._closed.append((code, entry.since, entry.until))
        if why is not None:
            finding = Finding(code, finding.sensor, finding.since, finding.confidence, f"{finding.evidence}; {why}")
        return FindingEvent(finding, opened=False, at=at.utc)

    def _finding(self, code: str) -> Finding:
        entry = self._open[code]
        since = entry.since + self._offset if entry.since_utc is None else entry.since_utc
        return Finding(code, self._sensor, since, entry.confidence, entry.evidence)

    def open(self) -> list[Finding]:
        """All open findings, in the order in which they opened, stamped with the clock as last seen."""
        return [self._finding(code) for code in self._open]

    def flags_between(self, start_s: float, end_s: float) -> dict[str, int]:
        """The flag of each finding whose evidence reaches into the span from `start_s` to `end_s` (boot seconds)."""
        spans = [(code, entry.since, entry.until) for code, entry in self._open.items()]
        flags: dict[str, int] = {}
        for code, since, until in [*spans, *self._closed]:
            flag = KINDS[code].flag
            if flag is not None and since < end_s and until > start_s:
                flags[code] = flag
        return flags

    def dump(self) -> list[dict[str, str | float]]:
        """Open findings as plain values for `restore` in the next life of the daemon.

        `since` is in Unix seconds; `boot` and `boot_s` say it better where the next life is in the same boot, as the
        wall clock may have been wrong when this was written.
        """
        kept: list[dict[str, str | float]] = []
        for code, entry in self._open.items():
            f = self._finding(code)
            item: dict[str, str | float] = {"code": code, "since": f.since}
            if entry.since_utc is None:
                item |= {"boot": self._boot, "boot_s": entry.since}
            kept.append(item | {"confidence": f.confidence, "evidence": f.evidence})
        return kept

    def restore(self, findings: Iterable[Mapping[str, object]], at: Instant) -> None:
        """Take up what `dump` gave. What this version has no check for, or cannot read, is left out."""
        self._offset, self._boot = at.offset, at.boot_id
        for kept in findings:
            code, since, confidence = kept.get("code"), kept.get("since"), kept.get("confidence")
            if not isinstance(code, str) or code not in self._terms:
                continue
            if not is_number(since) or not is_number(confidence):
                continue
            boot_s = kept.get("boot_s")
            if kept.get("boot") != at.boot_id or not is_number(boot_s):
                boot_s = None
            began = since - at.offset if boot_s is None else boot_s
            self._open[code] = _Entry(
                since=min(began, at.boot_s),
                until=at.boot_s,
                deadline=at.boot_s + self._terms[code].again_s,
                confidence=confidence,
                evidence=str(kept.get("evidence", "")),
                since_utc=since if boot_s is None else None,
            )


def _with_explained(code: str, evidence: str, raised: Mapping[str, Suspicion], explained: Mapping[str, str]) -> str:
    """The evidence, and that of the conditions which this finding accounts for."""
    inner = [told for told, outer in explained.items() if outer == code and told in raised]
    also = ", ".join([f"{told} ({raised[told].evidence})" for told in inner])
    return f"{evidence}; explains {also}" if also else evidence
