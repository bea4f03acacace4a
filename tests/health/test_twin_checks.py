"""What a twin tells: each fault by its own name and since when, the weather by none, and all of it remembered."""

import json
from math import exp

import pytest

from health.twin_air import (
    DAY_S,
    FLOW_L_MIN,
    PERIOD_S,
    SIZES_UM,
    START,
    WELL,
    Make,
    Sickness,
    daylight,
    hours,
)
from motekeep.health.lessons.twin_ratio import TwinRatioLesson, learn
from motekeep.health.twin_block import BlockBuilder
from motekeep.health.twin_checks import twin_checks
from motekeep.health.twin_comparison import Explanation, account
from motekeep.instant import Instant

SICK_FROM = 5.0  # day


class Watch:
    """Lesson and checks of one sensor, as `SensorHealth` runs them; who was raised when, in days."""

    def __init__(self):
        self.lesson = TwinRatioLesson(FLOW_L_MIN, PERIOD_S)
        self.checks = twin_checks(FLOW_L_MIN, PERIOD_S)
        self.raised = {}
        self.lasts = {}
        self.at = None

    def hear(self, stream):
        for hour in stream:
            self.lesson.hour(hour)
            self.teach()
            self.checks[0].hour(hour)
            self.at = Instant(hour.start.utc + 3600.0, hour.start.boot_s + 3600.0, hour.start.boot_id, True)
            self.lasts = self.now()
            for code, suspicion in self.lasts.items():
                self.raised.setdefault(code, ((self.at.utc - START) / DAY_S, suspicion))
        return self

    def teach(self):
        part = self.lesson.part()
        self.checks[0].learnt({} if part is None else {self.lesson.name: part})

    def now(self):
        judged = {check.code: check.judge(self.at) for check in self.checks}
        return {code: suspicion for code, suspicion in judged.items() if suspicion is not None}

    def began(self, code):
        """Day that the finding says it began on."""
        return (self.raised[code][1].since + self.at.offset - START) / DAY_S


def from_day(day, sickness):
    return lambda now: sickness if now >= day else WELL


@pytest.mark.parametrize("seed", range(2))
def test_a_fan_at_seven_tenths_is_named_within_a_day(seed):
    watch = Watch().hear(hours(8.0, from_day(SICK_FROM, Sickness(flow=0.7)), seed=seed))
    assert set(watch.raised) == {"fan-weak"}
    when, suspicion = watch.raised["fan-weak"]
    assert when < SICK_FROM + 1.0
    assert watch.began("fan-weak") == pytest.approx(SICK_FROM, abs=0.2)
    assert "of its flow" in suspicion.evidence
    assert suspicion.confidence >= 0.9


@pytest.mark.parametrize("seed", range(2))
def test_a_loss_of_light_is_named_optics_and_no_fan(seed):
    def fouling(now):
        return Sickness(light=1.0 - 0.25 * min(max((now - SICK_FROM) / 10.0, 0.0), 1.0))

    watch = Watch().hear(hours(20.0, fouling, seed=seed))
    assert set(watch.raised) == {"optics-fouled"}
    when, suspicion = watch.raised["optics-fouled"]
    assert when < SICK_FROM + 17.0
    assert SICK_FROM <= watch.began("optics-fouled") <= when
    assert "of its light" in suspicion.evidence


@pytest.mark.parametrize("seed", range(2))
def test_a_floor_is_told_from_a_leak_of_daylight(seed):
    watch = Watch().hear(hours(9.0, from_day(SICK_FROM, Sickness(floor=900.0)), seed=seed))
    assert set(watch.raised) == {"floor-raised"}
    assert watch.raised["floor-raised"][0] < SICK_FROM + 4.0
    assert watch.began("floor-raised") == pytest.approx(SICK_FROM, abs=0.5)


@pytest.mark.parametrize("noon_h", [3.0, 12.0, 20.0])
def test_daylight_is_found_wherever_noon_is(noon_h):
    def leak(now):
        return Sickness(floor=1000.0 * daylight(now, noon_h)) if now >= SICK_FROM else WELL

    watch = Watch().hear(hours(13.0, leak))
    assert set(watch.raised) == {"light-leak"}
    assert watch.raised["light-leak"][0] < SICK_FROM + 8.0


@pytest.mark.parametrize(
    "sick",
    [Sickness(flow=1.4), Sickness(light=1.4), Sickness(floor=-300.0), Sickness(flow=0.95), Sickness(light=0.95)],
    ids=["twin's fan", "twin's optics", "twin's floor", "5 % of the flow", "5 % of the light"],
)
def test_the_loss_of_the_twin_and_small_changes_are_no_finding_here(sick):
    assert Watch().hear(hours(12.0, from_day(SICK_FROM, sick))).raised == {}


@pytest.mark.parametrize("level", [0.03, 0.2, 1.0])
def test_weather_is_no_finding(level):
    assert Watch().hear(hours(15.0, seed=100, level=level)).raised == {}


def test_smoke_is_no_finding():
    """Forty times the fine aerosol, and a size distribution three times as steep above 1 um, for five hours."""
    air = list(hours(12.0))
    smoke = list(hours(12.0, level=8.0, seed=2))
    mixed = [smoke[i] if 170 <= i < 175 else hour for i, hour in enumerate(air)]
    assert Watch().hear(mixed).raised == {}


def test_what_nothing_explains_is_a_disagreement_after_two_days():
    watch = Watch().hear(hours(9.0, from_day(SICK_FROM, Sickness(coarse=0.3))))
    assert set(watch.raised) == {"twin-disagrees"}
    assert SICK_FROM + 1.0 <= watch.raised["twin-disagrees"][0] < SICK_FROM + 3.0


def test_a_pair_that_cannot_be_is_told_on_the_first_day_and_not_learnt():
    watch = Watch().hear(hours(4.0, lambda _now: Sickness(flow=0.15)))
    assert set(watch.raised) == {"twin-disagrees"}
    assert watch.raised["twin-disagrees"][0] < 1.0
    assert watch.lesson.part() is None


def test_a_fan_that_recovers_closes_its_finding():
    watch = Watch().hear(hours(7.0, from_day(SICK_FROM, Sickness(flow=0.7))))
    assert "fan-weak" in watch.lasts
    watch.hear(hours(2.0, first_day=7.0))
    assert watch.lasts == {}


def test_after_a_service_the_pair_is_learnt_anew_and_nothing_is_held():
    watch = Watch().hear(hours(7.0, from_day(SICK_FROM, Sickness(flow=0.7))))
    watch.lesson.forget()
    watch.teach()
    assert watch.now() == {}
    other = Make(0.93, (0.95, 1.04, 1.0, 1.05, 0.98, 1.0))
    watch.raised.clear()
    watch.hear(hours(6.0, own=other, first_day=7.0))
    assert watch.lesson.part() is not None
    assert watch.raised == {}


def test_a_reboot_forgets_neither_the_finding_nor_when_it_began():
    watch = Watch().hear(hours(7.0, from_day(SICK_FROM, Sickness(flow=0.7))))
    again = Watch()
    again.lesson.recall(json.loads(json.dumps(watch.lesson.notes())))
    again.teach()
    again.at = Instant(watch.at.utc + 60.0, 12.0, "another boot", True)
    for before, after in zip(watch.checks, again.checks, strict=True):
        memory = before.memory()
        if memory is not None:
            after.recall(json.loads(json.dumps(memory)), again.at)
    before, after = watch.now()["fan-weak"], again.now()["fan-weak"]
    assert after.since + again.at.offset == pytest.approx(before.since + watch.at.offset)
    assert after.evidence == before.evidence
    again.hear(hours(2.0, first_day=7.0))
    assert again.lasts == {}


def test_what_is_kept_stays_bounded():
    watch = Watch().hear(hours(13.0))
    memories = [check.memory() for check in watch.checks if check.memory() is not None]
    assert len(memories) == 1
    assert len(json.dumps(memories[0])) < 8000


@pytest.mark.parametrize("memory", [{}, {"sizes_um": [0.3], "blocks": [1.0]}, {"sizes_um": 3.0, "held": 99.0}])
def test_a_memory_that_cannot_be_used_is_ignored(memory):
    watch = Watch()
    watch.checks[0].recall(memory, Instant(START, 0.0, "boot", True))
    assert watch.hear(hours(4.0)).raised == {}


@pytest.mark.parametrize("light", [0.6, 0.75, 0.9])
def test_the_fit_gives_the_light_that_is_left(light):
    """Against thresholds moved on the whole Mie curve, not on its chords."""
    ratio, blocks = learnt_and_seen(Sickness(light=light))
    fitted = account(ratio, blocks)
    assert fitted.best is Explanation.OPTICS
    assert exp(fitted.fits[Explanation.OPTICS].number) == pytest.approx(light, abs=0.09)


@pytest.mark.parametrize("flow", [0.6, 0.7, 0.85])
def test_the_fit_gives_the_flow_that_is_left(flow):
    ratio, blocks = learnt_and_seen(Sickness(flow=flow))
    fitted = account(ratio, blocks)
    assert fitted.best is Explanation.FLOW
    assert exp(fitted.fits[Explanation.FLOW].number) == pytest.approx(flow, abs=0.05)


def learnt_and_seen(sick):
    """The ratio of four sound days, and the blocks of the two after them."""
    well, ill = (
        [block for hour in stream if (block := builder.add(hour)) is not None]
        for builder, stream in (
            (BlockBuilder(PERIOD_S), hours(4.2)),
            (BlockBuilder(PERIOD_S), hours(2.2, lambda _now: sick, first_day=5.0, seed=3)),
        )
    )
    ratio = learn(SIZES_UM, well, FLOW_L_MIN)
    return ratio, [block.compare(SIZES_UM, FLOW_L_MIN) for block in ill]
