"""The uncertainty of counting, held against the spread that emulated sensors show in air that does not change."""

import numpy as np
import pytest

from intervals import MARCH
from motekeep.instant import Instant
from motekeep.measure.counting import physical_scale
from motekeep.measure.interval import FrameCount, Interval, channel
from motekeep.measure.uncertainty import raw_uncertainties
from motesim.air import AirPlan, still_air
from motesim.emulator import Emulator
from motesim.faults import FaultSet
from motesim.line import face_of, layout_of
from motesim.plan import SensorPlan
from motesim.weather import Climate

MINUTES = 150
LAYOUT = layout_of(SensorPlan("any"))
STILL = Climate(swing=0.0, variability=0.0, gusts=0.0, rush=0.0)


def minutes(pm2_5: float, averaging: int, view: float) -> list[Interval]:
    plan = AirPlan(aerosol="average-urban", pm2_5=pm2_5, climate=STILL)
    emulator = Emulator(face_of(LAYOUT), 5, 1.0, faults=FaultSet(), overrides={"averaging": averaging, "view": view})
    seconds = 60 * MINUTES
    air = still_air(plan, 40.0, 15.0, samples=seconds // 10 + 2)
    printed, _ = emulator.advance(air, np.arange(seconds, dtype=np.float64), np.ones(seconds, dtype=np.bool_))
    made = []
    for m in range(2, MINUTES):  # the first minutes fill the cell
        span = slice(60 * m, 60 * m + 60)
        mass, counts = printed.columns.mass[span], printed.columns.counts[span]
        made.append(
            Interval(
                "north",
                Instant(MARCH + 60.0 * m, 60.0 * m, "boot", trusted=True),
                60.0,
                FrameCount(60),
                LAYOUT,
                tuple([channel(list(column)) for column in mass.T]),
                (),
                tuple([channel(list(column), LAYOUT.count_top) for column in counts.T]),
                None,
            )
        )
    return made


@pytest.mark.parametrize(
    ("pm2_5", "averaging", "view"), [(8.0, 1, 1.0), (8.0, 10, 0.75), (40.0, 3, 0.5), (2.0, 3, 0.75)]
)
def test_stated_counting_uncertainty_is_the_spread_of_minute_means(pm2_5: float, averaging: int, view: float) -> None:
    """One number, the scale of a counter that sees its share of the flow, holds for every pooling of the firmware."""
    made = minutes(pm2_5, averaging, view)
    scale = physical_scale(0.1, 1.0) / view
    stated = np.array([raw_uncertainties(i, LAYOUT, scale) for i in made])
    means = np.array([[m.mean for m in i.mass] for i in made])
    spread, u = means.std(axis=0, ddof=1), np.median(stated, axis=0)
    for name, ratio in zip(LAYOUT.mass, u / spread, strict=True):
        assert 0.7 < ratio < 2.0, name
