"""The model of a UART at another rate."""

from hypothesis import given
from hypothesis import strategies as st

from motekeep.wire.uart import leading_bytes, misread


@given(st.binary(max_size=60), st.floats(0.97, 1.03))
def test_at_the_right_rate_the_bytes_are_those_sent_whatever_the_clocks_differ(sent: bytes, ratio: float) -> None:
    # Three per cent over ten bits is less than half a bit: common practice for 8N1.
    assert misread(sent, ratio) == sent


@given(st.binary(max_size=60), st.floats(0.05, 16))
def test_no_rate_raises_or_makes_more_bytes_than_there_is_time_for(sent: bytes, ratio: float) -> None:
    assert len(misread(sent, ratio)) <= len(sent) * 10 * max(ratio, 1) / 9.5 + 3


def test_at_twice_the_rate_a_byte_is_its_own_bits_doubled() -> None:
    # 42 on the line: 0 (start) 0 1 0 0 0 0 1 0 1 (stop); doubled, the first byte takes 0 | 0 0 0 1 1 0 0 0.
    assert misread(b"\x42", 2)[0] == 0b00011000


def test_far_too_fast_every_low_level_is_a_zero_byte() -> None:
    assert set(misread(b"\x42\x4d\x00\x1c", 12)) == {0}


def test_the_known_beginning_of_a_burst_does_not_depend_on_what_follows() -> None:
    lead = leading_bytes(b"\x42\x4d\x00\x1c", 2)
    assert len(lead) >= 4
    for rest in (b"\x00\x05", b"\xff\xff", b"\x12\x34"):
        assert misread(b"\x42\x4d\x00\x1c" + rest, 2).startswith(lead)
