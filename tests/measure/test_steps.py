"""Each step does what its source says, tells its own sensitivities, and flags where it stops being valid."""

from collections.abc import Callable
from dataclasses import replace
from itertools import pairwise
from math import e, exp

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motekeep.measure.reading import FAIL, PASS, SUSPECT
from motekeep.measure.steps import STEPS
from motekeep.measure.steps.coincidence import Coincidence, lambert_w0, occupancy
from motekeep.measure.steps.flow import Flow
from motekeep.measure.steps.humidity_growth import HumidityGrowth
from motekeep.measure.steps.limits import Limits
from motekeep.measure.steps.linear import Linear
from motekeep.measure.steps.piecewise import Piecewise
from motekeep.measure.steps.step import Air, Step, StepRefusedError

AIR = Air(rh_pct=62.0, temperature_c=11.0, count_per_dl=9000.0)

# Each step with its parameters as a list, so that each can be moved by a little.
MADE: list[tuple[Callable[..., Step], list[float]]] = [
    (Flow, [1.3]),
    (HumidityGrowth, [0.4]),
    (Linear, [0.8, 1.5]),
    (Linear, [0.8, 1.5, -0.05, 0.1]),
    (Coincidence, [3.0]),
    (lambda *to: Piecewise((0.0, 10.0, 40.0), to), [0.5, 9.0, 60.0]),
    (lambda: Limits(0.0, 500.0), []),
]


@pytest.mark.parametrize(("make", "parameters"), MADE)
def test_stated_sensitivities_are_the_slopes_that_can_be_measured(
    make: Callable[..., Step], parameters: list[float]
) -> None:
    """Central differences over each input; a step whose derivative is wrong makes a wrong uncertainty."""
    figure = 22.0
    outcome = make(*parameters).apply(figure, AIR)

    def slope(value: Callable[[float], float | None], size: float) -> float:
        h = 1e-5 * size
        above, below = value(h), value(-h)
        assert above is not None
        assert below is not None
        return (above - below) / (2.0 * h)

    def moved(i: int) -> Callable[[float], float | None]:
        return lambda h: make(*[p + h * (i == j) for j, p in enumerate(parameters)]).apply(figure, AIR).value

    step = make(*parameters)
    assert outcome.d_input == pytest.approx(slope(lambda h: step.apply(figure + h, AIR).value, figure), rel=1e-6)
    assert len(outcome.d_parameters) == len(parameters)
    for i, parameter in enumerate(parameters):
        assert outcome.d_parameters[i] == pytest.approx(slope(moved(i), parameter), rel=1e-5, abs=1e-8)
    for name, stated, size in (
        ("rh_pct", outcome.d_rh, 62.0),
        ("temperature_c", outcome.d_t, 11.0),
        ("count_per_dl", outcome.d_count, 9000.0),
    ):
        at = getattr(AIR, name)

        def by_air(h: float, name: str = name, at: float = at) -> float | None:
            return step.apply(figure, replace(AIR, **{name: at + h})).value

        assert stated == pytest.approx(slope(by_air, size), rel=1e-5, abs=1e-8)


def test_every_step_needs_what_it_reads_and_nothing_else() -> None:
    for make, parameters in MADE:
        step = make(*parameters)
        bare = Air(
            rh_pct=62.0 if "rh" in step.needs else None,
            temperature_c=11.0 if "t" in step.needs else None,
            count_per_dl=9000.0 if "count" in step.needs else None,
        )
        assert step.apply(22.0, bare) == step.apply(22.0, AIR)


def test_the_table_names_each_step_by_its_kind_and_builds_it() -> None:
    assert set(STEPS) == {"coincidence", "flow", "humidity-growth", "linear", "piecewise", "limits"}
    for name, kind in STEPS.items():
        assert kind.name == name
        for p in (*kind.parameters, *kind.settings):
            assert p.low < p.high
            assert p.meaning


# -- coincidence --------------------------------------------------------------------


@settings(max_examples=40, deadline=None)
@given(st.floats(-1.0 / e, 0.0))
def test_lambert_w_is_the_inverse_on_its_whole_interval(z: float) -> None:
    w = lambert_w0(z)
    assert -1.0 <= w <= 0.0
    assert w * exp(w) == pytest.approx(z, rel=1e-12, abs=1e-15)


@pytest.mark.parametrize("z", [-0.4, 0.1, float("nan")])
def test_lambert_w_is_not_given_where_it_is_not_wanted(z: float) -> None:
    with pytest.raises(ValueError, match="W0"):
        lambert_w0(z)


@settings(max_examples=40, deadline=None)
@given(st.floats(0.0, 0.999))
def test_what_coincidence_took_the_inverse_gives_back(true: float) -> None:
    got = occupancy(true * exp(-true))
    assert got is not None
    assert got == pytest.approx(true, rel=1e-6, abs=1e-9)


@settings(max_examples=40, deadline=None)
@given(st.floats(1.0001, 50.0))
def test_beyond_the_maximum_the_first_root_is_taken_never_the_second(true: float) -> None:
    """Air that dense is counted as if it were thinner. The count alone cannot tell: the answer stays below 1."""
    got = occupancy(true * exp(-true))
    assert got is None or got <= 1.0


def test_a_count_at_its_top_or_above_the_maximum_gives_no_number() -> None:
    step = Coincidence(10.0)
    maximum_per_dl = 100.0 / (e * 10.0 * 1e-3)
    below = step.apply(20.0, Air(count_per_dl=maximum_per_dl * 0.9999))
    at = step.apply(20.0, Air(count_per_dl=maximum_per_dl * 1.0001))
    full = step.apply(20.0, Air(count_per_dl=500.0, count_censored=True))
    assert below.value == pytest.approx(20.0 * e, rel=0.02)
    assert (at.value, at.flag, at.reason) == (None, FAIL, "coincidence-censored")
    assert (full.value, full.flag, full.reason) == (None, FAIL, "coincidence-censored")


def test_a_loss_over_a_tenth_is_suspect() -> None:
    step = Coincidence(1.0)

    def observed(occupied: float) -> Air:
        return Air(count_per_dl=occupied * exp(-occupied) / 1e-5)

    assert step.apply(20.0, observed(0.1053)).flag == PASS
    over = step.apply(20.0, observed(0.1054))
    assert (over.flag, over.reason) == (SUSPECT, "coincidence-high")


# -- humidity --------------------------------------------------------------------


def test_humidity_is_held_within_its_range_and_says_so_above() -> None:
    step = HumidityGrowth(0.4)
    values = {rh: step.apply(30.0, Air(rh_pct=rh)) for rh in (5.0, 30.0, 85.0, 90.0, 94.9, 95.0, 100.0)}
    assert values[5.0].value == values[30.0].value
    assert values[85.0].value == values[90.0].value == values[100.0].value
    assert [(o.flag, o.reason) for o in values.values()] == [
        (PASS, None),
        (PASS, None),
        (PASS, None),
        (SUSPECT, "humidity-high"),
        (SUSPECT, "humidity-high"),
        (FAIL, "fog"),
        (FAIL, "fog"),
    ]


def test_a_held_figure_stays_sensitive_to_humidity() -> None:
    step = HumidityGrowth(0.4)
    assert step.apply(30.0, Air(rh_pct=92.0)).d_rh == step.apply(30.0, Air(rh_pct=85.0)).d_rh < 0.0


@settings(max_examples=40, deadline=None)
@given(st.floats(0.0, 1.5), st.floats(0.0, 100.0), st.floats(0.0, 1000.0))
def test_drying_never_adds_mass(kappa: float, rh: float, mass: float) -> None:
    dry = HumidityGrowth(kappa).apply(mass, Air(rh_pct=rh)).value
    assert dry is not None
    assert 0.0 <= dry <= mass


# -- the others --------------------------------------------------------------------


def test_a_line_that_goes_below_zero_is_floored_and_suspect_and_no_surer() -> None:
    floored = Linear(0.524, 5.75, -0.0862).apply(2.0, Air(rh_pct=95.0))
    assert (floored.value, floored.flag, floored.reason) == (0.0, SUSPECT, "floored")
    assert floored.d_input == 0.524
    assert floored.d_rh == -0.0862


def test_pieces_meet_at_their_points_and_go_on_beyond_as_suspect() -> None:
    step = Piecewise((0.0, 10.0, 40.0), (1.0, 9.0, 60.0))
    inside = [step.apply(x, AIR) for x in (0.0, 5.0, 10.0, 25.0, 40.0)]
    assert [o.value for o in inside] == pytest.approx([1.0, 5.0, 9.0, 34.5, 60.0])
    assert {o.flag for o in inside} == {PASS}
    beyond = step.apply(50.0, AIR)
    assert (beyond.value, beyond.flag, beyond.reason) == (pytest.approx(77.0), SUSPECT, "piecewise-beyond")


@settings(max_examples=40, deadline=None)
@given(st.lists(st.floats(0.0, 1e3), min_size=2, max_size=12, unique=True), st.floats(-10.0, 1200.0))
def test_pieces_keep_the_order_of_figures(at: list[float], x: float) -> None:
    points = tuple(sorted(at))
    if min(b - a for a, b in pairwise(points)) < 1e-3:
        return
    step = Piecewise(points, tuple([2.0 * p + 20.0 for p in points]))
    outcome = step.apply(x, AIR)
    assert outcome.value == pytest.approx(2.0 * x + 20.0, rel=1e-6, abs=1e-5)
    assert sum(outcome.d_parameters) == pytest.approx(1.0, abs=1e-6)


def test_limits_judge_and_change_nothing() -> None:
    step = Limits(0.0, 500.0, 0.5, 200.0)
    outcomes = [step.apply(x, AIR) for x in (-1.0, 0.2, 50.0, 300.0, 501.0)]
    assert [o.value for o in outcomes] == [-1.0, 0.2, 50.0, 300.0, 501.0]
    assert [o.flag for o in outcomes] == [FAIL, SUSPECT, PASS, SUSPECT, FAIL]


@pytest.mark.parametrize(
    ("kind", "parameters", "settings", "key"),
    [
        ("humidity-growth", {"kappa": (0.4,)}, {"rh_low": (80.0,), "rh_high": (70.0,), "rh_fog": (95.0,)}, "rh_high"),
        ("humidity-growth", {"kappa": (0.4,)}, {"rh_low": (30.0,), "rh_high": (85.0,), "rh_fog": (80.0,)}, "rh_fog"),
        ("piecewise", {"to": (1.0,)}, {"at": (1.0,)}, "at"),
        ("piecewise", {"to": (1.0, 2.0, 3.0)}, {"at": (1.0, 2.0)}, "to"),
        ("piecewise", {"to": (1.0, 2.0)}, {"at": (2.0, 2.0)}, "at"),
        ("piecewise", {"to": (2.0, 1.0)}, {"at": (1.0, 2.0)}, "to"),
        ("limits", {}, {"low": (5.0,), "high": (1.0,)}, "high"),
        ("limits", {}, {"low": (5.0,), "high": (10.0,), "suspect_low": (1.0,)}, "suspect_low"),
        ("limits", {}, {"low": (5.0,), "high": (10.0,), "suspect_high": (11.0,)}, "suspect_high"),
    ],
)
def test_what_is_impossible_together_is_refused_by_its_key(
    kind: str,
    parameters: dict[str, tuple[float, ...]],
    settings: dict[str, tuple[float, ...]],
    key: str,
) -> None:
    defaults = {s.name: (s.default,) for s in STEPS[kind].settings if s.default is not None}
    with pytest.raises(StepRefusedError) as refused:
        STEPS[kind].build(parameters, defaults | settings)
    assert refused.value.key == key
