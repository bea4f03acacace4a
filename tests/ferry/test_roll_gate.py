"""The gate: who passes, who is waited for, who stops the roll, each against its own state before."""

from dataclasses import replace
from typing import Any

import pytest

from ferry.rolling import NORTH, NOW, finding, health, heard, offer, refusal, state
from moteferry.roll.fleet import Failing, Fleet
from moteferry.roll.gate import Before, Case, Judgement, Rule, Sight, Step, before, judge
from motekeep.instant import rfc3339

DOCUMENT = offer(8)
RULE = Rule(hold_s=1800, patience_s=600)


def sight(fleet: Fleet, now: float, *, listening_s: float = 1e6) -> Sight:
    return Sight(fleet.states.get(NORTH), fleet.report(NORTH), fleet.failing.get(NORTH), now, listening_s)


def case(fleet: Fleet | None = None, *, accepted_at: float | None = None) -> Case:
    was = before(DOCUMENT, fleet.states.get(NORTH), fleet.report(NORTH)) if fleet is not None else Before()
    return Case(DOCUMENT, was, NOW, accepted_at)


def soaking(*findings: dict[str, Any], was: Fleet | None = None, after_s: float = 100, **more: Any) -> Judgement:
    """What the gate says of a device that accepted, and then told this health."""
    now = NOW + after_s
    fleet = heard(health=health(*findings, at=now, **more), state=state(DOCUMENT), now=now, retained=False)
    return judge(case(was or heard(health=health()), accepted_at=NOW + 1), sight(fleet, now), RULE)


def test_an_offer_is_waited_for() -> None:
    assert judge(case(), sight(heard(health=health()), NOW + 599), RULE).step is Step.OFFERED


def test_no_answer_within_the_patience_stops() -> None:
    assert judge(case(), sight(heard(), NOW + 601), RULE) == Judgement(Step.SILENT, "no answer in 10 min")


def test_the_time_without_a_link_is_not_held_against_a_device() -> None:
    assert judge(case(), sight(heard(), NOW + 86400, listening_s=5), RULE).step is Step.OFFERED


def test_acceptance_begins_the_soak() -> None:
    assert judge(case(), sight(heard(state=state(DOCUMENT)), NOW), RULE).step is Step.SOAKING


def test_a_refusal_stops_with_the_devices_own_words() -> None:
    fleet = heard(state=state(offer(7), refused=refusal(DOCUMENT)))
    assert judge(case(), sight(fleet, NOW), RULE) == Judgement(Step.REFUSED, "moves-too-far: by 90 %")


def test_a_refusal_from_before_the_offer_is_no_answer_to_it() -> None:
    fleet = heard(state=state(offer(7), refused=refusal(DOCUMENT)))
    assert judge(case(fleet), sight(fleet, NOW), RULE).step is Step.OFFERED
    again = heard(state=state(offer(7), refused=refusal(DOCUMENT, at=NOW + 5)))
    assert judge(case(fleet), sight(again, NOW + 6), RULE).step is Step.REFUSED


def test_a_refusal_of_another_document_is_none_of_ours() -> None:
    fleet = heard(state=state(offer(7), refused=refusal(offer(6))))
    assert judge(case(), sight(fleet, NOW), RULE).step is Step.OFFERED


def test_accepted_and_withdrawn_while_nobody_looked_is_a_withdrawal() -> None:
    fleet = heard(state=state(offer(7), refused=refusal(DOCUMENT, "withdrawn", withdrawn=True)))
    found = judge(case(), sight(fleet, NOW), RULE)
    assert found == Judgement(Step.WITHDRAWN, "withdrawn: by 90 %; issue 7 is in force again")


def test_a_document_that_goes_out_of_force_stops_even_after_it_passed() -> None:
    fleet = heard(health=health(), state=state(offer(7)))
    passed = replace(case(accepted_at=NOW), passed=True)
    assert judge(passed, sight(fleet, NOW + 9999), RULE) == Judgement(Step.WITHDRAWN, "issue 7 is in force again")


def test_the_hold_is_kept_and_then_it_passes() -> None:
    assert soaking(after_s=1799).step is Step.SOAKING
    assert soaking(after_s=1802).step is Step.PASSED


def test_a_device_that_soaks_longer_than_the_hold_is_waited_for() -> None:
    def seen(after_s: float) -> Step:
        now = NOW + after_s
        told = state(DOCUMENT) | {"soak_until": rfc3339(NOW + 3600)}
        fleet = heard(health=health(at=now), state=told, now=now, retained=False)
        return judge(case(heard(health=health()), accepted_at=NOW), sight(fleet, now), RULE).step

    assert seen(1802) is Step.SOAKING
    assert seen(3601) is Step.PASSED


def test_without_a_hold_acceptance_is_enough() -> None:
    fleet = heard(state=state(DOCUMENT))
    assert judge(case(accepted_at=NOW), sight(fleet, NOW), Rule(0, 600)).step is Step.PASSED


@pytest.mark.parametrize(
    ("own", "step"),
    [
        (finding("calibration-out-of-range", "out_of_specification"), Step.WORSE),
        (finding("fan-stopped", "failure"), Step.WORSE),
        (finding("mass-clipped", "out_of_specification"), Step.WORSE),
        (finding("humidity-high", "out_of_specification"), Step.SOAKING),
        (finding("counts-saturated", "out_of_specification"), Step.SOAKING),
        (finding("warming-up", "function_check"), Step.SOAKING),
        (finding("active-check", "function_check"), Step.SOAKING),
        (finding("dose-due", "maintenance_required"), Step.SOAKING),
        (finding("service-visit", "function_check"), Step.SOAKING),
    ],
)
def test_a_new_finding_stops_unless_weather_or_the_calendar_brought_it(own: dict[str, Any], step: Step) -> None:
    assert soaking(own).step is step


def test_what_was_wrong_before_is_not_held_against_the_document() -> None:
    own = finding("optics-fouled", "maintenance_required")
    assert soaking(own, was=heard(health=health(own))).step is Step.SOAKING


def test_the_same_finding_grown_worse_is() -> None:
    was = heard(health=health(finding("mass-clipped", "maintenance_required")))
    assert soaking(finding("mass-clipped", "out_of_specification"), was=was).step is Step.WORSE


def test_a_neighbours_finding_is_not_ours_and_a_failing_gateway_is() -> None:
    own = health()["sensors"]
    south = {"south": {"status": "failure", "findings": [finding("fan-stopped", "failure")]}}
    assert soaking(sensors={**own, **south}).step is Step.SOAKING
    assert soaking(findings=[finding("store-full", "failure")]).why == "gateway: store-full since it was accepted"


def test_a_health_document_from_before_the_switch_proves_nothing() -> None:
    fleet = heard(health=health(finding("fan-stopped", "failure"), at=NOW), state=state(DOCUMENT))
    assert judge(case(accepted_at=NOW + 30), sight(fleet, NOW + 40), RULE).step is Step.SOAKING


def test_a_gateway_that_goes_quiet_in_its_soak_is_waited_for_and_then_stops() -> None:
    fleet = heard(health={"status": "offline"}, state=state(DOCUMENT), now=NOW + 60, retained=False)
    accepted = case(accepted_at=NOW)
    assert judge(accepted, sight(fleet, NOW + 1900), RULE).step is Step.SOAKING
    assert judge(accepted, sight(fleet, NOW + 2401), RULE).step is Step.SILENT
    assert judge(accepted, sight(fleet, NOW + 99999, listening_s=3), RULE).step is Step.SOAKING, "we were away"


def test_two_readings_in_a_row_of_flag_4_stop_and_one_does_not() -> None:
    fleet = heard(health=health(), state=state(DOCUMENT))
    for count, step in ((1, Step.SOAKING), (2, Step.WORSE)):
        fleet.failing[NORTH] = Failing(DOCUMENT.digest, count, ("limits-fail",))
        assert judge(case(accepted_at=NOW), sight(fleet, NOW + 50), RULE).step is step


def test_readings_made_with_another_document_say_nothing_of_this_one() -> None:
    fleet = heard(health=health(), state=state(DOCUMENT))
    fleet.failing[NORTH] = Failing(offer(7).digest, 9, ("limits-fail",))
    assert judge(case(accepted_at=NOW), sight(fleet, NOW + 50), RULE).step is Step.SOAKING
