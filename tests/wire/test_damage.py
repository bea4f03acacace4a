"""Damage costs the frame that was hit and no other, and is told once."""

from random import Random

import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Dialect, Frame
from streams import LAYOUTS, damage_of, fed, frames_of, random_frame, reasons_of, reference, split

layouts = pytest.mark.parametrize("name", LAYOUTS)
randoms = st.builds(Random, st.integers(0, 2**32 - 1))
STARTS = {
    "bm": (b"\x42\x4d", b"\x42\x4d\x00\x14", b"\x42\x4d\x00\x1c", b"\x42\x4d\x00\x24", b"\x42\x4d\x00\x04"),
    "bm-climate": (b"\x42\x4d", b"\x42\x4d\x00\x1c", b"\x42\x4d\x00\x04"),
    "aa": (b"\xaa", b"\xaa\xc0", b"\xaa\xc5"),
    "stuffed": (b"\x7e", b"\x7e\x00\x03\x00\x28", b"\x7e\x00"),
}
HIT = 2  # the third of the units


def units_of(name: str, random: Random, size: int = 6) -> tuple[Dialect, list[bytes]]:
    """Frames without error bits: in `stuffed` these would outlive the hit unit that carries them."""
    dialect, layout = LAYOUTS[name]
    return dialect, [dialect.encode(random_frame(layout, random, errors=False)) for _ in range(size)]


def hear(dialect: Dialect, parts: list[bytes], random: Random) -> tuple[list[bytes], list[Damage]]:
    """The frames as they were sent, and the damage, under a random split."""
    events = fed(dialect.decoder(), split(b"".join(parts), random))
    return [dialect.encode(frame) for frame in frames_of(events)], damage_of(events)


def wrong_sum(unit: bytes) -> bytes:
    """The unit with one bit of its last summed bytes changed, none that touches flags and escapes of `stuffed`."""
    special = {0x7E, 0x7D, 0x5E, 0x5D, 0x31, 0x33}
    at = next(i for i in range(-3, -9, -1) if not {unit[i - 1], unit[i], unit[i] ^ 1} & special)
    return unit[: len(unit) + at] + bytes([unit[at] ^ 1]) + unit[len(unit) + at + 1 :]


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms, st.data())
def test_one_changed_byte_costs_one_frame_and_is_one_event(name: str, random: Random, data: st.DataObject) -> None:
    dialect, units = units_of(name, random)
    at = data.draw(st.integers(0, len(units[HIT]) - 1))
    hit = bytearray(units[HIT])
    hit[at] ^= data.draw(st.integers(1, 255))
    # The one hit that no decoder can see: `aa` does not sum its second byte.
    assume(not (name == "aa" and hit[1] == 0xC5 and hit[2] in (2, 5, 6, 7, 8)))
    heard, damage = hear(dialect, [*units[:HIT], bytes(hit), *units[HIT + 1 :]], random)
    others = [*units[:HIT], *units[HIT + 1 :]]
    # In `stuffed` a frame is two units, and the one with the status word may be the one that was hit.
    assert heard in ([others, units] if name == "stuffed" else [others])
    assert len(damage) == 1


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms, st.data())
def test_any_bytes_of_one_frame_overwritten_cost_no_other_frame(name: str, random: Random, data: st.DataObject) -> None:
    dialect, units = units_of(name, random)
    begin = data.draw(st.integers(0, len(units[HIT]) - 1))
    burst = data.draw(st.binary(min_size=1, max_size=len(units[HIT]) - begin))
    hit = units[HIT][:begin] + burst + units[HIT][begin + len(burst) :]
    stream = [*units[:HIT], hit, *units[HIT + 1 :]]
    heard, _ = hear(dialect, stream, random)
    assert heard[:HIT] == units[:HIT]
    assert heard[len(heard) - len(units[HIT + 1 :]) :] == units[HIT + 1 :]
    assert len(heard) - len(units) in (-1, 0)
    assert len(heard) == len(reference(dialect.name, b"".join(stream)))


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms, st.data())
def test_a_false_start_anywhere_costs_at_most_the_frame_it_stands_in(
    name: str, random: Random, data: st.DataObject
) -> None:
    dialect, units = units_of(name, random)
    at = data.draw(st.integers(0, len(units[HIT])))
    false_start = data.draw(st.sampled_from(STARTS[dialect.name]))
    hit = units[HIT][:at] + false_start + units[HIT][at:]
    # Six bytes that happen to continue it to an answer with the right sum make it no false start.
    assume(not (false_start == b"BM\x00\x04" and sum(hit[at : at + 6]) == int.from_bytes(hit[at + 6 : at + 8])))
    heard, damage = hear(dialect, [*units[:HIT], hit, *units[HIT + 1 :]], random)
    assert heard in ([*units[:HIT], *units[HIT + 1 :]], units)
    # A lone flag between two units is nothing; elsewhere what was inserted is a hit or, at a border, rubbish.
    assert len(damage) <= 1
    assert len(damage) == 1 or (false_start == b"\x7e" and heard == units)


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms, st.data())
def test_bytes_cut_out_of_one_frame_cost_no_other_frame(name: str, random: Random, data: st.DataObject) -> None:
    dialect, units = units_of(name, random)
    # Eight bits of sum and a tail byte are all that `aa` has: a cut frame can borrow both from the next one by chance.
    assume(name != "aa" or not any(0xAB in unit[2:9] for unit in units))
    begin = data.draw(st.integers(0, len(units[HIT]) - 1))
    end = data.draw(st.integers(begin + 1, len(units[HIT])))
    heard, damage = hear(dialect, [*units[:HIT], units[HIT][:begin] + units[HIT][end:], *units[HIT + 1 :]], random)
    whole = [*units[:HIT], *units[HIT + 1 :]]
    # Nothing at all is lost when a neighbour makes up what was cut: a shared flag, or a sum that ends like a start.
    assert heard in (whole, units)
    assert heard == whole or name == "stuffed" or (begin, end) == (0, 1)
    assert len(damage) <= 1


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms)
def test_two_frames_hit_in_a_row_are_two_events(name: str, random: Random) -> None:
    dialect, units = units_of(name, random)
    stream = [*units[:HIT], wrong_sum(units[HIT]), wrong_sum(units[HIT + 1]), *units[HIT + 2 :]]
    heard, damage = hear(dialect, stream, random)
    assert heard == [*units[:HIT], *units[HIT + 2 :]]
    assert [event.reason for event in damage] == ["checksum", "checksum"]


@layouts
def test_a_good_frame_inside_the_span_of_a_false_start_is_not_kept_waiting(name: str) -> None:
    dialect, units = units_of(name, Random(8))
    false_start = max(STARTS[dialect.name], key=lambda start: (start[-1] != 0x04, start))
    decoder = dialect.decoder()
    events = decoder.feed(false_start + units[0])
    assert [dialect.encode(frame) for frame in frames_of(events)] == units[:1]
    assert damage_of(events + decoder.feed(units[1])) == damage_of(events)


def test_rubbish_that_goes_on_over_many_feeds_is_told_with_the_first() -> None:
    decoder = DIALECTS["bm"].decoder()
    told = [decoder.feed(b"\x55" * 8) for _ in range(5)]
    assert told == [[Damage("rubbish", 8)], [], [], [], []]


def test_the_length_word_hit_is_one_event_with_its_reason() -> None:
    dialect, units = units_of("bm-28", Random(9))
    hit = units[1][:3] + b"\x1d" + units[1][4:]
    assert reasons_of(dialect.decoder().feed(units[0] + hit + units[2])) == ["frame", "length", "frame"]


def test_the_tail_of_aa_hit_is_told_as_tail() -> None:
    dialect, units = units_of("aa", Random(10))
    hit = units[1][:9] + b"\x00"
    assert dialect.decoder().feed(units[0] + hit + units[2])[1] == Damage("tail", 10)


def test_an_escape_followed_by_what_is_never_escaped_is_told_as_escape() -> None:
    decoder = DIALECTS["stuffed"].decoder()
    assert reasons_of(decoder.feed(b"\x7e\x00\x03\x7d\x01\x00\xfc\x7e")) == ["escape"]


def test_claims_are_not_carried_over_a_good_frame() -> None:
    # The false start claims 40 bytes: the good frame inside ends that claim, so the hit after it counts by itself.
    dialect, units = units_of("bm-20", Random(11))
    hit = units[1][:-1] + bytes([units[1][-1] ^ 1])
    events = dialect.decoder().feed(b"\x42\x4d\x00\x24" + units[0] + hit + units[2])
    assert reasons_of(events) == ["checksum", "frame", "checksum", "frame"]
    assert isinstance(events[-1], Frame)


def test_a_frame_that_lost_its_last_byte_does_not_take_the_first_byte_of_the_next_one_away() -> None:
    # The sum of the first frame ends with 42, the byte that the next frame begins with.
    dialect, layout = LAYOUTS["bm-28"]
    units = [dialect.encode(random_frame(layout, Random(seed))) for seed in range(2000)]
    cut = next(unit for unit in units if unit[-1] == 0x42)
    decoder = dialect.decoder()
    events = decoder.feed(cut[:-1] + units[0] + units[1])
    assert [dialect.encode(frame) for frame in frames_of(events)] == [cut, units[0], units[1]]
    assert decoder.feed(cut) == decoder.feed(cut) == [frames_of(events)[0]]


def test_two_units_that_share_one_flag_are_both_decoded() -> None:
    dialect, layout = LAYOUTS["stuffed"]
    units = [dialect.encode(random_frame(layout, Random(seed))) for seed in range(3)]
    events = dialect.decoder().feed(units[0] + units[1][1:] + units[2][1:])
    assert [dialect.encode(frame) for frame in frames_of(events)] == units
    assert damage_of(events) == []


@pytest.mark.parametrize(
    ("name", "answer"),
    [
        ("bm-28", b"\x42\x4d\x00\x04\xe4\x01\x01\x78"),
        ("aa", b"\xaa\xc5\x06\x01\x01\x00\x12\x34\x4e\xab"),
        ("stuffed", b"\x7e\x00\x00\x00\x00\xff\x7e"),
    ],
)
def test_the_answer_to_a_command_is_neither_data_nor_damage(name: str, answer: bytes) -> None:
    dialect, units = units_of(name, Random(12))
    decoder = dialect.decoder()
    events = decoder.feed(units[0] + answer + units[1] + answer)
    assert [dialect.encode(frame) for frame in frames_of(events)] == units[:2]
    assert damage_of(events) == []
    assert decoder.tally.dropped == {}


def test_a_data_frame_of_aa_hit_in_its_second_byte_does_not_pass_for_an_answer() -> None:
    dialect, units = units_of("aa", Random(13))
    hit = b"\xaa\xc5" + units[1][2:]
    assert hit[2] not in (2, 5, 6, 7, 8)
    assert reasons_of(dialect.decoder().feed(units[0] + hit + units[2])) == ["frame", "checksum", "frame"]
