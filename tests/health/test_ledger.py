"""Opening, holding, closing, attribution and memory of findings."""

import json

import pytest
from hypothesis import given
from hypothesis import strategies as st

from health.small_air import instant
from motekeep.health.finding import KINDS, FindingEvent, Suspicion
from motekeep.health.ledger import Ledger, Terms
from motekeep.instant import Instant

TERMS = {code: Terms(clear_s=60.0, again_s=300.0) for code in KINDS}
FROZEN, FAN, CORRUPT, MISSING = "output-frozen", "fan-stopped", "frames-corrupt", "frames-missing"


def held(since: float, evidence: str = "seen", until: float | None = None) -> Suspicion:
    return Suspicion(since, 0.9, evidence, until)


def told(events: list[FindingEvent]) -> list[tuple[str, bool]]:
    return [(event.finding.code, event.opened) for event in events]


def test_a_condition_opens_once_and_closes_after_it_was_absent_for_clear_s() -> None:
    ledger = Ledger("north", TERMS)
    assert told(ledger.update({FROZEN: held(90.0)}, instant(100.0))) == [(FROZEN, True)]
    assert ledger.update({FROZEN: held(90.0)}, instant(105.0)) == []
    assert ledger.update({}, instant(160.0)) == []
    closed = ledger.update({}, instant(165.0))
    assert told(closed) == [(FROZEN, False)]
    assert closed[0].at == instant(165.0).utc
    assert ledger.open() == []


def test_a_condition_that_comes_and_goes_faster_than_clear_s_does_not_flap() -> None:
    ledger = Ledger("north", TERMS)
    events = []
    for t in range(0, 3600, 5):
        raised = {FROZEN: held(float(t))} if t // 50 % 2 == 0 else {}
        events += ledger.update(raised, instant(float(t)))
    assert told(events) == [(FROZEN, True)]


def test_since_is_utc_of_the_beginning_and_stays_while_evidence_is_renewed() -> None:
    ledger = Ledger("north", TERMS)
    ledger.update({FROZEN: held(90.0, "early")}, instant(100.0))
    ledger.update({FROZEN: held(95.0, "late")}, instant(120.0))
    (finding,) = ledger.open()
    assert finding.since == instant(90.0).utc
    assert finding.evidence == "late"
    assert finding.sensor == "north"


def test_a_clock_that_is_set_later_moves_since_with_it() -> None:
    ledger = Ledger(None, TERMS)
    ledger.update({FROZEN: held(90.0)}, instant(100.0, offset=0.0))
    ledger.update({FROZEN: held(90.0)}, instant(200.0, offset=1.8e9))
    assert ledger.open()[0].since == 1.8e9 + 90.0


def test_one_cause_is_one_finding_and_the_explained_becomes_its_evidence() -> None:
    ledger = Ledger("north", TERMS)
    assert told(ledger.update({CORRUPT: held(10.0, "5 of 100 damaged")}, instant(50.0))) == [(CORRUPT, True)]
    events = ledger.update({CORRUPT: held(10.0, "9 of 100 damaged"), MISSING: held(55.0, "no frame")}, instant(90.0))
    assert told(events) == [(CORRUPT, False), (MISSING, True)]
    assert events[0].finding.evidence.endswith("explained by frames-missing")
    assert events[1].finding.evidence == "no frame; explains frames-corrupt (9 of 100 damaged)"


def test_the_explained_stays_shut_while_its_cause_is_open_and_opens_when_it_outlasts_it() -> None:
    ledger = Ledger("north", TERMS)
    ledger.update({MISSING: held(0.0)}, instant(10.0))
    assert ledger.update({CORRUPT: held(5.0)}, instant(40.0)) == []  # the cause is not raised but not closed either
    assert told(ledger.update({CORRUPT: held(5.0)}, instant(75.0))) == [(MISSING, False)]
    assert told(ledger.update({CORRUPT: held(5.0)}, instant(80.0))) == [(CORRUPT, True)]


def test_flags_reach_from_the_beginning_to_where_the_evidence_ends() -> None:
    ledger = Ledger("north", TERMS)
    ledger.update({"counts-saturated": held(60.0, until=120.0)}, instant(120.0))
    assert ledger.flags_between(0.0, 60.0) == {}
    assert ledger.flags_between(60.0, 120.0) == {"counts-saturated": 3}
    ledger.update({"counts-saturated": held(60.0, until=120.0)}, instant(150.0))
    assert ledger.flags_between(120.0, 180.0) == {}


def test_a_finding_that_closed_still_flags_the_span_it_held_in() -> None:
    ledger = Ledger("north", TERMS)
    ledger.update({FAN: held(60.0)}, instant(100.0))
    assert told(ledger.update({}, instant(165.0))) == [(FAN, False)]
    assert ledger.flags_between(60.0, 180.0) == {FAN: 4}
    assert ledger.flags_between(120.0, 180.0) == {}


def test_a_code_without_a_flag_flags_nothing() -> None:
    ledger = Ledger("north", TERMS)
    ledger.update({MISSING: held(0.0)}, instant(100.0))
    assert ledger.flags_between(0.0, 100.0) == {}


def restarted(ledger: Ledger, at: Instant) -> Ledger:
    new = Ledger("north", TERMS)
    new.restore(json.loads(json.dumps(ledger.dump())), at)
    return new


def test_since_survives_a_restart_when_the_condition_is_raised_again_in_time() -> None:
    first = Ledger("north", TERMS)
    first.update({FAN: held(60.0)}, instant(100.0))
    second = restarted(first, instant(20.0, offset=1.8e9 + 500.0, boot="two"))
    assert [f.code for f in second.open()] == [FAN]
    assert second.update({FAN: held(200.0)}, instant(250.0, offset=1.8e9 + 500.0, boot="two")) == []
    assert second.open()[0].since == 1.8e9 + 60.0


def test_in_the_same_boot_since_follows_a_clock_that_was_wrong_before_the_restart() -> None:
    first = Ledger("north", TERMS)
    first.update({FAN: held(60.0)}, instant(100.0, offset=1.0e9))
    second = restarted(first, instant(130.0, offset=1.0e9))
    second.update({FAN: held(140.0)}, instant(150.0, offset=1.8e9))
    assert second.open()[0].since == 1.8e9 + 60.0


def test_a_remembered_finding_that_is_not_raised_again_closes_with_an_event() -> None:
    first = Ledger("north", TERMS)
    first.update({FAN: held(60.0)}, instant(100.0))
    second = restarted(first, instant(1000.0, boot="two"))
    assert second.update({}, instant(1299.0, boot="two")) == []
    (event,) = second.update({}, instant(1300.0, boot="two"))
    assert (event.finding.code, event.opened, event.finding.since) == (FAN, False, instant(60.0).utc)


@pytest.mark.parametrize(
    "kept",
    [
        {},
        {"code": "no-such-code", "since": 1.0, "confidence": 1.0, "evidence": ""},
        {"code": FAN, "since": "yesterday", "confidence": 1.0},
        {"code": FAN, "since": 1.0, "confidence": None},
        {"code": ["fan"], "since": 1.0, "confidence": 1.0},
    ],
)
def test_a_memory_that_cannot_be_used_is_left_out(kept: dict[str, object]) -> None:
    ledger = Ledger("north", TERMS)
    ledger.restore([kept], instant(10.0))
    assert ledger.open() == []


@given(
    st.lists(
        st.tuples(st.floats(0.1, 100.0), st.sets(st.sampled_from([FROZEN, FAN, CORRUPT, MISSING, "sensor-error"]))),
        max_size=60,
    )
)
def test_events_alternate_for_each_code_and_what_is_open_is_what_they_say(steps: list[tuple[float, set[str]]]) -> None:
    ledger = Ledger("north", TERMS)
    now = 0.0
    last: dict[str, bool] = {}
    for seconds, codes in steps:
        now += seconds
        for event in ledger.update({code: held(now) for code in sorted(codes)}, instant(now)):
            assert last.get(event.finding.code, False) is not event.opened
            last[event.finding.code] = event.opened
        open_codes = {f.code for f in ledger.open()}
        assert open_codes == {code for code, opened in last.items() if opened}
        explained = {inner for outer in open_codes for inner in KINDS[outer].explains}
        assert not (explained & open_codes & codes)
