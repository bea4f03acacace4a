"""Silence, another dialect, a wrong baud rate and noise are told apart, and doubt is admitted."""

from random import Random

import pytest

from motekeep.wire.bm import BM_28
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame
from motekeep.wire.garbage import LOOKED_AT, Kind, entropy, explain, headers, interior_of
from motekeep.wire.uart import misread


def bursts(name: str, size: int = 30) -> list[bytes]:
    random = Random(11)
    made = []
    for _ in range(size):
        fine = float(random.randrange(5, 30))
        if name == "aa":
            frame = Frame(DIALECTS["aa"].layouts[0], (fine, fine + random.randrange(9)), (), b"", revision=0x1234)
        else:
            counts = (40 * fine + random.randrange(60), 10 * fine, 60.0, 8.0, 2.0, 1.0)
            frame = Frame(BM_28, (fine - 3, fine, fine + 2), counts, b"", (fine - 3, fine, fine + 2), revision=0x97)
        made.append(DIALECTS[name].encode(frame))
    return made


def heard(name: str, sent_at: int, read_at: int) -> bytes:
    return b"".join([misread(burst, read_at / sent_at) for burst in bursts(name)])


@pytest.mark.parametrize("read_at", [2400, 4800, 19200, 38400, 57600, 115200])
def test_bm_read_at_a_wrong_rate_is_a_wrong_rate(read_at: int) -> None:
    found = explain(heard("bm", 9600, read_at), "bm", read_at)
    assert found.kind is Kind.WRONG_BAUD
    if read_at in (4800, 19200, 38400):
        assert "set the line to 9600" in found.reason
        assert found.confidence >= 0.9


@pytest.mark.parametrize("read_at", [19200, 38400, 57600, 115200])
def test_aa_read_too_fast_is_a_wrong_rate(read_at: int) -> None:
    assert explain(heard("aa", 9600, read_at), "aa", read_at).kind is Kind.WRONG_BAUD


@pytest.mark.parametrize(("name", "read_at"), [("bm", 1200), ("aa", 1200), ("aa", 2400)])
def test_read_so_slowly_that_little_is_left_the_answer_is_unsure_and_names_the_rate(name: str, read_at: int) -> None:
    found = explain(heard(name, 9600, read_at), name, read_at)
    assert found.confidence <= 0.5
    assert f"a rate above {read_at} baud" in found.reason


def test_another_known_dialect_is_named() -> None:
    found = explain(b"".join(bursts("aa")), "bm", 9600)
    assert found.kind is Kind.OTHER_DIALECT
    assert "configured as bm, sounds like aa" in found.reason
    assert found.confidence > 0.9


def test_bm_configured_as_bm_climate_is_another_dialect() -> None:
    found = explain(b"".join(bursts("bm")), "bm-climate", 9600)
    assert found.kind is Kind.OTHER_DIALECT
    assert "sounds like bm:" in found.reason


def test_the_configuration_is_believed_while_the_bytes_do_not_tell() -> None:
    frame = Frame(BM_28, (5.0, 8.0, 9.0), (8000.0, 3300.0, 1200.0, 900.0, 400.0, 300.0), b"", (5.0, 8.0, 9.0))
    for name in ("bm", "bm-climate"):
        assert explain(DIALECTS["bm"].encode(frame), name, 9600).kind is Kind.FRAMES


def test_good_frames_are_frames() -> None:
    found = explain(b"".join(bursts("bm")), "bm", 9600)
    assert found.kind is Kind.FRAMES
    assert found.confidence > 0.95


def test_an_unknown_protocol_comes_again_and_again() -> None:
    random = Random(5)
    lines = [
        b"T=%d.%d RH=%d\r\n" % (random.randrange(30), random.randrange(9), random.randrange(99)) for _ in range(40)
    ]
    found = explain(b"".join(lines), "bm", 9600)
    assert found.kind is Kind.OTHER_DIALECT
    assert found.confidence <= 0.5


@pytest.mark.parametrize("seed", range(8))
def test_random_bytes_are_noise(seed: int) -> None:
    found = explain(Random(seed).randbytes(2000), "bm", 9600)
    assert found.kind is Kind.NOISE
    assert found.confidence >= 0.7


@pytest.mark.parametrize("seed", range(8))
def test_the_glitches_of_an_open_line_are_noise_but_not_surely(seed: int) -> None:
    random = Random(seed)
    glitches = bytes(random.choices((0xFF, 0xFE, 0xFC, 0xF8, 0xF0, 0xE0, 0x80, 0x00), (9, 5, 3, 2, 2, 1, 1, 4), k=800))
    found = explain(glitches, "bm", 9600)
    assert found.kind is Kind.NOISE
    assert found.confidence < 0.5


def test_a_line_held_low_is_named_beside_the_wrong_rate() -> None:
    found = explain(bytes(100), "bm", 9600)
    assert found.kind is Kind.WRONG_BAUD
    assert "held low or inverted" in found.reason


def test_silence_says_whether_the_sensor_was_asked() -> None:
    assert "it was asked" in explain(b"", "stuffed", 115200).reason
    assert "not one byte came" in explain(b"", "bm", 9600).reason
    assert explain(b"", "bm", 9600).kind is Kind.SILENCE


def test_a_few_bytes_are_too_few() -> None:
    found = explain(b"\x12\x34\x56", "bm", 9600)
    assert found.kind is Kind.NOISE
    assert found.confidence < 0.5


@pytest.mark.parametrize("seed", range(12))
def test_no_input_raises(seed: int) -> None:
    random = Random(seed)
    alphabet = random.choice((range(256), (0, 255), (0, 0x42, 0x4D, 0x1C), (0xAA, 0xC0, 0xAB), (0x7E, 0x7D, 0x03)))
    data = bytes(random.choices(alphabet, k=random.choice((1, 7, 8, 9, 100, 3 * LOOKED_AT))))
    for name in DIALECTS:
        assert 0.0 <= explain(data, name, DIALECTS[name].baud).confidence <= 1.0


def test_headers_are_what_every_frame_begins_with() -> None:
    known = {(name, header.hex()) for name, header in headers()}
    assert known == {
        ("bm", "424d0014"),
        ("bm", "424d001c"),
        ("bm", "424d0024"),
        ("bm-climate", "424d001c"),
        ("aa", "aac0"),
    }


def test_interior_runs_leave_out_what_may_go_on_outside_the_byte() -> None:
    assert interior_of(0b00011000) == (2,)
    assert interior_of(0b01011000) == (1, 1, 2)
    assert interior_of(0b11110000) == interior_of(0) == ()


def test_entropy_is_eight_bits_for_all_bytes_alike_and_none_for_one() -> None:
    assert entropy(bytes(range(256))) == 8.0
    assert entropy(bytes(10)) == 0.0
