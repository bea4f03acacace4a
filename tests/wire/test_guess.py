"""Which dialect bytes are: emulated air of our own invention through every dialect."""

from collections.abc import Callable
from random import Random

import pytest

from motekeep.wire.bm import BM_28, BM_36
from motekeep.wire.bm_climate import BM_CLIMATE
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from motekeep.wire.guess import Guess, guess

TOWN = (1200.0, 340.0, 62.0, 8.0, 2.0, 1.0)
CLEAN = (60.0, 9.0, 1.0, 0.0, 0.0, 0.0)
DUST = (8000.0, 3300.0, 1200.0, 900.0, 400.0, 300.0)


def printed(random: Random, mean: float, pooled_s: int) -> float:
    """A count as firmware prints it: pulses of `pooled_s` seconds at 0.1 L/min, scaled to 0.1 L."""
    scale = 60 / pooled_s
    pulses = mean / scale
    return scale * max(round(random.gauss(pulses, pulses**0.5)), 0)


def counting(random: Random, means: tuple[float, ...] = TOWN, pooled_s: int = 1) -> Frame:
    counts = tuple(sorted((printed(random, mean, pooled_s) for mean in means), reverse=True))
    return Frame(BM_28, (5.0, 8.0, 9.0), counts, b"", (5.0, 8.0, 9.0), revision=0x97)


def climate(random: Random, temperature_c: float, rh_pct: float, means: tuple[float, ...] = TOWN) -> Frame:
    counts = tuple(sorted((printed(random, mean, 1) for mean in means[:4]), reverse=True))
    drift = random.choice((-0.1, 0.0, 0.0, 0.1))
    return Frame(BM_CLIMATE, (5.0, 8.0, 9.0), counts, b"", (5.0, 8.0, 9.0), rh_pct + drift, temperature_c + drift, 0x97)


def guessed(dialect: str, make: Callable[[Random], Frame], size: int) -> list[Guess]:
    random = Random(7)
    return guess(b"".join([DIALECTS[dialect].encode(make(random)) for _ in range(size)]))


@pytest.mark.parametrize(
    ("dialect", "make"),
    [
        ("bm", counting),
        ("bm", lambda random: counting(random, CLEAN)),
        ("bm", lambda random: counting(random, DUST, pooled_s=10)),
        ("bm-climate", lambda random: climate(random, 20.0, 45.0)),
        ("bm-climate", lambda random: climate(random, -8.0, 90.0, CLEAN)),
        ("bm-climate", lambda random: climate(random, 0.3, 99.9)),
        ("bm-climate", lambda random: climate(random, 38.0, 12.0, DUST)),
    ],
    ids=["town", "clean air", "dust", "mild", "frost", "thaw", "desert"],
)
def test_thirty_frames_tell_counts_from_climate(dialect: str, make: Callable[[Random], Frame]) -> None:
    best, second = guessed(dialect, make, 30)
    assert best.dialect == dialect
    assert best.confidence > 0.95
    assert second.confidence < 0.05
    assert "30 frames with right sums" in best.reason


def test_dust_that_could_be_desert_air_leaves_doubt_in_few_frames() -> None:
    for guesses in (
        guessed("bm", lambda random: counting(random, DUST, pooled_s=10), 3),
        guessed("bm-climate", lambda random: climate(random, 38.0, 12.0, DUST), 3),
    ):
        assert {g.dialect for g in guesses} == {"bm", "bm-climate"}
        assert all(0.2 < g.confidence < 0.8 for g in guesses)


def test_a_frozen_output_is_not_taken_for_smooth_climate() -> None:
    frozen = counting(Random(1), DUST, pooled_s=10)
    assert all(g.confidence < 0.8 for g in guessed("bm", lambda _: frozen, 30))


def test_confidence_grows_with_frames() -> None:
    confidence = [guessed("bm-climate", lambda random: climate(random, 20, 45), n)[0].confidence for n in (1, 2, 4, 30)]
    assert confidence == sorted(confidence)
    assert confidence[0] < 0.95 < confidence[-1]


def test_the_long_form_is_bm_beyond_doubt() -> None:
    frame = Frame(BM_36, (5.0, 8.0, 9.0), TOWN, b"", (5.0, 8.0, 9.0), 45.0, 20.0, 1)
    (only,) = guessed("bm", lambda _: frame, 5)
    assert (only.dialect, only.confidence > 0.95) == ("bm", True)


@pytest.mark.parametrize("name", ["aa", "stuffed"])
def test_the_other_framings_are_found_by_their_frames_alone(name: str) -> None:
    layout = DIALECTS[name].layouts[0]
    frame = Frame(
        layout, (3.0, 5.0, 6.0, 8.0)[: len(layout.mass)], (900.0, 300.0, 80.0, 20.0, 10.0)[: len(layout.sizes_um)], b""
    )
    (only,) = guessed(name, lambda _: frame, 10)
    assert only.dialect == name
    assert only.confidence > 0.95


def test_masses_that_do_not_rise_with_size_cost_confidence_and_are_named() -> None:
    layout = DIALECTS["aa"].layouts[0]
    (odd,) = guessed("aa", lambda _: Frame(layout, (9.0, 3.0), (), b""), 10)
    (even,) = guessed("aa", lambda _: Frame(layout, (3.0, 9.0), (), b""), 10)
    assert odd.confidence < even.confidence
    assert "rise with size in only 0%" in odd.reason


def test_damage_and_rubbish_do_not_hide_the_dialect() -> None:
    random = Random(9)
    units = [DIALECTS["bm"].encode(counting(random)) for _ in range(20)]
    spoilt = b"".join([random.randbytes(9) + (unit if index % 3 else unit[:20]) for index, unit in enumerate(units)])
    assert guess(spoilt)[0].dialect == "bm"
    assert guess(spoilt)[0].confidence > 0.95


def test_noise_is_no_dialect() -> None:
    assert guess(Random(3).randbytes(16384)) == []
    assert guess(b"") == []
