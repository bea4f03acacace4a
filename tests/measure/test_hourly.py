"""Hours are made of the readings that stand for them, and of nothing else; what comes late still changes them."""

from math import hypot, sqrt

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intervals import MARCH, interval
from motekeep.measure.hourly import HOUR_S, WINDOW_HOURS, Hour, Hourly, Sample, sample_of, summarise
from motekeep.measure.interval import FrameCount
from motekeep.measure.reading import (
    FAIL,
    MISSING,
    NOT_EVALUATED,
    PASS,
    SUSPECT,
    Corrected,
    Value,
    make_reading,
    uncorrected,
)

START = MARCH
FIRST = int(START // HOUR_S)


def sample(
    minute: int,
    value: float | None = 10.0,
    *,
    flag: int = PASS,
    reasons: tuple[str, ...] = (),
    u: float | None = 1.0,
    u_random: float | None = 0.6,
    good: float = 1.0,
    asleep: bool = False,
) -> Sample:
    figures = {} if asleep else {"pm2_5": Value(value, value, u, u_random)}
    measured = 0.0 if asleep else 60.0 * good
    return Sample(START + 60.0 * minute, 60.0, measured, 60.0 if asleep else 0.0, flag, reasons, figures)


def hours(*samples: Sample, until: float = 1.0) -> list[Hour]:
    hourly = Hourly()
    for s in samples:
        assert hourly.add(s)
    return hourly.due(START + until * HOUR_S)


def one(*samples: Sample) -> Hour:
    (hour,) = hours(*samples)
    return hour


# -- completeness --------------------------------------------------------------------


@pytest.mark.parametrize(("minutes", "there"), [(44, False), (45, True), (60, True)])
def test_an_hour_needs_three_quarters_of_its_minutes(minutes: int, there: bool) -> None:
    figure = one(*[sample(m) for m in range(minutes)]).figures["pm2_5"]
    assert (figure.mean is not None) is there
    assert figure.completeness == pytest.approx(minutes / 60)


def test_minutes_with_half_of_their_frames_count_half() -> None:
    figure = one(*[sample(m, good=0.5) for m in range(60)]).figures["pm2_5"]
    assert figure.mean is None
    assert figure.completeness == pytest.approx(0.5)


def test_sleep_by_duty_is_not_due() -> None:
    """Nine of ten minutes asleep and each waking minute measured: the hour is complete."""
    figure = one(*[sample(m, asleep=m % 10 != 0, value=10.0 if m % 10 == 0 else None) for m in range(60)]).figures[
        "pm2_5"
    ]
    assert figure.completeness == 1.0
    assert figure.mean == 10.0


def test_an_hour_slept_through_has_no_value() -> None:
    hour = one(*[sample(m, None, asleep=True, flag=MISSING, reasons=("asleep",)) for m in range(60)])
    assert hour.flag == MISSING
    assert hour.figures == {}
    assert hour.reasons == ("asleep",)


# -- what is averaged --------------------------------------------------------------------


def test_failed_minutes_are_left_out_and_suspect_ones_used() -> None:
    minutes = [sample(m, 10.0) for m in range(40)]
    minutes += [sample(m, 30.0, flag=SUSPECT) for m in range(40, 50)]
    minutes += [sample(m, 900.0, flag=FAIL) for m in range(50, 60)]
    hour = one(*minutes)
    assert hour.figures["pm2_5"].mean == pytest.approx(14.0)
    assert hour.figures["pm2_5"].completeness == pytest.approx(50 / 60)
    assert hour.flag == PASS


def test_more_than_a_quarter_suspect_makes_the_hour_suspect() -> None:
    minutes = [sample(m, flag=SUSPECT if m < 16 else PASS) for m in range(60)]
    assert one(*minutes).flag == SUSPECT
    minutes = [sample(m, flag=SUSPECT if m < 15 else PASS) for m in range(60)]
    assert one(*minutes).flag == PASS


def test_raw_and_corrected_figures_are_never_averaged_together() -> None:
    corrected = [sample(m, 10.0) for m in range(50)]
    raw = [sample(m, 50.0, u=None, u_random=None, flag=SUSPECT) for m in range(50, 60)]
    hour = one(*corrected, *raw)
    assert hour.figures["pm2_5"].mean == 10.0
    assert hour.figures["pm2_5"].u is not None
    half = one(*[sample(m, u=None if m < 31 else 1.0) for m in range(60)])
    assert half.figures["pm2_5"].mean is None


def test_an_uncalibrated_hour_is_not_evaluated_and_has_no_u() -> None:
    hour = one(*[sample(m, u=None, u_random=None, flag=NOT_EVALUATED) for m in range(60)])
    assert hour.flag == NOT_EVALUATED
    assert hour.figures["pm2_5"].u is None


def test_an_hour_that_lost_its_highest_minutes_to_saturation_is_suspect() -> None:
    """The censored minutes have no number to average; what is left is a lower bound and must not pass as more."""
    minutes = [sample(m) for m in range(55)]
    minutes += [sample(m, None, flag=FAIL, reasons=("coincidence-censored",)) for m in range(55, 60)]
    hour = one(*minutes)
    assert hour.figures["pm2_5"].mean == 10.0
    assert hour.figures["pm2_5"].completeness == pytest.approx(55 / 60)
    assert hour.flag == SUSPECT
    assert "coincidence-censored" in hour.reasons


def test_a_channel_that_was_censored_all_hour_is_there_without_a_mean() -> None:
    hour = one(*[sample(m, None, flag=FAIL, reasons=("coincidence-censored",)) for m in range(60)])
    assert (hour.figures["pm2_5"].mean, hour.figures["pm2_5"].completeness, hour.flag) == (None, 0.0, MISSING)


def test_reasons_are_listed_from_frequent_to_rare() -> None:
    minutes = [
        sample(m, reasons=("rare",) if m < 3 else ("often", "quite") if m < 20 else ("often",)) for m in range(60)
    ]
    assert one(*minutes).reasons == ("often", "quite", "rare")


# -- uncertainty --------------------------------------------------------------------


def test_the_random_part_averages_out_and_the_common_part_stays() -> None:
    figure = one(*[sample(m, u=1.0, u_random=0.6) for m in range(60)]).figures["pm2_5"]
    assert figure.u == pytest.approx(hypot(0.6 / sqrt(60), 0.8))


def test_without_a_random_part_nothing_averages_out() -> None:
    assert one(*[sample(m, u_random=None) for m in range(60)]).figures["pm2_5"].u == pytest.approx(1.0)


def test_what_was_not_seen_of_an_hour_makes_its_mean_less_sure() -> None:
    def u_of(minutes: range) -> float:
        u = one(*[sample(m, 10.0 + 5.0 * (-1) ** m, u_random=0.0, u=1.0) for m in minutes]).figures["pm2_5"].u
        assert u is not None
        return u

    assert u_of(range(60)) == pytest.approx(1.0)
    # sd 5.056, n 46: 5.056 / sqrt(46) * sqrt(1 - 46/60) = 0.360
    assert u_of(range(46)) == pytest.approx(hypot(1.0, 0.360), rel=1e-3)


# -- in time --------------------------------------------------------------------


def test_an_hour_is_given_once_when_it_is_over() -> None:
    hourly = Hourly()
    for m in range(60):
        hourly.add(sample(m))
        assert hourly.due(START + 60.0 * (m + 1) - 1.0) == []
    assert [h.start for h in hourly.due(START + HOUR_S)] == [START]
    assert hourly.due(START + HOUR_S + 60.0) == []


def test_hours_without_a_reading_are_not_invented() -> None:
    hourly = Hourly()
    hourly.add(sample(0))
    hourly.add(sample(300))
    assert [h.start for h in hourly.due(START + 10 * HOUR_S)] == [START, START + 5 * HOUR_S]


def test_the_same_reading_twice_counts_once() -> None:
    hourly = Hourly()
    for _ in range(2):
        for m in range(60):
            hourly.add(sample(m))
    (hour,) = hourly.due(START + HOUR_S)
    assert hour.figures["pm2_5"].completeness == 1.0


def test_a_late_amendment_takes_minutes_out_of_an_hour_that_was_given() -> None:
    hourly = Hourly()
    for m in range(180):
        hourly.add(sample(m, 10.0 if m % 60 < 50 else 40.0))
    before = hourly.due(START + 3 * HOUR_S)
    assert [h.figures["pm2_5"].mean for h in before] == pytest.approx([15.0] * 3)
    amended = hourly.amend(START + 50 * 60.0, START + 60 * 60.0, FAIL, ["fan-stopped"])
    assert amended == 10
    after = hourly.due(START + 3 * HOUR_S)
    assert [h.start for h in after] == [START, START + HOUR_S, START + 2 * HOUR_S]  # the later two by their NowCast
    assert after[0].figures["pm2_5"].mean == pytest.approx(10.0)
    assert "fan-stopped" in after[0].reasons
    assert after[1].figures["pm2_5"].mean == pytest.approx(15.0)
    assert after[1].figures["pm2_5"].nowcast != before[1].figures["pm2_5"].nowcast
    assert hourly.due(START + 3 * HOUR_S) == []


def test_an_amendment_never_makes_a_flag_better() -> None:
    hourly = Hourly()
    for m in range(60):
        hourly.add(sample(m, flag=FAIL))
    hourly.amend(START, START + HOUR_S, SUSPECT, ["fan-weak"])
    assert hourly.due(START + HOUR_S)[0].figures["pm2_5"].mean is None


def test_a_late_reading_completes_an_hour() -> None:
    hourly = Hourly()
    for m in range(40):
        hourly.add(sample(m))
    assert hourly.due(START + HOUR_S)[0].figures["pm2_5"].mean is None
    for m in range(40, 60):
        hourly.add(sample(m))
    (hour,) = hourly.due(START + HOUR_S)
    assert hour.figures["pm2_5"].mean == 10.0


def test_a_clock_that_is_put_back_forgets_what_it_stamped_too_late() -> None:
    hourly = Hourly()
    year = 365 * 24 * 60
    for m in range(60):
        hourly.add(sample(m + year))
    hourly.due(START + 366 * 86400.0)
    hourly.due(START)
    for m in range(60):
        assert hourly.add(sample(m))
    assert [h.start for h in hourly.due(START + HOUR_S)] == [START]


def test_memory_holds_two_days_and_no_more() -> None:
    hourly = Hourly()
    for h in range(60):
        for m in range(60):
            hourly.add(sample(60 * h + m))
        hourly.due(START + (h + 1) * HOUR_S)
    assert not hourly.add(sample(0))
    assert hourly.amend(START, START + 60 * HOUR_S, FAIL, ["x"]) == WINDOW_HOURS * 60
    assert len(hourly.state()) < 700_000


def test_a_wild_clock_cannot_fill_memory() -> None:
    hourly = Hourly()
    for m in range(5000):
        hourly.add(sample(60 * m))
    assert len(hourly.state()) < 20_000


# -- what follows from means --------------------------------------------------------------------


def test_the_day_needs_eighteen_hours_and_takes_those_that_are_there() -> None:
    hourly = Hourly()
    for h in range(18):
        for m in range(60):
            hourly.add(sample(60 * h + m, float(h)))
        given = hourly.due(START + (h + 1) * HOUR_S)[-1].figures["pm2_5"]
        assert given.hours_24h == h + 1
        assert given.mean_24h == (pytest.approx(8.5) if h == 17 else None)


def test_nowcast_and_index_follow_the_hours() -> None:
    hourly = Hourly()
    for h, c in enumerate([50, 80, 75, 90, 82, 53, 64, 74, 21, 10, 16, 13]):
        for m in range(60):
            hourly.add(sample(60 * h + m, float(c)))
    figure = hourly.due(START + 12 * HOUR_S)[-1].figures["pm2_5"]
    assert figure.nowcast == 17.4
    assert figure.aqi is not None
    assert figure.aqi.category == "moderate"


def test_a_single_hour_has_no_nowcast() -> None:
    assert one(*[sample(m) for m in range(60)]).figures["pm2_5"].nowcast is None


# -- after a restart --------------------------------------------------------------------


@settings(max_examples=15, deadline=None)
@given(st.data())
def test_what_was_stored_goes_on_as_if_nothing_had_happened(data: st.DataObject) -> None:
    kinds = st.tuples(
        st.none() | st.floats(0.0, 500.0),
        st.sampled_from([PASS, NOT_EVALUATED, SUSPECT, FAIL, MISSING]),
        st.sampled_from([(), ("fog",), ("incomplete", "humidity-high")]),
        st.none() | st.floats(0.0, 5.0),
    )
    drawn = data.draw(st.lists(kinds, min_size=1, max_size=150))
    stop = data.draw(st.integers(0, len(drawn)))
    whole, first = Hourly(), Hourly()
    for m, (value, flag, reasons, u) in enumerate(drawn):
        whole.add(sample(m, value, flag=flag, reasons=reasons, u=u, u_random=u))
        if m < stop:
            first.add(sample(m, value, flag=flag, reasons=reasons, u=u, u_random=u))
    whole.due(START + HOUR_S)
    first.due(START + HOUR_S)
    second = Hourly.restored(first.state())
    for m, (value, flag, reasons, u) in enumerate(drawn[stop:], stop):
        second.add(sample(m, value, flag=flag, reasons=reasons, u=u, u_random=u))
    end = FIRST + 3
    whole.due(end * HOUR_S)
    second.due(end * HOUR_S)
    for number in range(FIRST, end):
        assert second.hour(number) == whole.hour(number)


@pytest.mark.parametrize(
    "state",
    [
        "",
        "{}",
        "[]",
        "null",
        '{"version": 2}',
        '{"version":1,"closed":0,"reasons":[[]],"hours":{"1":"AAAA"}}',
        "[" * 9999,
    ],
)
def test_a_damaged_state_is_refused_by_one_error(state: str) -> None:
    with pytest.raises(ValueError, match=r".+"):
        Hourly.restored(state)


# -- from readings --------------------------------------------------------------------


def test_a_reading_weighs_as_the_time_it_measured() -> None:
    reading = make_reading(interval(frames=FrameCount(45, 5, 10)), uncorrected, {})
    made = sample_of(reading)
    assert made.measured_s == pytest.approx(45.0)
    assert made.figures["pm2_5"].value == 12.0
    assert made.flag == NOT_EVALUATED


def test_a_reading_of_a_sleeping_sensor_is_not_due() -> None:
    reading = make_reading(interval(layout=None, frames=FrameCount(0, 0, 0), asleep_s=60.0), uncorrected, {})
    made = sample_of(reading)
    assert (made.asleep_s, made.measured_s, made.flag) == (60.0, 0.0, MISSING)


def test_channels_are_judged_each_by_itself() -> None:
    def corrected(_: object) -> Corrected:
        return Corrected((Value(1.0, 1.0, 0.1), Value(2.0, None, None), Value(3.0, 3.0, None)), SUSPECT, ("x",))

    samples = [sample_of(make_reading(interval(at=START + 60.0 * m), corrected, {})) for m in range(60)]
    means = summarise(samples).means
    assert means["pm1"][:2] == (1.0, pytest.approx(0.1))
    assert means["pm2_5"][0] is None
    assert means["pm10"][:2] == (3.0, None)
