"""Every decoder, fed whole, byte by byte, in any split and with rubbish between."""

from dataclasses import replace
from random import Random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame
from streams import LAYOUTS, damage_of, fed, frames_of, random_frame, reasons_of, reference, split

layouts = pytest.mark.parametrize("name", LAYOUTS)
dialects = pytest.mark.parametrize("name", DIALECTS)
# A seed a case: six random frames are more than Hypothesis would shrink draw by draw.
randoms = st.builds(Random, st.integers(0, 2**32 - 1))


def stream(name: str, random: Random, size: int = 6) -> list[bytes]:
    dialect, layout = LAYOUTS[name]
    return [dialect.encode(random_frame(layout, random)) for _ in range(size)]


@layouts
def test_a_whole_frame_in_one_feed_is_one_frame_and_nothing_is_kept(name: str) -> None:
    dialect, layout = LAYOUTS[name]
    decoder = dialect.decoder()
    (frame,) = decoder.feed(dialect.encode(random_frame(layout, Random(1))))
    assert isinstance(frame, Frame)
    assert frame.layout is layout
    assert decoder.tally.dropped == {}
    assert decoder.tally.frames == 1


@layouts
def test_byte_by_byte_gives_the_frame_with_its_last_byte(name: str) -> None:
    dialect, layout = LAYOUTS[name]
    decoder = dialect.decoder()
    data = dialect.encode(random_frame(layout, Random(2)))
    events = [decoder.feed(bytes([byte])) for byte in data]
    assert [len(e) for e in events] == [0] * (len(data) - 1) + [1]


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms)
def test_decoding_what_was_encoded_gives_the_frame_under_any_split(name: str, random: Random) -> None:
    dialect, layout = LAYOUTS[name]
    sent = [random_frame(layout, random) for _ in range(4)]
    events = fed(dialect.decoder(), split(b"".join([dialect.encode(frame) for frame in sent]), random))
    assert [replace(frame, payload=b"") for frame in frames_of(events)] == sent
    assert len(events) == len(sent)
    assert [dialect.encode(frame) for frame in frames_of(events)] == [dialect.encode(frame) for frame in sent]


@dialects
@settings(max_examples=40, deadline=None)
@given(randoms)
def test_frames_of_all_lengths_are_told_apart_in_one_stream(name: str, random: Random) -> None:
    dialect = DIALECTS[name]
    sent = [random_frame(random.choice(dialect.layouts), random) for _ in range(6)]
    decoder = dialect.decoder()
    heard = frames_of(fed(decoder, split(b"".join(map(dialect.encode, sent)), random)))
    assert all(a.layout is b.layout for a, b in zip(heard, sent, strict=True))
    assert decoder.tally.frames == len(sent)


@dialects
@settings(max_examples=80, deadline=None)
@given(st.data(), st.lists(st.binary(max_size=300), max_size=6))
def test_no_input_raises_or_makes_the_buffer_grow(name: str, data: st.DataObject, pieces: list[bytes]) -> None:
    dialect = DIALECTS[name]
    decoder = dialect.decoder()
    starts = [b"\x42\x4d", b"\x42\x4d\x00\x24", b"\xaa\xc0", b"\xaa", b"\x7e", b"\x7e\x00\x03\x00\x28", b"\x7d"]
    fed_bytes = 0
    for piece in pieces:
        spoilt = piece + data.draw(st.sampled_from(starts))
        events = decoder.feed(spoilt)
        fed_bytes += len(spoilt)
        assert all(isinstance(event, Frame | Damage) for event in events)
        assert decoder.held < dialect.longest
        assert decoder.tally.bytes == fed_bytes
    assert reference(name, b"".join(pieces)) == [f.payload for f in frames_of(fed(dialect.decoder(), pieces))]


@dialects
@settings(max_examples=40, deadline=None)
@given(randoms)
def test_what_comes_out_does_not_depend_on_the_split(name: str, random: Random) -> None:
    parts = [random.choice((random.randbytes(random.randrange(40)), b"\x42\x4d\x00", b"\xaa\xc0", b"\x7e\x00"))]
    for unit in [u for layout in DIALECTS[name].layouts for u in stream(layout.name, random, 3)]:
        at = random.randrange(len(unit))
        parts += random.choice(([unit], [unit], [unit[:at], unit[at + 1 :]], [unit, random.randbytes(5)], [unit[:at]]))
    data = b"".join(parts)
    whole = DIALECTS[name].decoder().feed(data)
    for pieces in (list(split(data, random)), [bytes([b]) for b in data]):
        other = fed(DIALECTS[name].decoder(), pieces)
        assert frames_of(other) == frames_of(whole)
        assert reasons_of(other) == reasons_of(whole)


@layouts
@settings(max_examples=40, deadline=None)
@given(randoms)
def test_rubbish_between_frames_is_one_event_a_stretch_and_costs_no_frame(name: str, random: Random) -> None:
    dialect, _ = LAYOUTS[name]
    plain = [b for b in range(256) if b not in (0x42, 0xAA, 0x7E, 0x7D, 0x00)]
    units = stream(name, random)
    rubbish = [bytes(random.choices(plain, k=random.randrange(1, 80))) for _ in units]
    data = units[0] + b"".join([rub + unit for rub, unit in zip(rubbish[1:], units[1:], strict=True)])
    events = fed(dialect.decoder(), split(data, random))
    assert [dialect.encode(frame) for frame in frames_of(events)] == units
    assert reasons_of(events) == ["frame", "rubbish"] * (len(units) - 1) + ["frame"]


@dialects
def test_reset_forgets_half_a_frame_and_decodes_the_next_one(name: str) -> None:
    dialect = DIALECTS[name]
    first, second = stream(dialect.layouts[0].name, Random(5), 2)
    decoder = dialect.decoder()
    decoder.feed(first[:-1])
    assert decoder.held > 0
    decoder.reset()
    assert decoder.held == 0
    assert [type(event) for event in decoder.feed(second)] == [Frame]


@dialects
def test_a_few_bytes_before_the_first_frame_are_no_damage(name: str) -> None:
    dialect = DIALECTS[name]
    unit = stream(dialect.layouts[0].name, Random(6), 1)[0]
    assert damage_of(dialect.decoder().feed(b"\x01\x02\x03" + unit)) == []
    assert damage_of(dialect.decoder().feed(b"\x01\x02\x03\x04" + unit)) == [Damage("rubbish", 4)]


@dialects
def test_a_million_bytes_of_rubbish_are_one_event_and_nothing_is_kept(name: str) -> None:
    dialect = DIALECTS[name]
    decoder = dialect.decoder()
    for _ in range(100):
        decoder.feed(b"\x55" * 10_000)
    assert decoder.tally.dropped == {"rubbish": 1}
    assert decoder.held == 0
