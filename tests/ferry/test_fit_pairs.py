"""Reading of both records and their alignment: what is used, what is left out, what is refused and in which words."""

import csv
import json
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from collocation import START, Collocation, collocation, reading, shifted, write_device, write_reference
from moteferry.fit.device import KNOWN, DeviceRecord, read_device
from moteferry.fit.pairs import align
from moteferry.fit.record import RecordError
from moteferry.fit.reference import ReferenceRecord, read_reference

BESIDE = collocation(days=5)


def readings(path: Path, *changed: dict[str, object], first: int = 0) -> Path:
    """A file of readings, one for each set of changes."""
    lines = [json.dumps(reading(BESIDE.device, first + i, **change)) for i, change in enumerate(changed)]
    path.write_text("\n".join(lines) + "\n")
    return path


class TestDevice:
    def test_both_forms_of_a_record_are_read_alike(self, tmp_path: Path) -> None:
        lines = write_device(tmp_path / "readings.ndjson", BESIDE.device)
        table = tmp_path / "readings.csv"
        with table.open("w", newline="") as file:
            writer = csv.DictWriter(file, KNOWN)
            writer.writeheader()
            for text in lines.read_text().splitlines():
                document = json.loads(text)
                row = {key: document[key] for key in ("site", "gateway", "sensor", "seq", "start", "seconds", "clock")}
                row |= {"flag": 2, "reasons": "uncalibrated", "pm2_5_raw": document["pm2_5"]["raw"]}
                row |= document["climate"] | {"frames_good": 60, "frames_bad": 0, "frames_missing": 0}
                writer.writerow(row)

        by_line, by_row = read_device(lines), read_device(table)

        assert by_line.raw == pytest.approx(BESIDE.device.raw, abs=0.006)
        for name in ("start", "seconds", "measured_s", "raw", "rh", "t"):
            assert getattr(by_line, name).tolist() == getattr(by_row, name).tolist()
        assert (by_row.site, by_row.gateway, by_row.sensor) == ("quarry", "east-gate", "north")

    def test_what_failed_or_was_censored_or_has_no_sure_time_is_left_out_and_counted(self, tmp_path: Path) -> None:
        path = readings(
            tmp_path / "r.ndjson",
            {},
            {"flag": 4, "reasons": ["fan-stopped"]},
            {"flag": 9, "reasons": ["no-frames"], "pm2_5": None},
            {"flag": 3, "reasons": ["counts-saturated"]},
            {"flag": 3, "reasons": ["mass-clipped"]},
            {"clock": "unsynced"},
            {"pm2_5": {"raw": None, "value": None, "u": None}},
            {"flag": 3, "reasons": ["calibration-expired"]},
        )

        record = read_device(path)

        assert len(record.start) == 2
        assert record.left_out == {
            "failed or missing": 2,
            "saturated": 2,
            "without a sure time": 1,
            "without a raw figure": 1,
        }

    def test_a_reading_that_came_twice_counts_once(self, tmp_path: Path) -> None:
        path = readings(tmp_path / "r.ndjson", {}, {}, {})
        path.write_text(path.read_text() * 2)

        assert len(read_device(path).start) == 3

    def test_a_short_reading_counts_as_much_as_was_measured_of_it(self, tmp_path: Path) -> None:
        path = readings(tmp_path / "r.ndjson", {"frames": {"good": 30, "bad": 10, "missing": 20}})

        assert read_device(path).measured_s.tolist() == [150.0]

    def test_one_sensor_of_several_is_picked_by_name(self, tmp_path: Path) -> None:
        path = readings(tmp_path / "r.ndjson", {}, {"sensor": "south"})

        assert read_device(path, sensor="south").sensor == "south"
        with pytest.raises(RecordError, match="pick one with --sensor"):
            read_device(path)
        with pytest.raises(RecordError, match=r"no reading of sensor 'west'; there are north, south"):
            read_device(path, sensor="west")

    @pytest.mark.parametrize(
        ("changed", "said"),
        [
            ({"start": "2026-12-01T00:00:00"}, r"r\.ndjson, line 2: '2026-12-01T00:00:00' has no time zone"),
            ({"start": "2026-12-01T01:05:00+01:00"}, "is not in UTC"),
            ({"start": "yesterday"}, "'yesterday' is no time"),
            ({"pm2_5": {"raw": -1.0, "value": None, "u": None}}, r"line 2: a raw figure is negative \(-1\)"),
            ({"flag": "good"}, r"line 2: is no reading \(flag: "),
            ({"gateway": "west-gate"}, "mixes gateways"),
        ],
    )
    def test_wrong_input_gets_one_clear_line(self, tmp_path: Path, changed: dict[str, object], said: str) -> None:
        path = readings(tmp_path / "r.ndjson", {}, changed)

        with pytest.raises(RecordError, match=said) as caught:
            read_device(path)
        assert "\n" not in str(caught.value)

    @pytest.mark.parametrize(
        ("text", "said"),
        [
            ("", "is empty"),
            ("\n", "is empty"),
            ("site,gateway,sensor,start,seconds,flag,pm2_5_row\n", "did you mean 'pm2_5_raw'"),
            ("site,gateway,sensor,start,seconds,flag\n", "column 'pm2_5_raw' is missing"),
            ("site,gateway,sensor,start,seconds,flag,pm2_5_raw\n", "has no readings"),
            ("site,gateway,sensor,start,seconds,flag,pm2_5_raw\na,b,c\n", "line 2: has more or fewer cells"),
            ("site,gateway,sensor,start,seconds,flag,pm2_5_raw\na,b,c,2026-12-01T00:00:00Z,60,1,x\n", "is no number"),
            ('{"schema":"motekeep/health/1"}\n', "line 1: is no reading"),
            ("\x00\x01\x02\n", "unknown column"),
        ],
    )
    def test_wrong_files_get_one_clear_line(self, tmp_path: Path, text: str, said: str) -> None:
        path = tmp_path / "device"
        path.write_text(text)

        with pytest.raises(RecordError, match=said) as caught:
            read_device(path)
        assert "\n" not in str(caught.value)

    def test_a_binary_file_gets_one_clear_line(self, tmp_path: Path) -> None:
        path = tmp_path / "device"
        path.write_bytes(bytes(range(128, 256)) * 10)

        with pytest.raises(RecordError, match="is not text in UTF-8"):
            read_device(path)


class TestReference:
    def test_a_record_is_read_with_its_uncertainty_in_two_parts(self, tmp_path: Path) -> None:
        path = tmp_path / "reference.csv"
        path.write_text(
            "start,seconds,pm2_5,u\n2026-12-01T00:00:00Z,3600,5.5,2.0\n2026-12-01T01:00:00Z,3600,,2.0\n"
            "2026-12-01T02:00:00Z,3600,-0.5,2.0\n"
        )

        record = read_reference(path, random=0.36)

        assert record.value.tolist() == [5.5, -0.5]
        assert record.u_random == pytest.approx([1.2, 1.2])
        assert record.u_common == pytest.approx([1.6, 1.6])
        assert (record.stated, record.negative) == (True, 1)

    @pytest.mark.parametrize(
        ("rows", "said"),
        [
            ("", r"has no figures"),
            ("2026-12-01T00:00:00Z,3600,-5,0.5", r"line 2: a figure is negative \(-5\), further below zero than 3 u"),
            ("2026-12-01T00:00:00,3600,5,1", "line 2: '2026-12-01T00:00:00' has no time zone"),
            ("2026-12-01T00:00:00Z,3600,5,1\n2026-12-01T03:00:00+02:00,3600,5,1", "line 3: .* is not in UTC"),
            ("2026-12-01T01:00:00Z,3600,5,1\n2026-12-01T00:00:00Z,3600,5,1", "line 3: starts before the line above"),
            ("2026-12-01T00:00:00Z,3600,5,1\n2026-12-01T00:00:00Z,3600,6,1", "line 3: has the start of the line"),
            ("2026-12-01T00:00:00Z,3600,5,1\n2026-12-01T00:30:00Z,3600,6,1", "line 3: starts before .* has ended"),
            ("2026-12-01T00:00:00Z,0,5,1", "line 2: lasts 0 s"),
            ("2026-12-01T00:00:00Z,3600,nan,1", "is not finite"),
            ("2026-12-01T00:00:00Z,3600,5,0", "line 2: u is 0"),
            ("2026-12-01T00:00:00Z,3600,5,1\n2026-12-01T01:00:00Z,3600,5,", "line 3: states no u"),
            ("2026-12-01T00:00:00Z,3600", "has more or fewer cells"),
        ],
    )
    def test_wrong_rows_get_one_clear_line(self, tmp_path: Path, rows: str, said: str) -> None:
        path = tmp_path / "reference.csv"
        path.write_text(f"start,seconds,pm2_5,u\n{rows}\n")

        with pytest.raises(RecordError, match=said) as caught:
            read_reference(path)
        assert "\n" not in str(caught.value)

    @pytest.mark.parametrize(
        ("head", "said"),
        [
            ("start,seconds,pm25", "unknown column 'pm25'; did you mean 'pm2_5'"),
            ("start,pm2_5", "column 'seconds' is missing"),
            ("start,seconds,pm2_5,u,u", "a column stands there twice"),
        ],
    )
    def test_wrong_columns_get_one_clear_line(self, tmp_path: Path, head: str, said: str) -> None:
        path = tmp_path / "reference.csv"
        path.write_text(f"{head}\n")

        with pytest.raises(RecordError, match=said):
            read_reference(path)

    def test_a_negative_figure_without_an_uncertainty_that_explains_it_is_refused(self, tmp_path: Path) -> None:
        path = tmp_path / "reference.csv"
        path.write_text("start,seconds,pm2_5\n2026-12-01T00:00:00Z,3600,-0.1\n")

        with pytest.raises(RecordError, match="no u says that this is noise"):
            read_reference(path)

    def test_what_was_written_is_read(self, tmp_path: Path) -> None:
        record = read_reference(write_reference(tmp_path / "reference.csv", BESIDE.reference))

        assert record.start.tolist() == BESIDE.reference.start.tolist()
        assert record.value == pytest.approx(BESIDE.reference.value, abs=0.001)
        assert record.u_random == pytest.approx(BESIDE.reference.u_random, rel=1e-3)


class TestAlignment:
    def test_each_hour_holds_its_own_readings(self) -> None:
        pairs = align(BESIDE.device, BESIDE.reference)

        assert len(pairs) == 120
        assert pairs.start.tolist() == BESIDE.reference.start.tolist()
        assert pairs.raw_mean == pytest.approx(BESIDE.device.raw.reshape(-1, 12).mean(axis=1))
        assert pairs.rh_mean == pytest.approx(BESIDE.device.rh.reshape(-1, 12).mean(axis=1))
        assert pairs.humid
        assert pairs.warm

    @pytest.mark.parametrize(("kept", "hours"), [(9, 120), (8, 119)])
    def test_an_hour_needs_three_quarters_of_its_readings(self, kept: int, hours: int) -> None:
        gone = np.arange(len(BESIDE.device.start))
        pairs = align(only(BESIDE.device, (gone < 240 + kept) | (gone >= 252)), BESIDE.reference)

        assert len(pairs) == hours
        assert pairs.left_out == ({} if hours == 120 else {"incomplete at the sensor": 1})

    def test_what_a_sensor_slept_by_duty_is_not_due(self) -> None:
        awake = np.arange(len(BESIDE.device.start)) % 4 == 0
        slept = BESIDE.device.start[~awake]
        duty = replace(only(BESIDE.device, awake), asleep=np.stack([slept, np.full(len(slept), 300.0)], axis=1))

        assert len(align(duty, BESIDE.reference)) == 120
        with pytest.raises(RecordError, match="share 0 complete hours"):
            align(only(BESIDE.device, awake), BESIDE.reference)

    def test_minutes_of_the_reference_are_pooled_to_hours(self) -> None:
        quarter = np.repeat(BESIDE.reference.value, 4) + np.tile([-3.0, -1.0, 1.0, 3.0], 120)
        n = len(quarter)
        fine = replace(
            BESIDE.reference,
            start=START + 900.0 * np.arange(n),
            seconds=np.full(n, 900.0),
            value=quarter,
            u_random=np.full(n, 2.0),
            u_common=np.full(n, 1.0),
        )

        pairs = align(BESIDE.device, fine)

        assert pairs.reference == pytest.approx(BESIDE.reference.value)
        assert pairs.u_random == pytest.approx(np.full(120, 1.0))  # four draws: half
        assert pairs.u_common == pytest.approx(np.full(120, 1.0))  # the same all along: as it is

    def test_filters_of_a_day_are_paired_by_the_day(self) -> None:
        beside = collocation(days=45)
        days = beside.reference.value.reshape(-1, 24).mean(axis=1)
        part = np.full(45, 0.2)
        filters = replace(
            beside.reference,
            start=beside.reference.start[::24],
            seconds=np.full(45, 86_400.0),
            value=days,
            u_random=part,
            u_common=part,
        )

        pairs = align(beside.device, filters)

        assert len(pairs) == 45
        assert pairs.hours == 45 * 24
        assert pairs.raw_mean == pytest.approx(beside.device.raw.reshape(45, -1).mean(axis=1))

    def test_fog_is_left_out_of_the_fit(self) -> None:
        rh = BESIDE.device.rh.copy()
        rh[:120] = 97.0

        pairs = align(replace(BESIDE.device, rh=rh), BESIDE.reference)

        assert len(pairs) == 110
        assert pairs.left_out == {"more humid than 85 %": 10}

    def test_a_record_without_climate_is_paired_without_it(self) -> None:
        nothing = np.full(len(BESIDE.device.rh), np.nan)

        pairs = align(replace(BESIDE.device, rh=nothing, t=nothing), BESIDE.reference)

        assert len(pairs) == 120
        assert not pairs.humid
        assert not pairs.warm

    def test_a_short_gap_of_the_climate_takes_that_of_its_hour_and_a_long_one_costs_the_hour(self) -> None:
        rh = BESIDE.device.rh.copy()
        rh[0:3] = np.nan
        rh[12:20] = np.nan

        pairs = align(replace(BESIDE.device, rh=rh), BESIDE.reference)

        assert len(pairs) == 119
        assert pairs.left_out == {"without a climate": 1}
        assert pairs.rh_mean[0] == pytest.approx(rh[3:12].mean())

    @pytest.mark.parametrize(
        ("broken", "said"),
        [
            (
                lambda b: (b.device, shifted(b.reference, 24 * 400)),
                "do not overlap: the sensor has 2026-12-01T00:00:00Z",
            ),
            (lambda b: (b.device, shifted(b.reference, 24 * 4)), r"share 24 complete hours .*at least 40"),
            (
                lambda b: (replace(b.device, raw=np.full(len(b.device.raw), 7.0)), b.reference),
                "the sensor: says 7 ug/m3 in all 120 hours",
            ),
            (
                lambda b: (b.device, replace(b.reference, value=np.full(120, 9.0))),
                "the reference: says 9 ug/m3 in all 120 hours",
            ),
            (
                lambda b: (only(b.device, np.arange(len(b.device.raw)) % 2 == 0), b.reference),
                r"share 0 complete hours \(120 incomplete at the sensor\)",
            ),
        ],
    )
    def test_records_that_cannot_be_fitted_get_one_clear_line(
        self, broken: Callable[[Collocation], tuple[DeviceRecord, ReferenceRecord]], said: str
    ) -> None:
        with pytest.raises(RecordError, match=said) as caught:
            align(*broken(BESIDE))
        assert "\n" not in str(caught.value)


def only(device: DeviceRecord, rows: NDArray[np.bool_]) -> DeviceRecord:
    """The record with these readings alone."""
    names = ("start", "seconds", "measured_s", "raw", "rh", "t")
    return replace(device, **{name: getattr(device, name)[rows] for name in names})
