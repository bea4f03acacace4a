"""What the bytes of each dialect mean, by bytes written out by hand. Layouts from memory, common practice."""

from dataclasses import replace
from random import Random
from struct import pack

import pytest

from motekeep.wire import aa, bm, bm_climate, stuffed
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Damage, Frame
from streams import LAYOUTS, frames_of, random_frame


def only_frame(dialect: str, data: bytes) -> Frame:
    (frame,) = DIALECTS[dialect].decoder().feed(data)
    assert isinstance(frame, Frame)
    return frame


def framed(payload: str) -> bytes:
    """Header, length and sum around words in hex, by the arithmetic alone."""
    words = bytes.fromhex(payload)
    body = b"BM" + (len(words) + 2).to_bytes(2, "big") + words
    return body + sum(body).to_bytes(2, "big")


def test_bm_frame_with_the_published_sum() -> None:
    # Frame checksum: derived from the frame arithmetic (header, length 28, words, 16-bit sum), value 0x02c0 = 704.
    data = bytes.fromhex("424d001c00050008000900050008000904b00154003e00080002000197 00 02c0")
    frame = only_frame("bm", data)
    assert frame.layout is bm.BM_28
    assert frame.mass == frame.mass_ambient == (5, 8, 9)
    assert frame.counts == (1200, 340, 62, 8, 2, 1)
    assert (frame.revision, frame.error) == (0x97, 0)
    assert (frame.rh_pct, frame.temperature_c) == (None, None)
    assert frame.payload == data[4:-2]
    assert DIALECTS["bm"].encode(frame) == data
    assert DIALECTS["bm"].encode(replace(frame, payload=b"")) == data


def test_bm_length_20_has_six_masses_and_no_counts() -> None:
    frame = only_frame("bm", framed("0001 0002 0003 0004 0005 0006 aaaa bbbb 9103"))
    assert frame.layout is bm.BM_20
    assert frame.mass == (1, 2, 3)
    assert frame.mass_ambient == (4, 5, 6)
    assert frame.counts == ()
    assert (frame.revision, frame.error) == (0x91, 3)


def test_bm_length_36_has_signed_temperature_and_humidity_behind_the_gas_word() -> None:
    data = framed("0001 0002 0003 0004 0005 0006 0600 0500 0400 0300 0200 0100 cccc ffce 02c9 dddd 9100")
    frame = only_frame("bm", data)
    assert frame.layout is bm.BM_36
    assert frame.counts == (0x600, 0x500, 0x400, 0x300, 0x200, 0x100)
    assert frame.temperature_c == -5.0
    assert frame.rh_pct == 71.3
    assert DIALECTS["bm"].encode(frame) == data  # the gas word and the spare come back from the payload


def test_bm_climate_has_four_counts_and_the_climate() -> None:
    data = framed("0001 0002 0003 0004 0005 0006 0600 0500 0400 0300 ff9c 03e8 9100")
    frame = only_frame("bm-climate", data)
    assert frame.layout is bm_climate.BM_CLIMATE
    assert frame.counts == (0x600, 0x500, 0x400, 0x300)
    assert frame.temperature_c == -10.0
    assert frame.rh_pct == 100.0


def test_aa_has_masses_in_tenths_little_endian_and_its_id_as_revision() -> None:
    data = bytes.fromhex("aac0 d404 3a0a a160 1d ab")
    frame = only_frame("aa", data)
    assert frame.layout is aa.AA
    assert frame.mass == (123.6, 261.8)
    assert frame.counts == ()
    assert frame.revision == 0xA160
    assert frame.payload == data[2:8]


def stuffed_unit(command: int, state: int, data: bytes) -> bytes:
    body = bytes([0, command, state, len(data)]) + data
    body += bytes([255 - sum(body) % 256])
    for special in (0x7D, 0x7E, 0x11, 0x13):  # the escape itself first
        body = body.replace(bytes([special]), bytes([0x7D, special ^ 0x20]))
    return b"\x7e" + body + b"\x7e"


def ten_floats(*values: float) -> bytes:
    return pack(">10f", *values)


VALUES = ten_floats(1.5, 2.5, 3.5, 4.5, 10.0, 15.0, 17.0, 17.5, 18.0, 0.6)


def test_stuffed_numbers_that_accumulate_upwards_become_counts_above_a_size_in_a_decilitre() -> None:
    frame = only_frame("stuffed", stuffed_unit(3, 0, VALUES))
    assert frame.layout is stuffed.STUFFED
    assert frame.mass == (1.5, 2.5, 3.5, 4.5)
    assert frame.counts == (1800, 800, 300, 100, 50)
    assert frame.layout.sizes_um == (0.3, 0.5, 1.0, 2.5, 4.0)
    assert frame.payload == VALUES


def test_stuffed_float_rounding_of_the_sensor_makes_no_negative_count() -> None:
    frame = only_frame("stuffed", stuffed_unit(3, 0, ten_floats(1, 1, 1, 1, 10, 15, 17, 18.000002, 18, 0.6)))
    assert frame.counts[-1] == 0.0


def test_stuffed_specials_are_escaped_on_the_way_out_and_back() -> None:
    sent = replace(random_frame(stuffed.STUFFED, Random(1), errors=False), mass=(0x7D7E / 64, 0x1113 / 64, 0.0, 0.0))
    data = stuffed.encode(sent)
    assert data.count(b"\x7e") == 4
    assert b"\x11" not in data
    assert b"\x13" not in data
    assert replace(only_frame("stuffed", data), payload=b"") == sent


def test_stuffed_status_word_stays_on_the_frames_until_the_next_one() -> None:
    decoder = DIALECTS["stuffed"].decoder()
    values = stuffed_unit(3, 0, VALUES)
    faulty = stuffed_unit(0xD2, 0, pack(">Ix", 1 << 21 | 1 << 4 | 1))  # the lowest bit has no meaning here
    well = stuffed_unit(0xD2, 0, bytes(5))
    frames = frames_of(decoder.feed(values + faulty + values + values + well + values))
    fan = stuffed.FAN_SPEED | stuffed.FAN
    assert [frame.error for frame in frames] == [0, fan, fan, 0]


def test_stuffed_state_of_an_answer_with_numbers_is_an_error_of_the_sensor() -> None:
    assert only_frame("stuffed", stuffed_unit(3, 0x80, VALUES)).error == 0x80 << stuffed.STATE_AT


def test_stuffed_refusal_without_numbers_is_counted_and_is_neither_data_nor_damage() -> None:
    decoder = DIALECTS["stuffed"].decoder()
    assert decoder.feed(stuffed_unit(3, 0x43, b"") + stuffed_unit(3, 0, b"")) == []
    assert decoder.tally.dropped == {"refused": 1}


@pytest.mark.parametrize("bad", [float("nan"), float("inf"), float("-inf")])
def test_stuffed_numbers_that_are_none_are_rubbish(bad: float) -> None:
    data = stuffed_unit(3, 0, ten_floats(1, 1, bad, 1, 1, 1, 1, 1, 1, 1))
    events = DIALECTS["stuffed"].decoder().feed(data + stuffed_unit(3, 0, VALUES))
    assert [type(event) for event in events] == [Damage, Frame]


def test_stuffed_values_of_another_length_are_damage() -> None:
    assert DIALECTS["stuffed"].decoder().feed(stuffed_unit(3, 0, bytes(20))) == [Damage("length", 27)]


@pytest.mark.parametrize("name", LAYOUTS)
def test_encode_clips_to_what_the_fields_can_carry(name: str) -> None:
    dialect, layout = LAYOUTS[name]
    plain = random_frame(layout, Random(3))
    for value in (1e300, -1e300):
        loud = replace(
            plain,
            mass=(value,) * len(layout.mass),
            mass_ambient=(value,) * len(plain.mass_ambient),
            counts=(value,) * len(layout.sizes_um),
            rh_pct=value if layout.climate else None,
            temperature_c=value if layout.climate else None,
        )
        frame = only_frame(dialect.name, dialect.encode(loud))
        if layout.count_top is not None:
            assert set(frame.counts) == ({layout.count_top} if value > 0 else {0.0})
        if layout.climate:
            assert frame.temperature_c == (3276.7 if value > 0 else -3276.8)
            assert frame.rh_pct == (6553.5 if value > 0 else 0.0)
        if layout.name != "stuffed":
            assert len(set(frame.mass)) == 1
            assert frame.mass[0] == (65535 * layout.mass_resolution if value > 0 else 0)


@pytest.mark.parametrize("name", DIALECTS)
def test_a_frame_of_another_layout_is_refused_in_words(name: str) -> None:
    other = "aa" if name != "aa" else "stuffed"
    with pytest.raises(ValueError, match=f"layout {other} cannot be encoded"):
        DIALECTS[name].encode(random_frame(LAYOUTS[other][1], Random(4)))


@pytest.mark.parametrize("name", LAYOUTS)
def test_layouts_say_what_their_frames_hold(name: str) -> None:
    _, layout = LAYOUTS[name]
    frame = random_frame(layout, Random(5))
    assert len(frame.mass) == len(layout.mass)
    assert len(frame.counts) == len(layout.sizes_um)
    assert list(layout.sizes_um) == sorted(layout.sizes_um)
    assert (len(frame.mass_ambient) > 0) == layout.ambient
    assert (frame.rh_pct is not None) == layout.climate


@pytest.mark.parametrize("name", DIALECTS)
def test_the_longest_frame_of_a_dialect_is_stated(name: str) -> None:
    dialect = DIALECTS[name]
    assert dialect.decoder().longest == dialect.longest  # type: ignore[attr-defined]
    if name != "stuffed":
        assert max(len(dialect.encode(random_frame(lay, Random(6)))) for lay in dialect.layouts) == dialect.longest
