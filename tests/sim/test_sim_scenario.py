"""Scenario files: what is shipped, what is read, what is refused."""

from pathlib import Path

import pytest

from motekeep.errors import ConfigError
from motesim import scenario
from motesim.control import understand
from motesim.site import Site

GOOD = """
site = "here"
start = 2026-12-01T00:00:00Z
duration = "1d6h"
[air]
aerosol = "marine"
kappa = 0.5
[[event]]
kind = "fog"
at = "3h"
[[sensor]]
name = "north"
dialect = "bm"
length = 20
duty = { every = "10m", awake = 90 }
[sensor.unit]
averaging = 7
[[sensor.fault]]
kind = "fan-weak"
at = "6h"
ramp = "1h"
"""


def test_shipped_scenarios_load_and_run() -> None:
    found = scenario.shipped()
    assert len(found) >= 5
    for name, plan in found.items():
        assert plan.about, name
        block = next(iter(Site(plan).observed(plan.sensors[-1].name)))
        assert len(block.printed.times) > 100, name


def test_a_scenario_says_what_it_says() -> None:
    plan = scenario.parse(GOOD, "good.toml")
    assert plan.seconds == 30 * 3600.0
    assert plan.air.aerosol == "marine"
    assert plan.events[0].at == plan.start + 3 * 3600.0
    (sensor,) = plan.sensors
    assert sensor.duty is not None
    assert sensor.duty.awake_s == 90.0
    assert sensor.unit == {"averaging": 7.0}
    assert sensor.faults[0].strength == 0.3
    assert sensor.faults[0].ramp_s == 3600.0


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ('site = "here"', 'site = "here"\nsede = 3', "`sede` is not a key of a scenario; did you mean `seed`?"),
        ("ramp =", "rampe =", "`sensor[0].fault[0].rampe` is not a key"),
        (
            '"fan-weak"',
            '"fan-week"',
            "`sensor[0].fault[0].kind` is 'fan-week', which is not known; did you mean 'fan-weak'?",
        ),
        ("averaging = 7", "avering = 7", "did you mean `averaging`?"),
        ("averaging = 7", "averaging = nan", "`sensor[0].unit.averaging` is nan, not a finite number"),
        ('"1d6h"', '"1 day"', "`duration` is '1 day', not a duration"),
        ("length = 20", "length = 21", "`sensor[0].length` cannot be"),
        ('dialect = "bm"', 'dialect = "mb"', "known: bm, bm-climate"),
        ("kappa = 0.5", "kappa = 7", "`air.kappa` is 7, outside 0 to 1.5"),
        ("2026-12-01T00:00:00Z", '"2026-12-01"', "not a time with its zone"),
        ("2026-12-01T00:00:00Z", "2026-12-01T00:00:30Z", "not on a full minute"),
        ('name = "north"', 'name = "No/rth"', "`sensor[0].name`"),
        ('[[event]]\nkind = "fog"', "[[event]]\nstrength = 3", "`event[0].kind` is missing"),
        ("[[event]]", "[event]", "`event` is not a list of tables"),
        ("[air]", "[air", "mend the TOML"),
    ],
)
def test_what_cannot_be_is_refused_in_one_line_that_names_key_and_mend(old: str, new: str, said: str) -> None:
    assert old in GOOD
    with pytest.raises(ConfigError) as refused:
        scenario.parse(GOOD.replace(old, new), "bad.toml")
    line = str(refused.value)
    assert said in line
    assert "bad.toml" in line
    assert "\n" not in line


def test_a_missing_file_is_a_named_error() -> None:
    with pytest.raises(ConfigError, match="nowhere"):
        scenario.find("/nowhere/at/all.toml")


def test_events_at_random_follow_the_seed_and_the_rate() -> None:
    often = GOOD.replace("kappa = 0.5", "kappa = 0.5\n[air.often]\nplume = 600").replace('"1d6h"', '"60d"')
    one, again = scenario.parse(often, "a"), scenario.parse(often, "a")
    other = scenario.parse("seed = 2\n" + often, "a")
    assert one.events == again.events != other.events
    assert 1060 < len(one.events) < 1340  # Poisson, mean 1200, 4 standard deviations


def test_orders_are_understood() -> None:
    order = understand("fault north fan-weak 0.4 60", ("north",))
    assert order is not None
    assert (order.kind, order.strength, order.ramp_s) == ("fan-weak", 0.4, 60.0)
    assert understand("   ", ("north",)) is None


@pytest.mark.parametrize(
    "line", ["jump", "fault north", "fault east fan-weak", "fault north fan-week", "fault north fan-weak much",
             "fault north fan-weak 2", "fault north fan-weak nan", "unplug", "quit now"]
)  # fmt: skip
def test_orders_that_cannot_be_are_refused_with_a_sentence(line: str) -> None:
    with pytest.raises(ValueError, match=r"\w+ \w+"):
        understand(line, ("north",))


def test_the_scenario_path_wins_over_nothing_and_names_are_shipped_ones(tmp_path: Path) -> None:
    path = tmp_path / "mine.toml"
    path.write_text(GOOD)
    assert scenario.find(str(path)).name == "here"
    assert scenario.find("quarry-gate").name == "quarry"
