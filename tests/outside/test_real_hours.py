"""A year of real hourly PM, faults included, through the hourly pipeline.

Data: soiling_hsu_example_inputs.csv in the package pvlib (BSD-3-Clause), hourly PM2.5 and PM10 of 2015 from US EPA
monitors in Imperial County, California (Coello and Boyle 2019, doi 10.1109/JPHOTOV.2019.2919628). It is read from the
installed files; pvlib itself is not imported.
"""

import csv
from collections.abc import Iterator
from datetime import UTC, datetime
from importlib.metadata import files
from itertools import groupby

import pytest

from motekeep.measure.air_quality import PM2_5_2024, air_quality_index
from motekeep.measure.hourly import HOUR_S, Hour, Hourly, Sample
from motekeep.measure.reading import FAIL, NOT_EVALUATED, Value

NAME = "soiling_hsu_example_inputs.csv"


@pytest.fixture(scope="module")
def year() -> list[tuple[float, float, float]]:
    """(start, PM2.5, PM10) in Unix seconds and ug/m3; the times are taken as they stand."""
    (path,) = [f for f in files("pvlib") or [] if f.name == NAME]
    rows = []
    with open(str(path.locate()), encoding="utf-8", newline="") as file:  # noqa: PTH123 (a located path is a text)
        for row in csv.DictReader(file):
            start = datetime.fromisoformat(row["TimeStamp"]).replace(tzinfo=UTC).timestamp()
            rows.append((start, float(row["PM2_5"]) * 1e6, float(row["PM10"]) * 1e6))
    return rows


@pytest.fixture(scope="module")
def hours(year: list[tuple[float, float, float]]) -> list[Hour]:
    return list(_through(Hourly(), year))


def _sample(row: tuple[float, float, float]) -> Sample:
    start, pm2_5, pm10 = row
    figures = {"pm2_5": Value(pm2_5, pm2_5, None), "pm10": Value(pm10, pm10, None)}
    return Sample(start, HOUR_S, HOUR_S, 0.0, NOT_EVALUATED, ("uncalibrated",), figures)


def _through(hourly: Hourly, rows: list[tuple[float, float, float]]) -> Iterator[Hour]:
    for row in rows:
        assert hourly.add(_sample(row))
        (hour,) = hourly.due(row[0] + HOUR_S)
        yield hour


def test_every_hour_of_the_year_comes_out_once_and_unchanged(
    year: list[tuple[float, float, float]], hours: list[Hour]
) -> None:
    assert len(hours) == 8760
    assert [h.start for h in hours] == [row[0] for row in year]
    assert [h.figures["pm2_5"].mean for h in hours] == pytest.approx([row[1] for row in year])
    assert {h.flag for h in hours} == {NOT_EVALUATED}
    means = [h.figures["pm2_5"].mean or 0.0 for h in hours], [h.figures["pm10"].mean or 0.0 for h in hours]
    # computed from the file: 13.2884 and 44.4138 ug/m3
    assert [sum(m) / len(m) for m in means] == pytest.approx([13.2884, 44.4138], abs=1e-4)


def test_nowcast_of_a_real_hour(hours: list[Hour]) -> None:
    """2015-01-01 11:00, computed from the file: 90.451526, cut to 90.4, index 175 by the table of 2024."""
    eleven = hours[11]
    assert eleven.start == datetime(2015, 1, 1, 11, tzinfo=UTC).timestamp()
    assert eleven.figures["pm2_5"].nowcast == 90.4
    aqi = eleven.figures["pm2_5"].aqi
    assert aqi is not None
    assert (aqi.index, aqi.category) == (175, "unhealthy")


def test_the_first_hours_wait_for_enough_of_a_past(hours: list[Hour]) -> None:
    assert hours[0].figures["pm2_5"].nowcast is None
    assert hours[1].figures["pm2_5"].nowcast is not None
    assert hours[16].figures["pm2_5"].mean_24h is None
    assert hours[17].figures["pm2_5"].mean_24h is not None


def test_days_of_the_year(hours: list[Hour]) -> None:
    """Computed from the file: 7 days over 35.4 ug/m3, the worst of them New Year with 100.29; PM10 at most 243.5."""
    fine = [hours[24 * d + 23].figures["pm2_5"].mean_24h or 0.0 for d in range(365)]
    coarse = [hours[24 * d + 23].figures["pm10"].mean_24h or 0.0 for d in range(365)]
    assert sum(d > 35.4 for d in fine) == 7
    assert max(fine) == pytest.approx(100.29, abs=0.01)
    assert fine.index(max(fine)) == 0
    assert max(coarse) == pytest.approx(243.5, abs=0.1)


def test_faults_of_the_record_are_the_ones_that_are_known_of_it(year: list[tuple[float, float, float]]) -> None:
    """Computed from the file: PM2.5 above PM10 in 862 hours, and three stretches of identical PM2.5 over 6 hours."""
    assert sum(pm2_5 > pm10 for _, pm2_5, pm10 in year) == 862
    runs = [len(list(run)) for _, run in groupby(year, key=lambda row: row[1])]
    assert sorted(r for r in runs if r >= 7) == [37, 37, 231]


def test_a_frozen_stretch_that_is_found_late_takes_its_hours_back(year: list[tuple[float, float, float]]) -> None:
    """From 2015-12-22 09:00 the record repeats 21 ug/m3. A finding on the next day amends what was given out."""
    frozen = datetime(2015, 12, 22, 9, tzinfo=UTC).timestamp()
    found = frozen + 24 * HOUR_S
    hourly = Hourly()
    before = list(_through(hourly, [row for row in year if frozen - 30 * HOUR_S <= row[0] < found]))
    assert before[-1].figures["pm2_5"].nowcast == 21.0
    assert hourly.amend(frozen, found, FAIL, ["output-frozen"]) == 24
    after = {h.start: h for h in hourly.due(found)}
    assert set(after) == {h.start for h in before if h.start >= frozen}
    assert all(h.figures["pm2_5"].mean is None for h in after.values())
    assert after[frozen + HOUR_S].figures["pm2_5"].nowcast is None  # one of the newest three hours is left
    assert all("output-frozen" in h.reasons for h in after.values())
    assert after[found - HOUR_S].figures["pm2_5"].hours_24h == 0


def test_the_year_goes_on_after_a_restart_in_the_middle_of_it(
    year: list[tuple[float, float, float]], hours: list[Hour]
) -> None:
    middle = 4000
    first = Hourly()
    list(_through(first, year[middle - 60 : middle]))
    again = list(_through(Hourly.restored(first.state()), year[middle : middle + 48]))
    assert again == hours[middle : middle + 48]


def test_no_index_of_the_year_lies_outside_of_its_table(hours: list[Hour]) -> None:
    for hour in hours:
        for name in ("pm2_5", "pm10"):
            figure = hour.figures[name]
            if figure.aqi is not None and figure.nowcast is not None:
                assert figure.aqi.index >= 0
                assert (figure.aqi.category == "hazardous") == (figure.aqi.index > 300)
    assert air_quality_index(448.0, PM2_5_2024).index > 500  # the highest hour of the year, by itself
