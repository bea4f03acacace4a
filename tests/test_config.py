"""A fault of the configuration is one line that names file, key and mend."""

from pathlib import Path

import pytest

from motekeep.config import Config, load, parse
from motekeep.errors import ConfigError

EXAMPLE = Path(__file__).parent.parent / "config.example.toml"

GOOD = """
site = "quarry"
gateway = "east-gate"
[[sensor]]
name = "north"
port = "/dev/ttyUSB0"
dialect = "bm"
[broker]
host = "broker.example"
"""


def fault(text: str) -> str:
    with pytest.raises(ConfigError) as caught:
        parse(text, "config.toml")
    line = str(caught.value)
    assert "\n" not in line
    assert line.startswith("config.toml")
    return line


def test_the_example_is_valid_and_states_the_defaults() -> None:
    example = load(EXAMPLE)
    least = parse(GOOD, "least")
    assert example.store == least.store
    assert example.calibration == least.calibration
    assert example.health == least.health
    assert example.interval == least.interval
    same = {"port", "root", "receipt", "window", "late_rate"}
    assert example.broker.model_dump(include=same) == least.broker.model_dump(include=same)
    assert example.sensor[0].limits == least.sensor[0].limits


@pytest.mark.parametrize(
    ("change", "said"),
    [
        (("host =", "hots ="), "broker.hots: unknown key; did you mean 'host'?"),
        (('dialect = "bm"', 'dialct = "bm"'), "sensor[north].dialct: unknown key; did you mean 'dialect'?"),
        (('dialect = "bm"', ""), "sensor[north].dialect: missing"),
        (('"bm"', '"bn"'), "no dialect 'bn'; known are bm, bm-climate, aa, stuffed"),
        (('gateway = "east-gate"', 'gateway = "east/gate"'), "gateway:"),
        (('gateway = "east-gate"', 'gateway = "east-gate"\ninterval = 7'), "interval:"),
        (('gateway = "east-gate"', 'gateway = "east-gate"\ninterval = 70'), "does not divide an hour"),
        (('dialect = "bm"', 'dialect = "bm"\ntwin = "south"'), "twin 'south' of 'north' is not another sensor"),
        (('dialect = "bm"', 'dialect = "aa"\nclimate = { from = "frame" }'), "dialect 'aa' carries none"),
        (('dialect = "bm"', 'dialect = "bm"\nclimate = { from = "fixed", rh = 120 }'), "sensor[north].climate.rh"),
        (('dialect = "bm"', 'dialect = "bm"\nclimate = { from = "moon" }'), "sensor[north].climate"),
        (('dialect = "bm"', 'dialect = "bm"\nduty = { every = 60, awake = 90 }'), "awake must be shorter"),
        (('host = "broker.example"', 'host = "b"\nport = 99999'), "broker.port"),
        (('host = "broker.example"', 'host = "broker.example:1883"'), "the port has a key of its own"),
        (('host = "broker.example"', 'host = "mqtt://broker.example"'), "the port has a key of its own"),
        (('host = "broker.example"', 'host = "broker..example"'), "broker.host"),
        (('host = "broker.example"', 'host = "my broker"'), "broker.host"),
        (('host = "broker.example"', 'host = "b"\npassword_file = "/x"'), "password_file needs a username"),
        (('host = "broker.example"', 'host = "b"\ntls = { cert = "/x" }'), "cert and key go together"),
        (("[broker]", "[broker"), "not valid TOML"),
        (('name = "north"', 'name = "north"\nperiod = "1s"'), "sensor[north].period"),
    ],
)
def test_each_fault_names_key_and_mend(change: tuple[str, str], said: str) -> None:
    assert change[0] in GOOD
    assert said in fault(GOOD.replace(*change, 1))


def test_a_sensor_name_twice_is_refused() -> None:
    twice = GOOD.replace("[broker]", '[[sensor]]\nname = "north"\nport = "/dev/ttyUSB1"\ndialect = "aa"\n[broker]')
    assert "sensor 'north' stands twice" in fault(twice)


def test_a_missing_file_says_what_to_copy(tmp_path: Path) -> None:
    with pytest.raises(ConfigError, match=r"config.example.toml"):
        load(tmp_path / "absent.toml")


def test_a_file_that_is_not_text_is_one_line(tmp_path: Path) -> None:
    path = tmp_path / "config.toml"
    path.write_bytes(b"\xff\xfe\x00")
    with pytest.raises(ConfigError, match="UTF-8"):
        load(path)


def test_every_key_of_the_models_stands_in_the_example() -> None:
    text = EXAMPLE.read_text()
    sections = [f.annotation for f in Config.model_fields.values() if hasattr(f.annotation, "model_fields")]
    for model in (Config, *sections):
        for key, field in model.model_fields.items():  # type: ignore[union-attr]
            assert (field.alias or key) in text, f"{key} is not in config.example.toml"
