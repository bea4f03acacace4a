"""The gateway's own findings: what opens each of them, what closes it, what leaves it shut."""

import json
from collections.abc import Iterator
from dataclasses import replace

import pytest

from health.small_air import instant
from motekeep.health.finding import FindingEvent
from motekeep.health.gateway import GatewayFacts, GatewayHealth

WELL = GatewayFacts(
    clock_trusted=True,
    disk_free_bytes=20_000_000_000,
    disk_total_bytes=30_000_000_000,
    supply_alarm=False,
    temperature_c=51.0,
)
MB = 1_000_000


class Gateway:
    """A gateway judged every five seconds."""

    def __init__(self) -> None:
        self.health = GatewayHealth()
        self.now = 0.0
        self.events: list[FindingEvent] = []

    def live(self, facts: GatewayFacts, seconds: float = 5.0) -> "Gateway":
        for _ in range(round(seconds / 5.0)):
            self.now += 5.0
            self.events += self.health.judge(facts, instant(self.now))
        return self

    def codes(self) -> list[str]:
        return [f.code for f in self.health.open()]

    def evidence(self) -> str:
        return self.health.open()[0].evidence


def test_a_gateway_that_is_well_has_no_finding() -> None:
    gateway = Gateway().live(WELL, 3600.0)
    assert gateway.events == []


def test_what_cannot_be_known_is_no_finding() -> None:
    unknown = GatewayFacts(clock_trusted=True)
    assert Gateway().live(unknown, 3600.0).events == []


def test_a_clock_that_is_set_within_minutes_of_boot_is_no_finding_a_later_one_is() -> None:
    gateway = Gateway()
    for untrusted_s in range(5, 300, 5):
        gateway.live(replace(WELL, clock_trusted=False, untrusted_s=float(untrusted_s)))
    assert gateway.codes() == []
    gateway.live(replace(WELL, clock_trusted=False, untrusted_s=300.0))
    assert gateway.codes() == ["clock-unsynced"]
    assert gateway.health.open()[0].since == pytest.approx(instant(0.0).utc)
    gateway.live(WELL)
    assert gateway.codes() == []


def test_a_damaged_store_is_told_with_its_reason_and_what_hangs_in_memory() -> None:
    gateway = Gateway().live(replace(WELL, store_degraded="the file was damaged and set aside", rows_in_memory=12))
    assert gateway.codes() == ["store-degraded"]
    assert gateway.evidence() == "the file was damaged and set aside; 12 readings held in memory only"
    assert gateway.live(WELL, 60.0).codes() == []


def test_a_full_store_does_not_flap_while_it_is_pruned() -> None:
    gateway = Gateway()
    for _ in range(30):
        gateway.live(replace(WELL, store_full=True, rows_waiting=90_000), 60.0).live(WELL, 240.0)
    assert [(e.finding.code, e.opened) for e in gateway.events] == [("store-full", True)]
    assert gateway.live(WELL, 1800.0).codes() == []


@pytest.mark.parametrize(
    ("free", "total", "low"),
    [
        (1_400 * MB, 30_000 * MB, True),  # under 5 %
        (1_600 * MB, 30_000 * MB, False),
        (60 * MB, 500 * MB, True),  # under 64 MiB, above 5 %
        (70 * MB, 500 * MB, False),
        (60 * MB, 100 * MB, False),  # a small file system of its own
        (40 * MB, 100 * MB, True),
        (60 * MB, None, True),
    ],
)
def test_a_disk_is_low_by_share_and_by_bytes(free: int, total: int | None, low: bool) -> None:
    gateway = Gateway().live(replace(WELL, disk_free_bytes=free, disk_total_bytes=total))
    assert gateway.codes() == (["disk-low"] if low else [])


def test_a_disk_that_hovers_at_the_limit_does_not_flap() -> None:
    gateway = Gateway()
    for n in range(100):
        gateway.live(replace(WELL, disk_free_bytes=(1_450 if n % 2 else 1_800) * MB), 120.0)
    assert [e.opened for e in gateway.events] == [True]
    assert gateway.live(replace(WELL, disk_free_bytes=2_400 * MB), 120.0).codes() == []


def warm(temperature_c: float) -> GatewayFacts:
    return replace(WELL, temperature_c=temperature_c)


def test_a_processor_that_is_hot_for_five_minutes_is_a_finding_and_a_burst_of_work_is_none() -> None:
    gateway = Gateway().live(warm(84.0), 240.0).live(warm(60.0), 600.0)
    assert gateway.events == []
    gateway.live(warm(81.0), 200.0).live(warm(78.5), 100.0)  # slowed down, it hovers about its limit
    assert gateway.codes() == []
    gateway.live(warm(83.0), 10.0)
    assert gateway.codes() == ["gateway-hot"]
    assert gateway.evidence().startswith("processor at 83 Cel, 83 at the most, for 5 min")
    assert gateway.health.open()[0].since == gateway.events[0].at - 300.0


def test_one_touch_of_the_limit_opens_nothing_however_warm_it_stays_below() -> None:
    assert Gateway().live(warm(80.5), 10.0).live(warm(75.0), 3600.0).events == []


def test_a_hot_gateway_is_well_again_after_a_quarter_of_an_hour() -> None:
    gateway = Gateway().live(warm(82.0), 400.0).live(warm(74.0), 3600.0)
    assert gateway.codes() == ["gateway-hot"]
    for _ in range(3):
        gateway.live(warm(65.0), 300.0).live(warm(83.0), 320.0)
    assert [event.opened for event in gateway.events] == [True]
    assert gateway.live(warm(65.0), 920.0).codes() == []


def test_one_sag_of_the_supply_is_no_finding_a_lasting_one_is() -> None:
    gateway = Gateway().live(replace(WELL, supply_alarm=True), 30.0).live(WELL, 3600.0)
    assert gateway.events == []
    gateway.live(replace(WELL, supply_alarm=True), 70.0)
    assert gateway.codes() == ["supply-low"]
    assert "without a break" in gateway.evidence()
    assert "51 Cel" in gateway.evidence()


def test_the_third_sag_within_an_hour_is_a_finding_that_stays_for_an_hour() -> None:
    gateway = Gateway()
    for _ in range(3):
        gateway.live(replace(WELL, supply_alarm=True)).live(WELL, 600.0)
    assert gateway.codes() == ["supply-low"]
    assert "3 times within the hour" in gateway.evidence()
    assert gateway.live(WELL, 3000.0).codes() == ["supply-low"]
    assert gateway.live(WELL, 4200.0).codes() == []


def test_sags_that_lie_hours_apart_are_no_finding() -> None:
    gateway = Gateway()
    for _ in range(6):
        gateway.live(replace(WELL, supply_alarm=True)).live(WELL, 4000.0)
    assert gateway.events == []


def idle(facts: GatewayFacts, seconds: float) -> Iterator[GatewayFacts]:
    for s in range(0, int(seconds), 5):
        yield replace(facts, link_idle_s=float(s))


def test_a_link_without_progress_is_lost_after_five_minutes_and_dated_to_the_last() -> None:
    gateway = Gateway()
    lost_at = gateway.now + 5.0
    down = replace(WELL, link_connected=False, link_why="connection refused", rows_waiting=7)
    for facts in idle(down, 310.0):
        gateway.live(facts)
    (event,) = gateway.events
    assert event.finding.code == "uplink-lost"
    assert event.finding.since == pytest.approx(instant(lost_at).utc)
    assert event.finding.evidence == "not connected for 5 min (connection refused); 7 readings wait"
    assert gateway.live(WELL, 120.0).codes() == []


def test_a_reconnect_within_minutes_is_no_finding() -> None:
    gateway = Gateway()
    for _ in range(10):
        for facts in idle(replace(WELL, link_connected=False), 200.0):
            gateway.live(facts)
        gateway.live(WELL, 60.0)
    assert gateway.events == []


def test_a_connection_on_which_nothing_is_acknowledged_is_lost_too() -> None:
    gateway = Gateway()
    for facts in idle(replace(WELL, rows_waiting=3), 400.0):
        gateway.live(facts)
    assert "connected but nothing is acknowledged" in gateway.evidence()


def test_refused_messages_are_a_finding_that_ends_a_quarter_hour_after_the_last() -> None:
    gateway = Gateway().live(WELL, 60.0)
    gateway.live(replace(WELL, refused=1, refused_why="not authorized"))
    assert gateway.codes() == ["uplink-refused"]
    assert gateway.evidence() == "1 messages refused since the start, last: not authorized"
    refused = replace(WELL, refused=5, refused_why="packet too large")
    gateway.live(refused, 890.0)
    assert gateway.codes() == ["uplink-refused"]
    gateway.live(refused, 100.0)
    assert gateway.codes() == []
    assert [e.opened for e in gateway.events] == [True, False]


def test_a_broker_that_does_not_let_us_in_is_one_finding_and_not_a_lost_link_as_well() -> None:
    gateway = Gateway()
    shut = replace(WELL, link_connected=False, connection_refused="bad user name or password", rows_waiting=2)
    for facts in idle(shut, 900.0):
        gateway.live(facts)
    assert gateway.codes() == ["uplink-refused"]
    assert "does not let this gateway in: bad user name or password" in gateway.evidence()


def test_findings_of_the_gateway_survive_a_restart() -> None:
    gateway = Gateway().live(replace(WELL, store_full=True), 60.0)
    since = gateway.health.open()[0].since
    restarted = GatewayHealth()
    restarted.restore(json.loads(json.dumps(gateway.health.dump())), instant(90.0))
    assert restarted.judge(replace(WELL, store_full=True), instant(95.0)) == []
    assert restarted.open()[0].since == since
