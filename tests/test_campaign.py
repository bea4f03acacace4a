"""The campaign's short way, frames into health without a line between, finds what the whole pipeline finds."""

import sys
from dataclasses import replace
from pathlib import Path

import pytest

sys.path.insert(0, str(Path(__file__).parents[1] / "tools/bench/campaign"))

import driving
import weathers

from motesim.events import Event
from motesim.faults import Fault
from motesim.plan import Duty, SitePlan

START = 1_804_032_000.0


def plan(*, twinned: bool, duty: Duty | None = None, faults: tuple[Fault, ...] = ()) -> SitePlan:
    units = weathers.sensors(11, 6.0, twinned=twinned, duty=duty)
    units = (replace(units[0], faults=faults), *units[1:])
    return replace(weathers.site("fog", 11, START, 0.4, units), events=(Event("fog", START + 3600.0, 7200.0, 20.0),))


CASES = {
    "a stopped fan beside a twin": plan(twinned=True, faults=(Fault("fan-stopped", START + 14_000.0),)),
    "a stopped fan alone": plan(twinned=False, faults=(Fault("fan-stopped", START + 14_000.0),)),
    "frozen output": plan(twinned=False, faults=(Fault("output-frozen", START + 9000.0, 3600.0),)),
    "sleep and wake": plan(twinned=False, duty=Duty(3600.0, 3000.0)),
}


@pytest.mark.parametrize("name", CASES)
def test_both_ways_open_the_same_findings_at_the_same_time(name: str) -> None:
    short = driving.through_health(CASES[name])
    whole = driving.through_pipeline(CASES[name])

    assert [(f.sensor, f.code) for f in short] == [(f.sensor, f.code) for f in whole if f.sensor]
    for a, b in zip(short, whole, strict=True):
        # on a line frames come some milliseconds late: a block of a check may begin with the next one
        assert a.at == pytest.approx(b.at, abs=30.0)
        assert a.since == pytest.approx(b.since, abs=7.0)


def test_a_sick_sensor_is_found_by_the_short_way() -> None:
    found = driving.through_health(CASES["a stopped fan beside a twin"])

    assert [(f.sensor, f.code) for f in found if f.code == "fan-stopped"] == [("own", "fan-stopped")]
