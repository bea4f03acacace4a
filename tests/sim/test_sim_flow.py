"""The fan and the sensing cell: flush, settling, restart."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motesim.flow import NOMINAL_CM3_S, Cell, Fan
from motesim.relaxation import Course, relax

EDGES_UM = (0.3, 0.5, 1.0, 2.5, 5.0, 10.0)


def cell_with(inside: float, volume: float = 10.0) -> Cell:
    cell = Cell(EDGES_UM, volume)
    cell.follow(np.full((1, 6), inside), np.full(1, 1e9), 1.0)  # flushed so hard that nothing is lost on the way
    return cell


def test_a_cell_is_flushed_within_volume_over_flow() -> None:
    cell = cell_with(0.0)
    fresh = np.zeros((60, 6))
    fresh[:] = 100.0
    inside = cell.follow(fresh, np.ones(60), 1.0)
    # 10 cm3 at 0.1 L/min: 6 s, 95 % in 18 s
    tau = 10.0 / NOMINAL_CM3_S
    assert tau == pytest.approx(6.0)
    assert inside[5, 0] / inside[-1, 0] == pytest.approx(1.0 - np.exp(-1.0), abs=0.01)
    assert inside[17, 0] / inside[-1, 0] == pytest.approx(0.95, abs=0.01)


def test_a_slow_fan_makes_the_flush_slow() -> None:
    halved = cell_with(0.0).follow(np.full((60, 6), 100.0), np.full(60, 0.5), 1.0)
    reached = halved[:, 0] / halved[-1, 0]
    assert reached[11] == pytest.approx(1.0 - np.exp(-1.0), abs=0.02)


def test_in_a_still_cell_the_large_ones_are_gone_first() -> None:
    inside = cell_with(100.0).follow(np.zeros((3600, 6)), np.full(3600, 1e-6), 1.0)
    below_tenth = [int(np.argmax(inside[:, channel] < 10.0)) or 3600 for channel in range(6)]
    assert below_tenth == sorted(below_tenth, reverse=True)
    assert below_tenth[-1] < 10  # above 10 um: one centimetre in 3.3 s, stirred 2.3 times that
    assert below_tenth[3] < 300
    assert inside[600, 0] > 50.0  # 0.3 to 0.5 um outlast ten minutes


def test_large_particles_are_lost_on_the_way_in_even_while_the_fan_runs() -> None:
    through = cell_with(0.0).follow(np.full((600, 6), 100.0), np.ones(600), 1.0)[-1]
    assert through[0] > 99.0
    assert through[-1] < 40.0
    weak = cell_with(0.0).follow(np.full((900, 6), 100.0), np.full(900, 0.5), 1.0)[-1]
    assert weak[-1] / through[-1] < 0.75 < weak[0] / through[0]


def test_the_fan_needs_its_time_up_and_down() -> None:
    fan = Fan(0.0, up_s=2.0, down_s=1.0)
    up = fan.run(np.ones(20), 0.1)
    assert up[19] == pytest.approx(1.0 - np.exp(-1.0), abs=1e-9)
    fan.run(np.ones(300), 0.1)
    down = fan.run(np.zeros(10), 0.1)
    assert down[9] == pytest.approx(np.exp(-1.0), abs=1e-3)


def test_falling_particles_pass_the_beam_without_a_flow() -> None:
    cell = Cell(EDGES_UM, 10.0)
    passing = cell.passing(np.full((1, 6), 100.0), np.zeros(1))[0]
    assert passing[-1] > 100.0 * 0.02
    assert passing[0] < 100.0 * 1e-4


@settings(max_examples=40, deadline=None)
@given(st.integers(1, 400), st.floats(1e-4, 400.0), st.integers(0, 2**32 - 1))
def test_relaxation_in_blocks_equals_the_step_by_step_recursion(n: int, largest: float, seed: int) -> None:
    rng = np.random.default_rng(seed)
    steps = largest * rng.random((n, 2))
    levels = 100.0 * rng.random((n, 2))
    state = np.array([3.0, 70.0])
    expected = []
    for step, level in zip(steps, levels, strict=True):
        state = state * np.exp(-np.minimum(step, 300.0)) + level * -np.expm1(-np.minimum(step, 300.0))
        expected.append(state)
    assert relax(np.array([3.0, 70.0]), steps, levels) == pytest.approx(np.array(expected), rel=1e-9, abs=1e-12)


def test_a_course_has_unit_variance_and_its_autocorrelation() -> None:
    course = Course(np.random.default_rng(5), tau_s=3600.0, step_s=600.0).take(100_000)
    assert course.std() == pytest.approx(1.0, abs=0.04)
    assert np.corrcoef(course[:-6], course[6:])[0, 1] == pytest.approx(np.exp(-1.0), abs=0.03)


def test_a_course_taken_in_parts_is_the_same_course() -> None:
    whole = Course(np.random.default_rng(1), 90.0, 10.0).take(500)
    parts = Course(np.random.default_rng(1), 90.0, 10.0)
    assert np.concatenate([parts.take(123), parts.take(377)]) == pytest.approx(whole, rel=1e-9, abs=1e-12)
