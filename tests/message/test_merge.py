"""Many readings made into one: worked examples by hand, and what must hold of any of them."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from journal_site import document
from motekeep.message.documents import (
    ClimateDocument,
    FramesDocument,
    ProvenanceDocument,
    ReadingDocument,
    ValueDocument,
)
from motekeep.message.merge import mergeable, merged

HOUR = 1_796_115_600.0


def minute(index: int, **changes: object) -> ReadingDocument:
    """The reading of minute `index` of an hour, numbered from 1."""
    return document("north", index + 1, HOUR + 60 * index, boot_s=100.0 + 60 * index, **changes)


def value(number: float, u: float | None = 1.0) -> ValueDocument:
    return ValueDocument(raw=number + 1, value=number, u=u)


def test_a_full_hour_stands_for_its_numbers_and_spans_its_time() -> None:
    one = merged([minute(i) for i in range(60)])
    assert (one.from_seq, one.seq, one.seconds, one.start) == (1, 60, 3600, "2026-12-01T09:00:00Z")
    assert one.frames == FramesDocument(good=3600, bad=0, missing=0)
    assert one.reasons == ["uncalibrated", "merged"]
    assert ReadingDocument.model_validate_json(one.json_text()) == one


def test_means_weigh_each_reading_by_the_seconds_it_measured() -> None:
    half = FramesDocument(good=30, bad=10, missing=20)
    one = merged([minute(0, pm2_5=value(10.0)), minute(1, pm2_5=value(40.0), frames=half)])
    assert one.pm2_5 == ValueDocument(raw=21.0, value=20.0, u=1.0)  # (10 * 60 + 40 * 30) / 90, by hand
    short = minute(1, pm2_5=value(40.0), seconds=30)
    assert merged([minute(0, pm2_5=value(10.0)), short]).pm2_5 == ValueDocument(raw=21.0, value=20.0, u=1.0)


def test_uncertainty_is_the_weighted_mean_and_does_not_shrink_with_the_number_of_readings() -> None:
    # JCGM 100:2008, 5.2.2, note 1: with correlation +1 the uncertainties add linearly.
    one = merged([minute(i, pm2_5=value(10.0, u=1.0 + i % 2)) for i in range(60)])
    assert one.pm2_5 is not None
    assert one.pm2_5.u == 1.5


def test_an_uncertainty_that_one_reading_lacks_is_not_made_up() -> None:
    one = merged([minute(0, pm2_5=value(10.0, u=None)), minute(1, pm2_5=value(20.0, u=1.0))])
    assert one.pm2_5 == ValueDocument(raw=16.0, value=15.0, u=None)


def test_a_count_that_was_censored_once_is_null_and_the_others_are_means() -> None:
    one = merged(
        [minute(0, counts_per_dL={"0.3": 100.0, "0.5": None}), minute(1, counts_per_dL={"0.3": 200.0, "0.5": 7.0})]
    )
    assert one.counts_per_dL == {"0.3": 150.0, "0.5": None}


def test_a_minute_without_frames_thins_the_hour_but_does_not_make_it_missing() -> None:
    silent = document(
        "north", 2, HOUR + 60, boot_s=160.0, pm1=None, pm2_5=None, pm10=None, counts_per_dL=None,
        frames=FramesDocument(good=0, bad=0, missing=60), flag=9, reasons=["no-frames"],
    )  # fmt: skip
    one = merged([minute(0), silent, minute(2), minute(3), minute(4)])
    assert one.pm2_5 == minute(0).pm2_5
    assert (one.flag, one.reasons) == (2, ["uncalibrated", "no-frames", "merged"])
    thin = merged([minute(0), silent])
    assert thin.flag == 3
    assert thin.reasons == ["uncalibrated", "no-frames", "incomplete", "merged"]
    assert merged([silent]).flag == 9


def test_the_worst_flag_of_the_readings_with_figures_is_kept() -> None:
    assert merged([minute(0, flag=1), minute(1, flag=4), minute(2, flag=3)]).flag == 4


def test_climate_is_the_mean_of_those_that_have_one() -> None:
    one = merged(
        [minute(0, climate=ClimateDocument(rh=60.0, t=10.0)), minute(1), minute(2, climate=ClimateDocument(rh=70.0))]
    )
    assert one.climate == ClimateDocument(rh=65.0, t=10.0)


def test_hours_merge_into_a_day_as_their_minutes_would() -> None:
    minutes = [minute(i, pm2_5=value(float(i % 7))) for i in range(120)]
    hours = [merged(minutes[:60]), merged(minutes[60:])]
    day, at_once = merged(hours), merged(minutes)
    assert mergeable(*hours)
    assert (day.from_seq, day.seq, day.seconds) == (1, 120, 7200)
    assert day.pm2_5 is not None
    assert at_once.pm2_5 is not None
    assert day.pm2_5.value == pytest.approx(at_once.pm2_5.value, abs=0.011)
    assert day.reasons == at_once.reasons == ["uncalibrated", "merged"]


@pytest.mark.parametrize(
    "other",
    [
        minute(2),
        minute(1).model_copy(update={"sensor": "south"}),
        minute(1, boot="c" * 32),
        minute(1, clock="unsynced"),
        minute(1, calibration=ProvenanceDocument(issue=7, digest="sha256:0")),
    ],
    ids=["a number between", "sensor", "boot", "clock", "calibration"],
)
def test_what_differs_in_kind_is_not_merged(other: ReadingDocument) -> None:
    assert mergeable(minute(0), minute(1))
    assert not mergeable(minute(0), other)


def test_the_calibration_of_the_figures_is_kept_past_a_silent_first_minute() -> None:
    used = ProvenanceDocument(issue=7, digest="sha256:0")
    silent = minute(0, pm1=None, pm2_5=None, pm10=None, counts_per_dL=None, flag=9)
    later = minute(1, calibration=used)
    assert mergeable(silent, later)
    assert merged([silent, later]).calibration == used


def test_merging_nothing_is_an_error() -> None:
    with pytest.raises(ValueError, match="nothing"):
        merged([])


figures = st.floats(0, 1000).map(lambda x: round(x, 2))


@given(st.lists(st.tuples(figures, st.integers(0, 60), st.sampled_from([1, 2, 3, 4])), min_size=1, max_size=20))
def test_a_merged_figure_lies_between_its_parts_and_frames_add_up(parts: list[tuple[float, int, int]]) -> None:
    documents = [
        minute(i, pm2_5=value(v), frames=FramesDocument(good=good, bad=0, missing=60 - good), flag=flag)
        for i, (v, good, flag) in enumerate(parts)
    ]
    one = merged(documents)
    assert one.pm2_5 is not None
    assert one.pm2_5.value is not None
    weighty = [v for v, good, _ in parts if good] or [v for v, _, _ in parts]
    assert min(weighty) - 0.005 <= one.pm2_5.value <= max(weighty) + 0.005
    assert one.frames.good == sum(good for _, good, _ in parts)
    assert one.flag in (3, 4) or one.frames.good >= 0.75 * 60 * len(parts)
