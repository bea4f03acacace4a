"""What is known of the gateway, gathered for its health: clock, store, disk, supply, uplink.

Owns the translation of states into facts. Judges nothing.
"""

from collections.abc import Callable
from pathlib import Path
from typing import Protocol

from motekeep.edges.ports import StoreState
from motekeep.health.gateway import GatewayFacts
from motekeep.instant import Instant, rfc3339
from motekeep.loops.link import LinkFacts
from motekeep.message.documents import LinkHealth


class Disk(Protocol):
    @property
    def free(self) -> int: ...

    @property
    def total(self) -> int: ...


class Machine(Protocol):
    """The gateway as `edges/host.py` reads it."""

    def disk(self, path: Path) -> Disk | None: ...

    def supply_low(self) -> bool | None: ...

    def temperature_c(self) -> float | None: ...


class Facts:
    """Called with the store's state every few seconds; gives the facts and the link as it is published."""

    def __init__(self, machine: Machine, store: Path, link: Callable[[Instant], LinkFacts]) -> None:
        self._machine = machine
        self._store = store
        self._link = link
        self._untrusted_since: float | None = None

    def __call__(self, store: StoreState, at: Instant) -> tuple[GatewayFacts, LinkHealth]:
        link, disk = self._link(at), self._machine.disk(self._store)
        if at.trusted:
            self._untrusted_since = None
        elif self._untrusted_since is None:
            self._untrusted_since = at.boot_s
        facts = GatewayFacts(
            clock_trusted=at.trusted,
            untrusted_s=0.0 if self._untrusted_since is None else at.boot_s - self._untrusted_since,
            store_degraded=store.degraded,
            store_full=store.full,
            rows_waiting=store.waiting,
            rows_in_memory=store.in_memory,
            disk_free_bytes=None if disk is None else disk.free,
            disk_total_bytes=None if disk is None else disk.total,
            supply_alarm=self._machine.supply_low(),
            temperature_c=self._machine.temperature_c(),
            link_connected=link.since is not None,
            link_idle_s=_idle_s(link, store.waiting, at),
            link_why=link.why or "",
            refused=link.refused + link.set_aside,
            refused_why="; ".join(link.refusing),
            connection_refused=link.connection_refused,
        )
        since = None if link.since is None else rfc3339(link.since)
        return facts, LinkHealth(since=since, reconnects=link.reconnects, refused=link.refused)


def _idle_s(link: LinkFacts, waiting: int, at: Instant) -> float:
    """How long the uplink has made no progress that it should have made."""
    if link.since is None:
        return link.down_s or 0.0
    if not waiting:
        return 0.0
    connected_s = max(at.utc - link.since, 0.0)
    return connected_s if link.last_answer_s is None else min(connected_s, link.last_answer_s)
