"""The record of a sensor's calibration: numbers only rise while their signer is trusted; going back changes none."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from motekeep.errors import OfferRefusedError
from motekeep.message.calibration_record import (
    KEEP,
    MOST_GUARDS,
    Accepted,
    CalibrationRecord,
    Guard,
    check_issue,
    recalled,
)

WHEN = "2026-12-01T12:00:00Z"


def accepted(record: CalibrationRecord, issue: int, key: str = "anna", content: str = "a") -> CalibrationRecord:
    own = f"sha256:{issue}{content}"
    entry = Accepted(issue=issue, digest=own, signer=key, key=key, valid_until=WHEN, at=WHEN)
    guard = Guard(issue=issue, digest=own, key=key, document=f"issue = {issue}", signature="s")
    return record.accept(entry, guard, "offer")


def refusal(
    record: CalibrationRecord, issue: int, content: str = "a", gone: frozenset[str] = frozenset()
) -> str | None:
    try:
        check_issue(issue, f"sha256:{issue}{content}", record, record.highest(lambda guard: guard.key not in gone))
    except OfferRefusedError as error:
        return error.reason
    return None


STEPS = st.lists(st.tuples(st.integers(1, 30), st.sampled_from(["anna", "bert", "carl"])), max_size=15)


@given(STEPS, st.frozensets(st.sampled_from(["anna", "bert", "carl"])))
def test_a_number_must_exceed_the_highest_of_those_who_are_trusted_now(
    steps: list[tuple[int, str]], gone: frozenset[str]
) -> None:
    record, numbers = CalibrationRecord(), list[tuple[int, str]]()
    for issue, key in steps:
        if refusal(record, issue) is None:
            record = accepted(record, issue, key)
            numbers.append((issue, key))
    highest = max((issue for issue, key in numbers if key not in gone), default=0)
    assert refusal(record, highest + 1, "new", gone) is None
    assert (refusal(record, highest, "new", gone) == "issue-reused") or highest == 0
    assert highest < 2 or refusal(record, highest - 1, "new", gone) == "issue-not-higher"
    assert recalled(record.json_text()) == record


@given(STEPS)
def test_it_does_not_grow_without_end(steps: list[tuple[int, str]]) -> None:
    record = CalibrationRecord()
    for number, (_, key) in enumerate(steps * 3, 1):
        record = accepted(record, number, f"{key}{number % 7}")
    assert len(record.accepted) <= KEEP
    assert len(record.guards) <= MOST_GUARDS
    assert not steps or record.highest(lambda _: True) is not None
    assert all(g.issue == len(steps) * 3 for g in [record.highest(lambda _: True)] if g)


def test_going_back_changes_no_number() -> None:
    record = CalibrationRecord()
    for issue in (1, 2, 3):
        record = accepted(record, issue)
    for other in (
        record.withdraw("soak-jump: too far", "sha256:2a", WHEN),
        record.restore("sha256:1a", WHEN),
        record.take_out(WHEN),
        record.prove(),
    ):
        assert other.guards == record.guards
        assert refusal(other, 2, "new") == "issue-not-higher"
        assert refusal(other, 4) is None


def test_the_way_back_is_the_newest_earlier_one_that_was_not_withdrawn() -> None:
    record = CalibrationRecord()
    for issue in (1, 2, 3):
        record = accepted(record, issue)
    record = record.withdraw("soak-jump: too far", "sha256:2a", WHEN)
    record = accepted(record, 4)
    assert [entry.issue for entry in record.before("sha256:4a")] == [2, 1]
    assert refusal(record, 3) == "withdrawn"
    forgiven = record.restore("sha256:3a", WHEN)
    assert forgiven.current is not None
    assert forgiven.current.withdrawn is None


@pytest.mark.parametrize("text", [None, "", "{}x", "[]", '{"in_force": 3}', '{"unknown": 1}'])
def test_what_is_no_record_is_none(text: str | None) -> None:
    assert recalled(text) is None
