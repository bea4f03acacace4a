"""Propagation of uncertainty against two independent ways: an automatic one and a Monte Carlo.

`uncertainties` (E. O. Lebigot) differentiates the same formula by itself; the Monte Carlo follows JCGM 101:2008: draw
the inputs, push each draw through the model, take the standard deviation of what comes out.
"""

from dataclasses import replace
from math import hypot, sqrt

import numpy as np
import pytest
from uncertainties import correlated_values, ufloat
from uncertainties import umath as um

from intervals import COINCIDENCE, GROWTH, LAYOUT, LINEAR, MARCH, correction, document, interval
from motekeep.measure.correction import compile_document
from motekeep.measure.document_text import parse
from motekeep.measure.hourly import HOUR_S, Hourly, Sample
from motekeep.measure.interval import Climate, Interval
from motekeep.measure.uncertainty import count_uncertainty, raw_uncertainties

RH, T = 68.0, 12.0
HUMID = Climate(RH, T, "frame")
SCALE = 60.0

WARM_LINE = LINEAR + "rh_term = { value = -0.03, u = 0.01 }\nt_term = { value = 0.05, u = 0.02 }\n"
TIES = """
[[covariance]]
of = ["linear.slope", "linear.offset"]
value = -0.009
[[covariance]]
of = ["humidity-growth.kappa", "linear.slope"]
value = 0.0012
[climate]
u_rh = 2.5
u_t = 0.5
"""
CHAIN = COINCIDENCE + GROWTH + WARM_LINE

# kappa, slope, offset, rh_term, t_term as in CHAIN, with the covariance of TIES
MEANS = np.array([0.4, 0.9, 0.5, -0.03, 0.05])
COVARIANCE = np.diag(np.array([0.05, 0.04, 0.3, 0.01, 0.02]) ** 2)
COVARIANCE[1, 2] = COVARIANCE[2, 1] = -0.009
COVARIANCE[0, 1] = COVARIANCE[1, 0] = 0.0012


def budget_of(made: Interval) -> tuple[float, float, float]:
    """Value, u and u_random of PM2.5 by the code, with a residual too small to matter."""
    value = correction(CHAIN, residual="pm2_5 = { u = 1e-9 }", more=TIES, scale=SCALE)(made).values[1]
    assert value.value is not None
    assert value.u is not None
    assert value.u_random is not None
    return value.value, value.u, value.u_random


@pytest.mark.parametrize(("mass", "smallest"), [(12.0, 1800.0), (60.0, 9000.0), (3.0, 200.0)])
def test_a_whole_chain_agrees_with_automatic_differentiation(mass: float, smallest: float) -> None:
    made = interval(mass=(mass / 2, mass, mass * 1.2), counts=(smallest, 300.0, 60.0, 6.0, 2.0, 1.0), climate=HUMID)
    raw = ufloat(mass, raw_uncertainties(made, LAYOUT, SCALE)[1])
    count = ufloat(smallest, count_uncertainty(made.counts[0], SCALE))
    rh, t, volume = ufloat(RH, 2.5), ufloat(T, 0.5), ufloat(2.0, 0.4)
    kappa, slope, offset, rh_term, t_term = correlated_values(MEANS, COVARIANCE)
    # exp(N V) by fixed point, which differentiates itself: w = z exp(w)
    z = count * volume * 1e-5
    w = z
    for _ in range(60):
        w = z * um.exp(w)
    dry = raw * um.exp(w) / (1 + kappa / 1.65 * rh / (100 - rh))
    expected = slope * dry + offset + rh_term * rh + t_term * t
    value, u, u_random = budget_of(made)
    assert value == pytest.approx(expected.n, rel=1e-9)
    assert u == pytest.approx(expected.s, rel=1e-6)
    parts = expected.error_components()
    assert u_random == pytest.approx(hypot(parts[raw], parts[count]), rel=1e-6)


def test_a_whole_chain_agrees_with_a_monte_carlo() -> None:
    """JCGM 101:2008 with 200,000 draws: their spread is known to 0.2 %, first order is good to a few percent."""
    made = interval(climate=HUMID)
    n, rng = 200_000, np.random.default_rng(20261120)
    raw = rng.normal(12.0, raw_uncertainties(made, LAYOUT, SCALE)[1], n)
    count = rng.normal(1800.0, count_uncertainty(made.counts[0], SCALE), n)
    volume = rng.normal(2.0, 0.4, n)
    rh, t = rng.normal(RH, 2.5, n), rng.normal(T, 0.5, n)
    kappa, slope, offset, rh_term, t_term = rng.multivariate_normal(MEANS, COVARIANCE, n).T
    z = count * volume * 1e-5
    w = z.copy()
    for _ in range(25):
        w = z * np.exp(w)
    dry = raw * np.exp(w) / (1.0 + kappa / 1.65 * rh / (100.0 - rh))
    drawn = slope * dry + offset + rh_term * rh + t_term * t
    value, u, _ = budget_of(made)
    assert value == pytest.approx(drawn.mean(), rel=0.02)
    assert u == pytest.approx(drawn.std(), rel=0.03)


def test_piecewise_agrees_with_a_monte_carlo() -> None:
    steps = """
[[step]]
kind = "flow"
factor = { value = 1.2, u = 0.05 }
[[step]]
kind = "piecewise"
at = [0.0, 10.0, 40.0]
to = [{ value = 0.5, u = 0.2 }, { value = 9.0, u = 0.6 }, { value = 50.0, u = 3.0 }]
"""
    made = interval()
    got = correction(steps, residual="pm2_5 = { u = 1e-9 }", scale=SCALE)(made).values[1]
    n, rng = 200_000, np.random.default_rng(7)
    x = rng.normal(12.0, raw_uncertainties(made, LAYOUT, SCALE)[1], n) * rng.normal(1.2, 0.05, n)
    middle, end = rng.normal(9.0, 0.6, n), rng.normal(50.0, 3.0, n)
    drawn = middle + (x - 10.0) / 30.0 * (end - middle)
    assert got.value == pytest.approx(drawn.mean(), rel=0.01)
    assert got.u == pytest.approx(drawn.std(), rel=0.02)


def test_near_the_maximum_of_coincidence_first_order_fails_and_the_figure_is_flagged() -> None:
    """Why coincidence over a tenth is suspect: at 75 % of the maximum count the true spread has left first order."""
    volume, count = 10.0, 0.75 * 100.0 / (np.e * 10.0 * 1e-3)
    step = COINCIDENCE.replace("value = 2.0", f"value = {volume}").replace("u = 0.4", "u = 1.2")
    made = interval(counts=(count, 300.0, 60.0, 6.0, 2.0, 1.0))
    got = correction(step, residual="pm2_5 = { u = 1e-9 }", scale=SCALE)(made)
    assert "coincidence-high" in got.reasons
    z = np.random.default_rng(3).normal(volume, 1.2, 20000) * count * 1e-5
    z = z[z < 0.99 / np.e]
    w = z.copy()
    for _ in range(600):
        w = z * np.exp(w)
    value = got.values[1]
    assert value.u is not None
    assert value.u_random is not None
    assert (12.0 * np.exp(w)).std() > 1.1 * sqrt(value.u**2 - value.u_random**2)


@pytest.mark.parametrize("mass", [4.0, 15.0, 60.0])
def test_two_u_of_an_hour_cover_the_truth_in_nineteen_of_twenty(mass: float) -> None:
    """Hours made as the document says they are: parameters, climate error and residual drawn once an hour, counting
    once a minute. The true dry mass lies within 2 u of the hourly mean as often as it should."""
    residual, truth = 0.06, 0.9 * mass / (1.0 + 0.4 / 1.65 * RH / (100.0 - RH)) + 0.5
    steps, ties = GROWTH + LINEAR, TIES.partition("[climate]")[0] + "[climate]\nu_rh = 2.5\nu_t = 0.5\n"
    document_bytes = document(steps, residual=f"pm2_5 = {{ u = 0.2, relative = {residual} }}", more=ties)
    correct = compile_document(parse(document_bytes), SCALE)
    rng, hours, inside = np.random.default_rng(11), 250, 0
    u_minute = raw_uncertainties(_minute(mass, RH), LAYOUT, SCALE)[1]
    for hour in range(hours):
        kappa, slope, offset = rng.multivariate_normal(MEANS[:3], COVARIANCE[:3, :3])
        left_over = rng.normal(0.0, hypot(0.2, residual * truth))
        rh_seen = RH + rng.normal(0.0, 2.5)
        # What the sensor shows when its true parameters, and what the fit left over, make the truth of this hour.
        shown = ((truth - left_over) - offset) / slope * (1.0 + kappa / 1.65 * RH / (100.0 - RH))
        hourly = Hourly()
        for m in range(0, 60, 10):  # every tenth minute is enough and ten times as fast; it stands for ten
            at = MARCH + hour * HOUR_S + 60.0 * m
            value = correct(_minute(max(shown + rng.normal(0.0, u_minute / sqrt(10.0)), 0.0), rh_seen)).values[1]
            assert value.u is not None
            assert value.u_random is not None
            random = value.u_random / sqrt(10.0)
            common = sqrt(value.u**2 - value.u_random**2)
            figure = replace(value, u=hypot(common, random), u_random=random)
            hourly.add(Sample(at, 600.0, 600.0, 0.0, 1, (), {"pm2_5": figure}))
        figure_of_hour = hourly.due(MARCH + (hour + 1) * HOUR_S)[0].figures["pm2_5"]
        assert figure_of_hour.mean is not None
        assert figure_of_hour.u is not None
        inside += abs(figure_of_hour.mean - truth) <= 2.0 * figure_of_hour.u
    assert 0.92 <= inside / hours <= 0.98


def _minute(mass: float, rh: float) -> Interval:
    made = interval(mass=(mass / 2, mass, mass * 1.2), climate=Climate(rh, T, "frame"))
    return replace(made, mass=tuple([replace(m, sd=0.6, step=0.0) for m in made.mass]))
