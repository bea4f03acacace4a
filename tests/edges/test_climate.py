"""Climate comes from sysfs in the kernel's own units, and an absurd one never comes at all."""

from pathlib import Path

import pytest

from motekeep.edges.climate import SysfsClimate
from motekeep.errors import ClimateError
from motekeep.measure.climate import from_message, plausible


def folder(path: Path, **files: str) -> SysfsClimate:
    for name, text in files.items():
        (path / name).write_text(text + "\n")
    return SysfsClimate(path)


def test_iio_processed_values_are_thousandths(tmp_path: Path) -> None:
    climate = folder(tmp_path, in_humidityrelative_input="71200", in_temp_input="-4400").read()
    assert (climate.rh_pct, climate.temperature_c) == (71.2, -4.4)


def test_iio_raw_values_take_offset_and_scale(tmp_path: Path) -> None:
    source = folder(
        tmp_path, in_humidityrelative_raw="1000", in_humidityrelative_scale="50", in_temp_raw="300",
        in_temp_offset="-100", in_temp_scale="100",
    )  # fmt: skip
    climate = source.read()
    assert (climate.rh_pct, climate.temperature_c) == (50.0, 20.0)


def test_hwmon_folder_works_and_temperature_may_be_absent(tmp_path: Path) -> None:
    climate = folder(tmp_path, humidity1_input="55000").read()
    assert (climate.rh_pct, climate.temperature_c) == (55.0, None)


@pytest.mark.parametrize("text", ["999000", "-1", "nan", "rubbish"])
def test_an_absurd_humidity_is_refused_by_name(tmp_path: Path, text: str) -> None:
    with pytest.raises(ClimateError, match="reading climate from"):
        folder(tmp_path, humidity1_input=text).read()


def test_a_folder_without_humidity_says_what_to_name(tmp_path: Path) -> None:
    with pytest.raises(ClimateError, match="IIO or hwmon"):
        SysfsClimate(tmp_path / "absent").read()


def test_fog_is_held_at_a_hundred_percent() -> None:
    assert plausible(103.0, None, "x").rh_pct == 100.0


def test_messages_carry_rh_and_perhaps_t() -> None:
    climate = from_message(b'{"rh": 40, "t": 3.5, "more": 1}', "mqtt")
    assert (climate.rh_pct, climate.temperature_c) == (40.0, 3.5)
    assert from_message(b'{"rh": 40}', "mqtt").temperature_c is None


@pytest.mark.parametrize(
    "payload",
    [b"", b"[]", b"{}", b'{"rh": "wet"}', b'{"rh": true}', b'{"rh": 300}', b'{"rh": 40, "t": 900}', b"x" * 2000,
                b'{"rh": 40, "t": "warm"}', b"\xff\xfe", b"[" * 1024],
)  # fmt: skip
def test_bad_messages_are_one_value_error(payload: bytes) -> None:
    with pytest.raises(ValueError):  # noqa: PT011 (json's and ours alike)
        from_message(payload, "mqtt")
