"""A document made into a correction: the chain, what falls back, what is flagged, and what nothing can upset."""

from math import exp, isfinite, log

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intervals import (
    COINCIDENCE,
    EXAMPLE,
    GROWTH,
    LAYOUT,
    LINEAR,
    MARCH,
    NO_COUNTS,
    channel,
    correction,
    document,
    interval,
)
from motekeep.instant import Instant
from motekeep.measure.correction import compile_document
from motekeep.measure.document_text import parse
from motekeep.measure.interval import EMPTY, Channel, Climate, FrameCount, Interval
from motekeep.measure.reading import FAIL, NOT_EVALUATED, PASS, SUSPECT, Value, make_reading
from motekeep.measure.steps.humidity_growth import mass_factor

HUMID = Climate(70.0, 12.0, "frame")
ALL = "pm1 = { u = 0.3 }\npm2_5 = { u = 0.5 }\npm10 = { u = 1.0 }"


def test_steps_act_one_after_the_other_on_the_figure() -> None:
    got = correction(GROWTH + LINEAR)(interval(climate=HUMID))
    assert got.values[1].value == pytest.approx(0.9 * 12.0 / mass_factor(0.4, 70.0) + 0.5)
    assert (got.values[1].raw, got.flag) == (12.0, PASS)
    other_way = correction(LINEAR + GROWTH)(interval(climate=HUMID))
    assert other_way.values[1].value == pytest.approx((0.9 * 12.0 + 0.5) / mass_factor(0.4, 70.0))


def test_the_document_it_was_made_with_is_stated() -> None:
    text = document(LINEAR)
    got = compile_document(parse(text))(interval())
    assert got.calibration is not None
    assert (got.calibration.issue, got.calibration.digest) == (3, parse(text).digest)


def test_channels_without_a_residual_pass_raw_without_u_and_are_named() -> None:
    got = correction(LINEAR)(interval())
    assert got.values[0] == Value(6.0, 6.0, None)
    assert got.values[2] == Value(15.0, 15.0, None)
    assert got.reasons == ("uncalibrated:pm1", "uncalibrated:pm10")
    assert got.flag == PASS


def test_a_step_acts_on_its_channels_only() -> None:
    line = LINEAR.replace('kind = "linear"', 'kind = "linear"\nchannels = ["pm2_5"]')
    got = correction(GROWTH + line, residual=ALL)(interval(climate=HUMID))
    factor = mass_factor(0.4, 70.0)
    assert [v.value for v in got.values] == pytest.approx([6.0 / factor, 0.9 * 12.0 / factor + 0.5, 15.0 / factor])


# -- climate --------------------------------------------------------------------


@pytest.mark.parametrize(
    ("climate", "reason"),
    [
        (None, "climate-missing"),
        (Climate(70.0, 12.0, "mqtt", age_s=301.0), "climate-stale"),
        (Climate(130.0, 12.0, "mqtt"), "climate-implausible"),
        (Climate(-1.0, 12.0, "mqtt"), "climate-implausible"),
        (Climate(float("nan"), 12.0, "mqtt"), "climate-implausible"),
        (Climate(70.0, 400.0, "mqtt"), "climate-implausible"),
    ],
)
def test_without_usable_humidity_the_figure_falls_back_to_raw_and_says_why(
    climate: Climate | None, reason: str
) -> None:
    got = correction(GROWTH + LINEAR)(interval(climate=climate))
    assert got.values[1] == Value(12.0, 12.0, None)
    assert got.flag == SUSPECT
    assert got.reasons[1:3] == (reason, "uncorrected:pm2_5")
    assert got.calibration is None


def test_humidity_is_never_remembered_from_an_earlier_interval() -> None:
    correct = correction(GROWTH)
    correct(interval(climate=HUMID))
    assert correct(interval()).values[1] == Value(12.0, 12.0, None)


def test_a_channel_that_needs_no_climate_is_corrected_without_it() -> None:
    growth = GROWTH.replace('kind = "humidity-growth"', 'kind = "humidity-growth"\nchannels = ["pm2_5"]')
    got = correction(growth + LINEAR, residual=ALL)(interval())
    assert got.values[1] == Value(12.0, 12.0, None)
    assert got.values[2].value == pytest.approx(0.9 * 15.0 + 0.5)
    assert got.flag == SUSPECT
    assert got.calibration is not None


def test_a_temperature_term_needs_a_temperature() -> None:
    warm = LINEAR + "t_term = { value = 0.1, u = 0.01 }\n"
    missing = correction(warm)(interval(climate=Climate(70.0, None, "frame")))
    assert missing.values[1] == Value(12.0, 12.0, None)
    assert "climate-missing" in missing.reasons
    there = correction(warm)(interval(climate=HUMID))
    assert there.values[1].value == pytest.approx(0.9 * 12.0 + 0.5 + 0.1 * 12.0)


def test_fog_fails_and_high_humidity_is_suspect() -> None:
    correct = correction(GROWTH)
    assert correct(interval(climate=Climate(90.0, 12.0, "frame"))).flag == SUSPECT
    fog = correct(interval(climate=Climate(98.0, 12.0, "frame")))
    assert fog.flag == FAIL
    assert "fog" in fog.reasons
    assert fog.values[1].value == pytest.approx(12.0 / mass_factor(0.4, 85.0))


# -- counts --------------------------------------------------------------------


def test_coincidence_raises_mass_by_the_share_that_was_lost() -> None:
    got = correction(COINCIDENCE, residual=ALL)(interval())
    observed = 1800.0 / 100.0 * 2.0e-3
    factor = got.values[1].value
    assert factor is not None
    factor /= 12.0
    # N exp(-N V) of the factor's own N V gives back what was observed.
    assert log(factor) * exp(-log(factor)) == pytest.approx(observed)
    assert [v.value / v.raw for v in got.values if v.value and v.raw] == pytest.approx([factor] * 3)


def test_a_censored_count_gives_no_number_and_keeps_the_raw_one() -> None:
    got = correction(COINCIDENCE)(interval(censored=1))
    assert got.values[1] == Value(12.0, None, None)
    assert got.flag == FAIL
    assert "coincidence-censored" in got.reasons
    assert got.calibration is not None


def test_a_dialect_without_counts_falls_back_to_raw() -> None:
    bare = interval(mass=(12.0, 15.0), layout=NO_COUNTS)
    got = correction(COINCIDENCE)(bare)
    assert got.values[0] == Value(12.0, 12.0, None)
    assert got.flag == SUSPECT
    assert "counts-missing" in got.reasons


# -- validity --------------------------------------------------------------------


def test_out_of_range_use_is_corrected_and_suspect() -> None:
    correct = compile_document(parse(EXAMPLE.encode()))
    inside = correct(interval(climate=HUMID))
    too_much = correct(interval(mass=(100.0, 151.0, 200.0), climate=HUMID))
    too_dry = correct(interval(climate=Climate(19.0, 12.0, "frame")))
    assert "calibration-out-of-range" not in inside.reasons
    for got in (too_much, too_dry):
        assert got.flag == SUSPECT
        assert "calibration-out-of-range" in got.reasons
        assert got.values[1].u is not None


def test_a_stated_range_of_rh_counts_for_steps_that_do_not_need_it_where_rh_is_known() -> None:
    text = document(LINEAR).replace(b"rh = [0.0, 100.0]", b"rh = [20.0, 60.0]")
    assert b"rh = [20.0, 60.0]" in text
    dry_air_only = compile_document(parse(text))
    got = [dry_air_only(interval(climate=c)) for c in (Climate(50.0, 12.0, "frame"), HUMID, None)]
    assert ["calibration-out-of-range" in g.reasons for g in got] == [False, True, False]
    assert all(g.values[1].u is not None for g in got)


@pytest.mark.parametrize(
    ("at", "trusted", "reason"),
    [
        (MARCH + 300 * 86400, True, "calibration-expired"),
        (MARCH - 150 * 86400, True, "calibration-early"),
        (MARCH + 300 * 86400, False, None),
    ],
)
def test_dates_decide_only_on_a_clock_that_is_trusted(at: float, trusted: bool, reason: str | None) -> None:
    got = correction(LINEAR)(interval(at=at, trusted=trusted))
    assert got.flag == (PASS if reason is None else SUSPECT)
    assert (reason in got.reasons) if reason else not any(r.startswith("calibration") for r in got.reasons)
    assert got.values[1].value == pytest.approx(11.3)


def test_a_reading_made_of_it_has_the_flag_of_its_worst_part() -> None:
    reading = make_reading(interval(climate=Climate(90.0, 12.0, "frame")), correction(GROWTH), {"fan-stopped": FAIL})
    assert reading.flag == FAIL
    assert {"humidity-high", "fan-stopped"} <= set(reading.reasons)
    assert reading.calibration is not None


def test_an_empty_channel_has_no_figure() -> None:
    full = interval()
    hole = Interval(
        **{f: getattr(full, f) for f in Interval.__dataclass_fields__ if f != "mass"},
        mass=(full.mass[0], EMPTY, full.mass[2]),
    )
    got = correction(LINEAR)(hole)
    assert got.values[1] == Value(None, None, None)


def test_an_interval_without_frames_is_not_evaluated() -> None:
    assert correction(LINEAR)(interval(layout=None)).flag == NOT_EVALUATED


numbers = st.floats(0.0, 1e5)
channels = st.builds(
    lambda n, mean, sd, lag, censored: channel(mean, sd, n, lag1=lag, censored=censored) if n else EMPTY,
    st.integers(0, 60),
    numbers,
    numbers,
    st.floats(-1.0, 1.0),
    st.integers(0, 3),
)
climates = st.none() | st.builds(
    Climate,
    st.floats(allow_nan=True, allow_infinity=True),
    st.none() | st.floats(allow_nan=True, allow_infinity=True),
    st.just("frame"),
    st.floats(0.0, 1e4),
)
EVERYTHING = correction(
    COINCIDENCE
    + '[[step]]\nkind = "flow"\nfactor = { value = 1.2, u = 0.1 }\n'
    + GROWTH
    + '[[step]]\nkind = "piecewise"\nat = [0.0, 20.0, 80.0]\n'
    + "to = [{ value = 0.0, u = 0.1 }, { value = 18.0, u = 0.5 }, { value = 90.0, u = 3.0 }]\n"
    + LINEAR
    + "rh_term = { value = -0.03, u = 0.01 }\nt_term = { value = 0.05, u = 0.02 }\n"
    + '[[step]]\nkind = "limits"\nlow = 0.0\nhigh = 500.0\n',
    residual=ALL,
    scale=60.0,
)


@settings(max_examples=60, deadline=None)
@given(st.tuples(channels, channels, channels), st.tuples(*[channels] * 6), climates)
def test_no_interval_upsets_it_and_no_figure_without_a_number_leaves_it(
    mass: tuple[Channel, ...], counts: tuple[Channel, ...], climate: Climate | None
) -> None:
    at = Instant(MARCH, 1.0, "boot", trusted=True)
    got = EVERYTHING(Interval("north", at, 60.0, FrameCount(60), LAYOUT, mass, (), counts, climate))
    for value, own in zip(got.values, mass, strict=True):
        assert (value.raw is None) == (own.n == 0)
        for number in (value.value, value.u, value.u_random):
            assert number is None or (isfinite(number) and number >= 0.0)
        if value.u is not None and value.u_random is not None:
            assert value.u_random <= value.u
        if value.value is None and value.raw is not None:
            assert got.flag == FAIL
