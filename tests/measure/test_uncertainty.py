"""Uncertainty adds up as the law of propagation says, and its random part is told from the rest."""

from dataclasses import replace
from math import hypot, sqrt
from random import Random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intervals import GROWTH, LAYOUT, LINEAR, channel, correction, interval
from motekeep.measure.counting import count_variance, garwood, physical_scale
from motekeep.measure.interval import EMPTY, Climate, Interval
from motekeep.measure.interval import channel as channel_of
from motekeep.measure.uncertainty import Sensitivities, Sources, count_uncertainty, propagate, raw_uncertainties

HUMID = Climate(70.0, 12.0, "frame")


def test_uncorrelated_sources_add_in_quadrature() -> None:
    c = Sensitivities(2.0, (3.0, 4.0), rh=0.5, t=1.0, count=0.1)
    u = Sources(0.5, ((0, 0, 0.01), (1, 1, 0.04)), rh=2.0, t=0.5, count=10.0)
    budget = propagate(c, u, residual=0.7)
    assert budget.counting == pytest.approx(hypot(1.0, 1.0))
    assert budget.parameters == pytest.approx(hypot(0.3, 0.8))
    assert budget.climate == pytest.approx(hypot(1.0, 0.5))
    assert budget.u == pytest.approx(sqrt(2.0 + 0.73 + 1.25 + 0.49))
    assert budget.u_random == budget.counting


def test_full_correlation_adds_linearly_and_opposite_errors_cancel() -> None:
    c = Sensitivities(0.0, (3.0, 4.0), 0.0, 0.0, 0.0)

    def parameters(r: float) -> float:
        u = Sources(0.0, ((0, 0, 0.01), (0, 1, r * 0.1 * 0.2), (1, 1, 0.04)), 0.0, 0.0, 0.0)
        return propagate(c, u, 0.0).parameters

    assert parameters(1.0) == pytest.approx(0.3 + 0.8)
    assert parameters(-1.0) == pytest.approx(0.8 - 0.3)


def test_an_error_of_humidity_that_enters_twice_counts_once_with_its_sum() -> None:
    """A growth step and an RH term that pull opposite ways: their common source must not be squared apart."""
    quiet = "[climate]\nu_rh = 3.0\nu_t = 0.0\n"
    exact_growth = GROWTH.replace("u = 0.05", "u = 0.0")
    slope = -0.9 * 12.0 / _factor(70.0) ** 2 * 0.4 / 1.65 * 100.0 / 30.0**2

    def u_of(rh_term: float) -> float:
        line = LINEAR.replace("u = 0.04", "u = 0.0").replace("u = 0.3", "u = 0.0")
        line += f"rh_term = {{ value = {rh_term}, u = 0.0 }}\n"
        got = correction(exact_growth + line, residual="pm2_5 = { u = 1e-9 }", more=quiet)(interval(climate=HUMID))
        value = got.values[1]
        assert value.u is not None
        assert value.u_random is not None
        return sqrt(value.u**2 - value.u_random**2)

    assert u_of(0.0) == pytest.approx(3.0 * abs(slope), rel=1e-6)
    assert u_of(-slope) == pytest.approx(0.0, abs=1e-6)
    assert u_of(slope) == pytest.approx(6.0 * abs(slope), rel=1e-6)


def _factor(rh: float) -> float:
    return 1.0 + 0.4 / 1.65 * rh / (100.0 - rh)


def test_the_covariance_of_slope_and_offset_is_used() -> None:
    tie = '[[covariance]]\nof = ["linear.slope", "linear.offset"]\nvalue = {}\n'

    def u_of(value: float) -> float:
        got = correction(LINEAR, more=tie.format(value))(interval()).values[1]
        assert got.u is not None
        return got.u

    # sensitivity to the slope is 12, to the offset 1
    assert u_of(-0.012) ** 2 - u_of(0.0) ** 2 == pytest.approx(2 * 12.0 * -0.012)


def test_the_residual_of_the_fit_is_there_whatever_the_parameters_say() -> None:
    exact = LINEAR.replace("u = 0.04", "u = 0").replace("u = 0.3", "u = 0")
    got = correction(exact, residual="pm2_5 = { u = 0.8, relative = 0.1 }")(interval()).values[1]
    assert got.u is not None
    assert got.u_random is not None
    assert sqrt(got.u**2 - got.u_random**2) == pytest.approx(hypot(0.8, 0.1 * 11.3))


# -- counting --------------------------------------------------------------------


def test_physics_gives_sixty_pulses_to_one_at_a_tenth_of_a_litre_a_minute() -> None:
    assert physical_scale(0.1, 1.0) == pytest.approx(60.0)
    assert physical_scale(0.1, 6.0) == pytest.approx(10.0)


def test_a_scaled_count_is_as_uncertain_as_the_pulses_behind_it() -> None:
    """1200 printed at 60 a pulse is 20 pulses a frame: 1200 pulses in a minute of frames, hence 2.9 %."""
    assert sqrt(count_variance(1200.0, 60, 60.0)) / 1200.0 == pytest.approx(1.0 / sqrt(1200.0), rel=1e-3)


def test_a_count_of_zero_is_not_a_certainty() -> None:
    assert count_variance(0.0, 60, 60.0) == pytest.approx(1.0)


def test_a_mean_of_no_frames_has_no_variance() -> None:
    with pytest.raises(ValueError, match="no frames"):
        count_variance(1.0, 0, 60.0)


@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2000), st.sampled_from([0.68, 0.95, 0.99]))
def test_the_exact_interval_holds_its_count_and_grows_with_the_level(n: int, level: float) -> None:
    low, high = garwood(n, level)
    assert low < n < high or (n == 0 and low == 0.0)
    wider = garwood(n, 0.999)
    assert wider[0] <= low
    assert high <= wider[1]


def test_air_that_changes_within_the_minute_is_not_taken_for_noise_where_the_scale_is_known() -> None:
    """A slow rise has a wide spread and hardly any step from frame to frame; counting says how much of it is noise."""
    made = interval()
    rising = replace(made, mass=tuple([replace(channel(m.mean, 8.0, lag1=0.98), step=0.5) for m in made.mass]))
    blind, small, large = [raw_uncertainties(rising, LAYOUT, scale)[1] for scale in (None, 10.0, 100.0)]
    assert small < large < 0.5 * blind
    assert small >= sqrt(0.5 / 60.0)


def test_a_spread_smaller_than_counting_allows_is_believed() -> None:
    """Firmware that gives coarse particles little weight prints a PM10 that is quieter than its coarse counts."""
    u = raw_uncertainties(_steady(), LAYOUT, 60.0)
    assert u == pytest.approx(raw_uncertainties(_steady(), LAYOUT, None))


def test_a_few_frames_are_as_sure_as_counting_allows_and_no_surer() -> None:
    """One coarse pulse of 5 to 10 um is 3.05 ug/m3: five frames that agree by chance must not hide that."""
    made = interval()
    short = replace(made, mass=tuple([channel(m.mean, 0.0, 5) for m in made.mass]))
    short = replace(short, counts=tuple([replace(c, n=5) for c in made.counts]))
    assert raw_uncertainties(short, LAYOUT, 60.0)[2] > 3.0


def _steady() -> Interval:
    """An interval whose mass hardly moves, so that only the model of counting speaks."""
    made = interval()
    return replace(made, mass=tuple([replace(m, sd=0.6, step=0.0) for m in made.mass]))


def test_noise_that_neighbouring_frames_show_is_never_left_out() -> None:
    """A fan that surges makes more noise than counting: the model alone would call such a figure too sure."""
    made = _steady()
    rough = replace(made, mass=tuple([replace(m, sd=20.0, step=400.0) for m in made.mass]))
    assert raw_uncertainties(rough, LAYOUT, 60.0)[1] >= sqrt(400.0 / 60.0)


def test_without_a_scale_the_mean_respects_autocorrelation() -> None:
    made = interval()
    free = replace(made, mass=tuple([channel(12.0, 2.0) for _ in made.mass]))
    tied = replace(made, mass=tuple([channel(12.0, 2.0, lag1=0.8) for _ in made.mass]))
    u_free, u_tied = [raw_uncertainties(i, LAYOUT, None)[1] for i in (free, tied)]
    assert u_free == pytest.approx(2.0 / sqrt(60.0))
    assert u_tied == pytest.approx(2.0 * 3.0 / sqrt(60.0))


def test_a_print_that_does_not_move_is_known_to_its_step_only() -> None:
    made = interval()
    still = replace(made, mass=tuple([channel(5.0, 0.0) for _ in made.mass]))
    assert raw_uncertainties(still, LAYOUT, None)[1] == pytest.approx(1.0 / sqrt(12.0))


def test_noise_takes_the_rounding_of_the_print_out_of_the_mean() -> None:
    """Numbers drawn, rounded and averaged: what rounding leaves is no more than stated, and stated is not far above."""
    random = Random(5)
    for sigma, most in ((0.05, 0.30), (0.4, 0.05), (1.0, 0.005)):
        squares, stated = 0.0, 0.0
        for _ in range(300):
            centre = 10.0 + random.random()
            drawn = [random.gauss(centre, sigma) for _ in range(60)]
            printed = channel_of([float(round(x)) for x in drawn])
            squares += (printed.mean - sum(drawn) / 60.0) ** 2
            mass = replace(printed, lag1=0.0)
            made = replace(interval(), mass=(mass, mass, mass))
            stated += raw_uncertainties(made, LAYOUT, None)[0] ** 2 - mass.standard_error**2
        assert sqrt(stated / 300) <= most + 0.1 * sigma
        if sigma < 0.1:
            assert sqrt(squares / 300) == pytest.approx(sqrt(stated / 300), rel=0.15)


def test_a_censored_count_is_no_model_of_counting() -> None:
    made = interval(censored=2)
    assert raw_uncertainties(made, LAYOUT, 60.0) == raw_uncertainties(made, LAYOUT, None)
    assert count_uncertainty(EMPTY, 60.0) == 0.0
