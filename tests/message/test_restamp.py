"""Time given to readings afterwards. Stories with hand-made clocks; all moments are Unix seconds."""

from hypothesis import given
from hypothesis import strategies as st

from journal_site import document
from motekeep.message.restamp import NOT_BEFORE, BootSpan, Bounds, bounds, restamp_amendment, restamped

NOON = NOT_BEFORE + 40 * 86400 + 43200


def test_a_corrected_reading_starts_at_its_boot_second_plus_the_offset() -> None:
    made = document("north", 7, 1000.0, clock="unsynced", boot_s=340.5)
    corrected = restamped(made, "corrected", NOON)
    assert (corrected.clock, corrected.start) == ("corrected", "2027-01-10T12:05:40.500Z")
    assert corrected.start_between is None
    assert (corrected.seq, corrected.pm2_5, corrected.boot_s) == (7, made.pm2_5, 340.5)


def test_a_bounded_reading_carries_both_moments_and_starts_half_way() -> None:
    made = document("north", 7, 1000.0, clock="unsynced", boot_s=60.0)
    between = Bounds(NOON, NOON + 3600)
    bounded = restamped(made, "bounded", between.middle, between)
    assert bounded.start_between == ("2027-01-10T12:01:00Z", "2027-01-10T13:01:00Z")
    assert (bounded.clock, bounded.start) == ("bounded", "2027-01-10T12:31:00Z")


def test_a_boot_without_a_clock_lies_between_its_neighbours() -> None:
    boots = [BootSpan(1000.0, NOON), BootSpan(300.0, None), BootSpan(0.0, NOON + 9000)]
    # it began after the first had ended, and early enough to last 300 s before the third began
    assert bounds(boots, 1) == Bounds(NOON + 1000, NOON + 9000 - 300)


def test_several_boots_without_a_clock_push_each_other_apart() -> None:
    boots = [BootSpan(1000.0, NOON), BootSpan(300.0, None), BootSpan(500.0, None), BootSpan(0.0, NOON + 9000)]
    assert bounds(boots, 1) == Bounds(NOON + 1000, NOON + 9000 - 800)
    assert bounds(boots, 2) == Bounds(NOON + 1300, NOON + 9000 - 500)


def test_the_first_boot_of_all_is_not_older_than_the_program() -> None:
    assert bounds([BootSpan(60.0, None), BootSpan(0.0, NOON)], 0) == Bounds(NOT_BEFORE, NOON - 60)


def test_nothing_is_known_before_a_later_boot_knows_its_clock() -> None:
    assert bounds([BootSpan(60.0, NOON), BootSpan(60.0, None), BootSpan(0.0, None)], 1) is None


def test_contradicting_clocks_put_a_reading_before_the_later_moment() -> None:
    boots = [BootSpan(1000.0, NOON + 50_000), BootSpan(300.0, None), BootSpan(0.0, NOON)]
    assert bounds(boots, 1) == Bounds(NOON - 300, NOON - 300)


def test_an_amendment_names_the_range_the_clock_and_the_shift() -> None:
    told = restamp_amendment("north", 3, 9, "corrected", 1234.5678)
    assert told.model_dump(by_alias=True, exclude_unset=True) == {
        "schema": "motekeep/amend/1",
        "sensor": "north",
        "reasons": [],
        "from_seq": 3,
        "to_seq": 9,
        "clock": "corrected",
        "shift_s": 1234.568,
    }


# A true history: each boot with its pause before it, its length, and whether its clock was ever known.
history = st.lists(st.tuples(st.floats(0, 1e5), st.floats(1, 1e5), st.booleans()), min_size=1, max_size=6)


@given(history, st.floats(0, 1))
def test_the_true_start_always_lies_within_the_bounds(boots: list[tuple[float, float, bool]], share: float) -> None:
    now = NOT_BEFORE
    starts, spans = [], []
    for pause, length, known in [*boots, (0.0, 0.0, True)]:
        now += pause
        starts.append(now)
        # what is known of a boot's length is the end of its last reading, which may be short of the truth
        spans.append(BootSpan(length * share, now if known else None))
        now += length
    for index, span in enumerate(spans):
        if span.offset is None:
            between = bounds(spans, index)
            assert between is not None
            assert between.earliest - 1e-3 <= starts[index] <= between.latest + 1e-3
            assert between.earliest <= between.middle <= between.latest
