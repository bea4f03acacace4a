"""Captures: read back by the agent's own reader and decoders, the same for the same seed."""

import gzip
import json
from pathlib import Path

import numpy as np
import pytest
from click.testing import CliRunner

from motekeep.capture import ClimateRecord, FrameRecord, LineRecord, ServiceRecord, parse_line
from motekeep.instant import from_rfc3339
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame
from motesim.capture import capture_lines, emulated_capture, write_capture
from motesim.cli import main
from motesim.faults import Fault
from motesim.plan import Duty, Probe, SensorPlan, Service, SitePlan
from motesim.site import Site

START = 1_796_083_200.0


def decoded(path: Path, dialect: str = "bm", sensor: str = "north") -> list[Frame | Damage]:
    decoder = DIALECTS[dialect].decoder()
    out: list[Frame | Damage] = []
    for line in path.read_text().splitlines():
        record = parse_line(line)
        if isinstance(record, FrameRecord) and record.sensor == sensor:
            out += decoder.feed(record.data)
    return out


@pytest.mark.parametrize("dialect", list(DIALECTS))
def test_a_capture_decodes_to_the_printed_numbers(dialect: str, tmp_path: Path) -> None:
    out = tmp_path / "one.cap"
    assert emulated_capture(out, seconds=120.0, dialect=dialect) == 120
    frames = decoded(out, dialect)
    plan = SitePlan("emulated", 1, START, 120.0, (SensorPlan("north", dialect, seed=1000),))
    (block,) = Site(plan).observed("north")
    assert len(frames) == 120
    for frame, mass in zip(frames, block.printed.columns.mass, strict=True):
        assert isinstance(frame, Frame)
        assert frame.mass == pytest.approx(mass, rel=1e-6, abs=1e-9)
    with_counts = [frame.counts for frame in frames if isinstance(frame, Frame) and frame.counts]
    for counts, printed in zip(with_counts, block.printed.columns.counts, strict=False):
        assert counts == pytest.approx(printed[: len(counts)], rel=1e-5, abs=0.02)


def test_the_same_seed_gives_the_same_bytes_and_another_does_not(tmp_path: Path) -> None:
    paths = [tmp_path / f"{i}.cap.gz" for i in range(3)]
    for path, seed in zip(paths, (4, 4, 5), strict=True):
        emulated_capture(path, seconds=300.0, seed=seed, sensors=("north", "south"))
    first, second, third = (path.read_bytes() for path in paths)
    assert first == second
    assert gzip.decompress(first) != gzip.decompress(third)


def test_times_rise_and_the_cadence_holds(tmp_path: Path) -> None:
    out = tmp_path / "two.cap"
    emulated_capture(out, seconds=600.0, sensors=("north", "south"), period_s=6.0)
    records = [record for line in out.read_text().splitlines() if (record := parse_line(line))]
    times = [record.t for record in records]
    assert times == sorted(times)
    north = np.array([record.t for record in records if record.sensor == "north"])
    assert np.diff(north) == pytest.approx(6.0, abs=0.02)


def test_climate_and_service_lines_stand_beside_the_frames() -> None:
    sensor = SensorPlan("north", seed=2, probe=Probe(60.0, rh_error=2.0), services=(Service(START + 30.0, "cleaned"),))
    lines = list(capture_lines(SitePlan("here", 1, START, 300.0, (sensor,))))
    records = [parse_line(line) for line in lines]
    climate = [record for record in records if isinstance(record, ClimateRecord)]
    assert len(climate) == 5
    assert [(r.t, r.kind) for r in records if isinstance(r, ServiceRecord)] == [(START + 30.0, "cleaned")]
    (block,) = Site(SitePlan("here", 1, START, 300.0, (sensor,))).observed("north")
    assert climate[0].rh_pct == pytest.approx(block.state.rh[0] + 2.0, abs=0.06)


def test_sleep_and_wake_stand_between_the_frames_that_they_part() -> None:
    # two sensors of different phase over the border of two stretches of air, six hours after the start
    sensors = tuple(SensorPlan(name, seed=n, period_s=6.0, duty=Duty(600.0, 90.0)) for n, name in enumerate("ab", 5))
    plan = SitePlan("here", 1, START, 7 * 3600.0, sensors)
    records = [record for line in capture_lines(plan) if (record := parse_line(line))]
    assert [r.t for r in records] == sorted(r.t for r in records)
    for sensor in "ab":
        own = [record for record in records if record.sensor == sensor]
        turned = [record for record in own if isinstance(record, LineRecord)]
        assert [record.asleep for record in turned] == [n % 2 == 0 for n in range(84)]
        for record in turned:
            last, first = own[own.index(record) - 1], own[(own.index(record) + 1) % len(own)]
            if record.asleep:
                assert record.t - last.t < 0.05
            elif record.t < plan.start + plan.seconds - 6.0:
                assert 5.9 < first.t - record.t < 6.1


def test_damage_is_what_it_says(tmp_path: Path) -> None:
    out = tmp_path / "damaged.cap"
    kinds = {"bad-checksums": 0.2, "byte-damage": 0.01, "rubbish": 20.0}
    for kind, strength in kinds.items():
        emulated_capture(out, seconds=1200.0, faults=[Fault(kind, START, strength=strength)])
        seen = decoded(out)
        good = sum(isinstance(item, Frame) for item in seen)
        reasons = [item.reason for item in seen if isinstance(item, Damage)]
        assert reasons, kind
        if kind == "bad-checksums":
            assert good == pytest.approx(960, abs=60)
            assert set(reasons) == {"checksum"}
        elif kind == "byte-damage":
            assert good == pytest.approx(1200 * 0.99**32, abs=70)
        else:
            assert good >= 1198  # rubbish beside frames costs none of them, but for a header by chance


def test_silence_is_no_line_at_all(tmp_path: Path) -> None:
    out = tmp_path / "silent.cap"
    n = emulated_capture(out, seconds=600.0, faults=[Fault("silent", START + 100.0, lasts_s=200.0)])
    assert n == 400


def test_truth_and_reference_go_with_a_capture(tmp_path: Path) -> None:
    sensors = (SensorPlan("north", seed=1, period_s=6.0), SensorPlan("south", seed=2, period_s=6.0))
    plan = SitePlan("here", 6, START, 4 * 3600.0, sensors)
    truth, reference = tmp_path / "truth.ndjson", tmp_path / "reference.csv"
    write_capture(plan, tmp_path / "x.cap", truth=truth, reference=reference)
    rows = [json.loads(line) for line in truth.read_text().splitlines()]
    assert len(rows) == 2 * 240
    assert {row["sensor"] for row in rows} == {"north", "south"}
    header, *hours = reference.read_text().splitlines()
    assert header == "start,seconds,pm2_5,u"
    assert len(hours) == 4
    start, seconds, value, u = hours[1].split(",")
    true = np.mean([r["dry"]["pm2_5"] for r in rows if from_rfc3339(start) <= r["start"] < from_rfc3339(start) + 3600])
    assert float(seconds) == 3600.0
    assert abs(float(value) - true) < 4.0 * float(u)


def test_stretches_join_without_a_seam() -> None:
    long = SitePlan("here", 6, START, 14 * 3600.0, (SensorPlan("north", seed=1, period_s=6.0),))
    times = np.concatenate([block.printed.times for block in Site(long).observed("north")])
    assert np.diff(times) == pytest.approx(6.0, abs=1e-3)
    assert len(times) == pytest.approx(14 * 600, abs=1)
    dry = np.concatenate([block.air.dry_masses()[1, :-1] for block in Site(long).observed("north")])
    step = np.abs(np.diff(np.log(dry)))
    assert step[2159] < 6.0 * np.median(step)


def test_the_command_writes_a_capture_and_lists_scenarios(tmp_path: Path) -> None:
    scenario = tmp_path / "short.toml"
    scenario.write_text('site = "s"\nstart = 2026-12-01T00:00:00Z\nduration = "2m"\n[[sensor]]\nname = "a"\n')
    out = tmp_path / "short.cap"
    done = CliRunner().invoke(main, ["capture", str(scenario), str(out), "--truth", str(tmp_path / "t")])
    assert done.exit_code == 0, done.output
    assert "120 frames" in done.output
    assert len(out.read_text().splitlines()) == 121
    listed = CliRunner().invoke(main, ["scenarios"])
    assert "quarry-gate" in listed.output
    assert all(line.count("  ") >= 1 for line in listed.output.splitlines())


def test_a_bad_scenario_ends_the_command_with_2_and_one_line(tmp_path: Path) -> None:
    scenario = tmp_path / "bad.toml"
    scenario.write_text('site = "s"\nstart = 2026-12-01T00:00:00Z\nduration = "2m"\nfoo = 1\n[[sensor]]\nname = "a"\n')
    done = CliRunner().invoke(main, ["capture", str(scenario), str(tmp_path / "x")])
    assert done.exit_code == 2
    assert "foo" in done.output
    assert len(done.output.strip().splitlines()) == 1
