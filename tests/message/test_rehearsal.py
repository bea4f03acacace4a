"""Rehearsal: stored readings and a document make the readings that the document would have made, and say how far apart
they are from the raw ones."""

import re
from dataclasses import replace
from math import inf
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from intervals import interval
from motekeep.measure import steps
from motekeep.measure.correction import compile_document
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.document_text import parse
from motekeep.measure.interval import Climate
from motekeep.measure.reading import Correction, make_reading, uncorrected
from motekeep.message.compose import Place, reading_document
from motekeep.message.documents import ReadingDocument
from motekeep.message.rehearsal import FLOOR_UG_M3, of_correction, rehearse, relative_move, shift

TEXT = """
issue = 3
site = "quarry"
gateway = "gate"
sensor = "north"
made_at = 2026-11-20T10:00:00Z
valid_from = 2026-11-20T12:00:00Z
valid_until = 2027-11-20T00:00:00Z
[range]
pm2_5 = [0.0, 500.0]
rh = [0.0, 100.0]
{steps}
[residual]
pm2_5 = {{ u = 0.5 }}
"""
LINEAR = """
[[step]]
kind = "linear"
slope = {{ value = {slope}, u = 0.02 }}
offset = {{ value = {offset}, u = 0.1 }}
"""
GROWTH = """
[[step]]
kind = "humidity-growth"
kappa = { value = 0.33, u = 0.05 }
"""
AIR = Climate(60.0, 11.0, "fixed")


def linear(slope: float, offset: float = 0.0) -> CalibrationDocument:
    return parse(TEXT.format(steps=LINEAR.format(slope=slope, offset=offset)).encode())


BOTH = parse(TEXT.format(steps=GROWTH + LINEAR.format(slope=0.5, offset=1.0)).encode())


def stored(
    mass: float = 12.0,
    *,
    correction: Correction = uncorrected,
    findings: dict[str, int] | None = None,
    climate: Climate | None = AIR,
    seq: int = 1,
    at: float = 1_803_859_200.0,
) -> ReadingDocument:
    made = interval((6.0, mass, mass + 2.0), climate=climate, at=at)
    return reading_document(make_reading(made, correction, findings or {}), Place("quarry", "gate"), seq)


def test_a_rehearsed_reading_is_the_one_that_the_document_would_have_made() -> None:
    made = stored(correction=compile_document(BOTH))
    [again] = rehearse(BOTH, [stored()])
    assert again.pm2_5 is not None
    assert made.pm2_5 is not None
    assert again.pm2_5.value == pytest.approx(made.pm2_5.value, abs=0.011)
    assert again.pm2_5.u == pytest.approx(made.pm2_5.u, rel=0.05)
    assert (again.flag, again.reasons, again.calibration) == (made.flag, made.reasons, made.calibration)
    assert (again.pm10, again.seq, again.start) == (made.pm10, made.seq, made.start)


@settings(max_examples=60, deadline=None)
@given(st.floats(0.0, 900.0), st.floats(5.0, 99.0), st.booleans())
def test_it_does_not_matter_what_a_reading_was_corrected_with(mass: float, rh: float, again: bool) -> None:
    air = Climate(rh, 11.0, "fixed")
    first = stored(mass, climate=air, correction=compile_document(linear(1.4)) if again else uncorrected)
    plain = stored(mass, climate=air)
    assert list(rehearse(BOTH, [first])) == list(rehearse(BOTH, [plain]))


@pytest.mark.parametrize("code", ["fan-stopped", "mass-clipped"])
def test_what_the_measuring_was_flagged_for_stays(code: str) -> None:
    flag = {"fan-stopped": 4, "mass-clipped": 3}[code]
    made = stored(correction=compile_document(BOTH), findings={code: flag})
    [again] = rehearse(BOTH, [stored(findings={code: flag})])
    assert (again.flag, sorted(again.reasons)) == (made.flag, sorted(made.reasons))


def test_a_reason_that_nobody_here_knows_keeps_the_flag_that_it_came_with() -> None:
    odd = stored().model_copy(update={"flag": 3, "reasons": ["uncalibrated", "someone-at-the-case"]})
    [again] = rehearse(BOTH, [odd])
    assert again.flag == 3
    assert "someone-at-the-case" in again.reasons


def test_dates_decide_nothing_in_a_rehearsal() -> None:
    [again] = rehearse(BOTH, [stored(at=1_700_000_000.0)])
    assert again.flag == 1
    assert again.calibration is not None


def test_without_climate_a_reading_falls_back_to_raw_and_loses_the_provenance_it_had() -> None:
    first = stored(climate=None, correction=compile_document(linear(0.5)))
    assert first.calibration is not None
    [again] = rehearse(BOTH, [first])
    assert again.calibration is None
    assert "calibration" not in again.json_text()
    assert again.pm2_5 is not None
    assert again.pm2_5.value == 12.0
    assert again.flag == 3
    assert {"climate-missing", "uncorrected:pm2_5"} <= set(again.reasons)


def test_a_reading_without_figures_comes_back_as_it_was() -> None:
    empty = reading_document(make_reading(interval(layout=None), uncorrected, {}), Place("quarry", "gate"), 9)
    assert list(rehearse(BOTH, [empty])) == [empty]


def test_a_move_is_the_share_of_raw_by_which_figures_change() -> None:
    rehearsed = list(rehearse(linear(0.7), [stored(m) for m in (10.0, 20.0, 40.0)]))
    moved = shift(linear(0.7), rehearsed)
    assert moved.moves["pm2_5"].typical == pytest.approx(0.3, abs=1e-3)
    assert moved.moves["pm2_5"].mean == pytest.approx(0.3, abs=1e-3)
    assert (moved.most, moved.judged, moved.offered) == (pytest.approx(0.3, abs=1e-3), 3, 3)


def test_an_offset_on_a_clean_night_is_measured_against_a_floor() -> None:
    moved = shift(linear(1.0, 1.0), rehearse(linear(1.0, 1.0), [stored(0.5)]))
    assert moved.most == pytest.approx(1.0 / FLOOR_UG_M3, abs=1e-3)


def test_peaks_weigh_by_their_mass() -> None:
    bent = TEXT.format(
        steps="""
[[step]]
kind = "piecewise"
at = [0.0, 50.0, 500.0]
to = [{ value = 0.0, u = 0.1 }, { value = 50.0, u = 1.0 }, { value = 2000.0, u = 9.0 }]
"""
    )
    document = parse(bent.encode())
    moved = shift(document, rehearse(document, [stored(m) for m in (10.0,) * 8 + (400.0,) * 2]))
    assert moved.moves["pm2_5"].typical < 0.01
    assert moved.most > 2.0


def test_readings_that_were_no_measurement_of_the_air_are_not_judged() -> None:
    sick = stored(findings={"fan-stopped": 4})
    assert shift(linear(3.0), rehearse(linear(3.0), [sick])).judged == 0


def test_readings_that_fell_back_to_raw_are_not_judged_and_are_counted() -> None:
    moved = shift(BOTH, rehearse(BOTH, [stored(climate=None)]))
    assert (moved.judged, moved.offered, moved.most) == (0, 1, 0.0)


def test_a_figure_that_cannot_be_stated_moves_without_end() -> None:
    assert relative_move(10.0, inf) == inf
    fog = list(rehearse(BOTH, [stored(climate=replace(AIR, rh_pct=99.9))] * 3))
    assert all(r.pm2_5 is not None for r in fog)


def test_every_reason_of_the_corrections_is_known_as_one() -> None:
    """Drift: a new reason of a step that is missing here would outlive the document that it was about."""
    package = Path(steps.__file__).parent
    texts = [path.read_text() for path in (*package.glob("*.py"), package.parent / "correction.py")]
    said = {word for text in texts for word in re.findall(r'reason(?: =|=|\() ?"([a-z-]+)"', text)}
    said |= {
        word
        for text in texts
        for word in re.findall(r'SUSPECT, "([a-z-]+)"|FAIL, "([a-z-]+)"', text)
        for word in word
        if word
    }
    assert len(said) > 8
    assert all(of_correction(reason) for reason in said), said
