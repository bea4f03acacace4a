"""What is learnt of a pair: from sound days only, never what two sound units cannot be, and begun again by service."""

import json
from math import exp, log
from statistics import mean

import pytest

from health.twin_air import FLOW_L_MIN, OWN, PERIOD_S, SIZES_UM, START, TWIN, Make, Sickness, hours
from motekeep.health.baseline import Baseline
from motekeep.health.lessons.twin_ratio import TwinRatioLesson, impossible
from motekeep.health.twin_block import Block, BlockBuilder, from_numbers, to_numbers
from motekeep.instant import Instant
from motekeep.measure.dose import ServiceKind


def lesson_after(days, **air):
    lesson = TwinRatioLesson(FLOW_L_MIN, PERIOD_S)
    for hour in hours(days, **air):
        lesson.hour(hour)
    return lesson


def test_three_sound_days_give_the_ratio_and_two_do_not():
    assert lesson_after(2.5).part() is None
    assert lesson_after(3.2).part() is not None


def test_the_ratio_is_that_of_the_days_it_was_learnt_in():
    part = lesson_after(3.2).part()
    seen = list(hours(3.0))
    for i in range(4):  # those with counts enough
        expected = mean(log(hour.pair.own[i] / hour.pair.twin[i]) for hour in seen)
        assert part.channels[i].level == pytest.approx(expected, abs=0.02)


def test_a_threshold_that_is_off_is_found_as_a_shift_of_its_size():
    """N(>d) falls as d^-slope, so a threshold higher by t counts t^-slope: the slope's coefficient is ln t, as far as
    three days show it; the rest is drawn to zero, as units are made alike."""
    parts = [lesson_after(3.2, seed=seed).part() for seed in range(4)]
    for i in range(3):
        true = log(OWN.thresholds[i] / TWIN.thresholds[i])
        assert 0.0 < mean(part.channels[i].shift for part in parts) / true < 1.5


def test_hours_in_doubt_and_hours_without_a_trusted_clock_teach_nothing():
    assert lesson_after(6.0, sound=False).part() is None
    assert lesson_after(6.0, trusted=False).part() is None


def test_what_was_learnt_stands_still():
    lesson = lesson_after(3.2)
    part = lesson.part()
    for hour in hours(4.0, lambda _day: Sickness(flow=0.5), first_day=4.0):
        lesson.hour(hour)
    assert lesson.part() == part


@pytest.mark.parametrize("sick", [Sickness(flow=0.15), Sickness(light=0.2), Sickness(floor=300_000.0)])
def test_what_no_two_sound_units_can_be_is_not_learnt(sick):
    """Flow within 5 % and thresholds within 10 % of nominal: ISO 21501-4, clauses 3.7 and 3.2."""
    assert lesson_after(6.0, sick=lambda _day: sick).part() is None


def test_a_unit_at_the_edge_of_the_standard_is_learnt():
    rough = Make(1.05, (1.09, 0.92, 1.08, 0.93, 1.05, 0.95))
    assert lesson_after(3.2, own=rough).part() is not None


def test_a_pair_that_becomes_possible_is_learnt_after_all():
    lesson = lesson_after(5.0, sick=lambda _day: Sickness(flow=0.1))
    for hour in hours(6.2, first_day=5.0):
        lesson.hour(hour)
    assert lesson.part() is not None


def test_the_impossible_is_told_in_numbers_that_a_person_can_check():
    blocks = [Block(0.0, 14_400.0, (100.0,) * 6, (10_000.0, 2_000.0, 300.0, 40.0, 6.0, 0.5))]
    told = impossible(SIZES_UM, blocks, FLOW_L_MIN)
    assert told is not None
    assert "0.01 of the twin's count above 0.3 um" in told


@pytest.mark.parametrize("days", [1.6, 3.2])
def test_a_restart_loses_nothing(days):
    lesson = lesson_after(days)
    again = TwinRatioLesson(FLOW_L_MIN, PERIOD_S)
    again.recall(json.loads(json.dumps(lesson.notes())))
    for hour in hours(3.4, first_day=days, seed=2):
        for each in (lesson, again):
            each.hour(hour)
    assert again.part() is not None
    for one, other in zip(lesson.part().channels, again.part().channels, strict=True):
        assert one.level == pytest.approx(other.level, abs=1e-3)


@pytest.mark.parametrize(
    "notes",
    [
        {},
        {"sizes_um": [0.3, 0.5], "ratio": [1.0]},
        {"sizes_um": "no", "blocks": []},
        {"sizes_um": [0.3, 0.5], "blocks": [1.0, 2.0, "x", 4.0, 5.0, 6.0]},
        {"sizes_um": [0.3, 0.5], "blocks": [1.0, 2.0, -1.0, 4.0, 5.0, 6.0]},
        {"sizes_um": [0.3, float("nan")], "ratio": [1.0] * 12},
    ],
)
def test_notes_that_cannot_be_used_are_ignored(notes):
    lesson = TwinRatioLesson(FLOW_L_MIN, PERIOD_S)
    lesson.recall(notes)
    assert lesson.part() is None
    for hour in hours(3.2):
        lesson.hour(hour)
    assert lesson.part() is not None


def test_service_at_either_unit_begins_it_again_and_moving_both_does_not():
    kinds = {ServiceKind.CLEANED, ServiceKind.FAN_REPLACED, ServiceKind.UNIT_REPLACED}
    assert TwinRatioLesson.begun_again_by == TwinRatioLesson.begun_again_by_twin == kinds
    lesson = lesson_after(3.2)
    lesson.forget()
    assert lesson.part() is None


def test_a_service_record_of_the_twin_begins_it_again_and_a_note_does_not():
    lesson, at = lesson_after(3.2), Instant(START, 5000.0, "boot", True)
    baseline = Baseline((lesson,))
    assert baseline.review(at)
    assert not baseline.twin_service(ServiceKind.NOTE, at)
    assert lesson.name in baseline.parts
    assert baseline.twin_service(ServiceKind.CLEANED, at)
    assert baseline.parts == {}


def test_a_block_ends_with_the_slot_and_short_ones_are_dropped():
    builder = BlockBuilder(PERIOD_S)
    blocks = [block for hour in hours(1.0) if (block := builder.add(hour)) is not None]
    assert [block.seconds for block in blocks] == [14_400.0] * 5
    assert [block.start_utc % 14_400.0 for block in blocks] == [0.0] * 5


def test_blocks_survive_as_plain_numbers():
    blocks = [
        Block(1e9, 14_400.0, (1234.5678, 10.0), (0.0, 3.0)),
        Block(1e9 + 14_400.0, 3600.0, (1.0, 2.0), (3.0, 4.0)),
    ]
    again = from_numbers(json.loads(json.dumps(to_numbers(blocks))), 2)
    assert again == [Block(1e9, 14_400.0, (1234.6, 10.0), (0.0, 3.0)), blocks[1]]


def test_a_ratio_rests_on_pulses():
    """100 pulses in each: the logarithm of their ratio has the variance 2/100 (Poisson, first order)."""
    pulse = 12.0 / (FLOW_L_MIN * 3600.0)
    block = Block(0.0, 3600.0, (99.5 * pulse, 0.0), (99.5 * pulse, 99.5 * pulse))
    first, second = block.compare((0.3, 0.5), FLOW_L_MIN)
    assert first.log_ratio == pytest.approx(0.0)
    assert first.variance == pytest.approx(0.02)
    assert exp(second.log_ratio) == pytest.approx(0.005)
    assert second.variance > 2.0
