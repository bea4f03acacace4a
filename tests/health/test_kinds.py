"""The table of findings and the verdict over them."""

from itertools import combinations

import pytest

from health.small_air import instant
from motekeep.health.finding import KINDS, OPENING, PRIORITY, SOLVENT, SUPPLY, Category, Finding
from motekeep.health.gateway import TERMS
from motekeep.health.sensor import SensorHealth
from motekeep.health.verdict import status_of
from motekeep.measure.account import Limits
from motekeep.wire.dialects import DIALECTS


def finding(code: str) -> Finding:
    return Finding(code, "north", 0.0, 0.9, "")


def test_every_code_has_a_check_and_every_check_a_code() -> None:
    limits = Limits(calibration_required=True)
    sensor = SensorHealth("north", DIALECTS["bm"], 1.0, instant(0.0), twinned=True, limits=limits)
    codes = {check.code for check in sensor._checks} | set(TERMS)
    assert codes == set(KINDS)


@pytest.mark.parametrize("code", KINDS)
def test_a_remedy_is_one_plain_sentence_and_a_caution_where_it_can_hurt(code: str) -> None:
    remedy = KINDS[code].remedy
    for caution in (SOLVENT, SUPPLY, OPENING):
        remedy = remedy.replace(caution, "").rstrip()
    assert remedy.endswith(".")
    assert ". " not in remedy
    assert remedy[0].isupper()
    hurts = "supply" in remedy.lower() or "5 V at" in remedy or "inlet" in remedy
    cautioned = remedy != KINDS[code].remedy
    assert cautioned or not hurts or code == "store-degraded"  # that one only says to look at the supply


def test_a_sensor_fault_flags_its_readings_by_how_bad_it_is() -> None:
    assert {c for c, k in KINDS.items() if k.flag == 4} == {
        "fan-stopped", "output-frozen", "channels-inconsistent", "sensor-error",
    }  # fmt: skip
    assert {c for c, k in KINDS.items() if k.flag == 3} == {
        "counts-saturated", "mass-clipped", "humidity-high", "service-visit", "unit-swapped", "calibration-missing",
        "fan-weak", "fan-surging", "optics-fouled", "floor-raised", "light-leak", "twin-disagrees",
    }  # fmt: skip


def test_what_explains_is_never_itself_explained_by_it() -> None:
    for code, kind in KINDS.items():
        for inner in kind.explains:
            assert code not in KINDS[inner].explains
            assert inner in KINDS


def test_priority_is_that_of_ne_107() -> None:
    """NAMUR NE 107 (2017): failure, function check, out of specification, maintenance required. From memory: one
    secondary source orders the last three otherwise."""
    assert [c.value for c in PRIORITY] == [
        "failure", "function_check", "out_of_specification", "maintenance_required",
    ]  # fmt: skip


def test_nothing_open_is_normal() -> None:
    assert status_of([]) == "normal"


@pytest.mark.parametrize("pair", list(combinations(KINDS, 2)))
def test_the_worse_of_two_decides_in_either_order(pair: tuple[str, str]) -> None:
    worse = min((KINDS[code].category for code in pair), key=PRIORITY.index)
    assert status_of([finding(code) for code in pair]) == worse.value
    assert status_of([finding(code) for code in reversed(pair)]) == worse.value


def test_each_category_has_its_word() -> None:
    examples = {kind.category: code for code, kind in KINDS.items()}
    assert set(examples) == set(Category)
    assert {status_of([finding(code)]) for code in examples.values()} == {c.value for c in Category}
