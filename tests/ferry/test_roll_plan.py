"""The plan: who gets it, who has it, who is not well, who was not heard, who would refuse it."""

import json
from typing import Any

import pytest

from ferry.rolling import NORTH, NOW, finding, health, heard, offer, refusal, state
from moteferry.roll.fleet import Fleet
from moteferry.roll.offer import Target
from moteferry.roll.plan import Entry, Standing, make_plan


def entry(**said: Any) -> Entry:
    now = said.pop("at", NOW)
    unwell_too = said.pop("unwell_too", False)
    [found] = make_plan([offer(8)], heard(**said), now, unwell_too=unwell_too).entries
    return found


def test_a_well_gateway_with_an_earlier_issue_gets_the_document() -> None:
    found = entry(health=health(), state=state(offer(7)))
    assert (found.standing, found.why, found.in_force) == (Standing.OFFER, "", 7)


def test_one_that_never_had_a_document_gets_it() -> None:
    assert entry(health=health()).standing is Standing.OFFER


def test_the_same_bytes_in_force_are_not_offered_again_whatever_its_health() -> None:
    found = entry(health=health(finding("fan-stopped", "failure"), status="failure"), state=state(offer(8)))
    assert found.standing is Standing.HAS_IT


@pytest.mark.parametrize(
    ("said", "why"),
    [
        (state(offer(9)), "issue 9 has been in force there"),
        (state(offer(8, slope=0.5)), "issue 8 is in force there with other content"),
        (state(offer(7), highest=8), "issue 8 has been in force there"),
    ],
)
def test_who_had_as_high_an_issue_would_refuse_it(said: dict[str, Any], why: str) -> None:
    found = entry(health=health(), state=said)
    assert (found.standing, found.why) == (Standing.WOULD_REFUSE, why)


def test_a_document_outside_its_dates_is_not_offered() -> None:
    too_late = 4_100_000_000.0
    assert entry(health=health(at=too_late), at=too_late).standing is Standing.WOULD_REFUSE
    too_early = 1_768_000_000.0
    assert entry(health=health(at=too_early), at=too_early).why == "it is valid from 2026-01-20T12:00:00Z only"


@pytest.mark.parametrize(
    "found",
    [
        entry(),
        entry(health={"status": "offline"}),
        entry(health=health(), at=NOW + 121),
    ],
)
def test_silence_offline_and_overdue_count_as_not_heard(found: Entry) -> None:
    assert found.standing is Standing.NOT_HEARD


def test_a_clock_that_nobody_vouches_for_does_not_make_a_gateway_overdue() -> None:
    said = health(at=NOW - 1e7, clock="unsynced")
    assert entry(health=said).standing is Standing.OFFER


def test_a_health_document_that_came_live_is_judged_by_our_clock() -> None:
    said = health(at=NOW - 1e7)
    assert entry(health=said, retained=True).standing is Standing.NOT_HEARD
    assert entry(health=said, retained=False).standing is Standing.OFFER


@pytest.mark.parametrize(
    ("own", "standing"),
    [
        (finding("fan-stopped", "failure"), Standing.NOT_WELL),
        (finding("unit-swapped", "function_check"), Standing.NOT_WELL),
        (finding("warming-up", "function_check"), Standing.OFFER),
        (finding("calibration-expired", "failure"), Standing.OFFER),
        (finding("optics-fouled", "maintenance_required"), Standing.OFFER),
        (finding("humidity-high", "out_of_specification"), Standing.OFFER),
    ],
)
def test_a_failing_sensor_is_left_out_and_one_that_a_document_mends_is_not(
    own: dict[str, Any], standing: Standing
) -> None:
    assert entry(health=health(own)).standing is standing


def test_the_way_back_is_for_the_unwell_too() -> None:
    assert entry(health=health(finding("fan-stopped", "failure")), unwell_too=True).standing is Standing.OFFER


def test_a_neighbour_that_fails_does_not_matter_and_a_gateway_that_fails_does() -> None:
    neighbour = {"south": {"status": "failure", "findings": [finding("fan-stopped", "failure")]}}
    own = health()["sensors"]
    assert entry(health=health(sensors={**own, **neighbour})).standing is Standing.OFFER
    found = entry(health=health(findings=[finding("store-full", "failure")]))
    assert (found.standing, found.why) == (Standing.NOT_WELL, "gateway: store-full")


def test_a_gateway_without_that_sensor_is_named() -> None:
    found = entry(health=health(sensors={}))
    assert (found.standing, found.why) == (Standing.NOT_WELL, "its gateway has no sensor 'north'")


def test_who_refused_it_before_is_offered_it_again_and_the_plan_says_so() -> None:
    found = entry(health=health(), state=state(offer(7), refused=refusal(offer(8))))
    assert (found.standing, found.why) == (Standing.OFFER, "refused before: moves-too-far: by 90 %")


def test_wholly_normal_gateways_come_first() -> None:
    east, west = NORTH, Target("quarry", "west-gate", "north")
    fleet = Fleet("motekeep", [east, west])
    ill = health(finding("optics-fouled", "maintenance_required"), status="maintenance_required")
    for target, said in ((east, ill), (west, health())):
        topic = f"motekeep/{target.site}/{target.gateway}/health"
        fleet.hear(topic, json.dumps(said).encode(), retained=True, now=NOW)
    plan = make_plan([offer(8, east), offer(8, west)], fleet, NOW)
    assert [entry.target for entry in plan.entries] == [west, east]


@pytest.mark.parametrize(
    "payload", [b"{", b"[]", b"null", b'{"status": 3}', b"\xff", b"[" * 100_000, b'{"status": "normal", "at": "then"}']
)
def test_a_payload_that_makes_no_sense_is_counted_and_changes_nothing(payload: bytes) -> None:
    fleet = heard(health=health())
    before = fleet.report(NORTH)
    assert not list(fleet.hear("motekeep/quarry/east-gate/health", payload, retained=False, now=NOW))
    assert fleet.not_understood == 1
    assert fleet.report(NORTH) is before


@pytest.mark.parametrize(
    "topic",
    ["motekeep/quarry/other/health", "else/quarry/east-gate/health", "motekeep/quarry", "motekeep/quarry/east-gate/x"],
)
def test_what_nobody_asked_about_is_dropped_unread(topic: str) -> None:
    fleet = Fleet("motekeep", [NORTH])
    assert not list(fleet.hear(topic, b"{", retained=False, now=NOW))
    assert fleet.not_understood == 0
