"""The bytes of commands, written out by hand (from memory, common practice), and their recognition."""

from random import Random

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from motekeep.wire.commands import NAMES, CommandListener
from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Commands
from streams import split

BYTES = {
    ("bm", "sleep"): "424de400000173",
    ("bm", "wake"): "424de400010174",
    ("bm", "read"): "424de200000171",
    ("bm", "stream"): "424de100010171",
    ("bm", "poll_mode"): "424de100000170",
    ("bm-climate", "sleep"): "424de400000173",
    ("aa", "sleep"): "aab406010000000000000000000000ffff05ab",
    ("aa", "wake"): "aab406010100000000000000000000ffff06ab",
    ("aa", "read"): "aab404000000000000000000000000ffff02ab",
    ("aa", "stream"): "aab402010000000000000000000000ffff01ab",
    ("aa", "poll_mode"): "aab402010100000000000000000000ffff02ab",
    ("stuffed", "sleep"): "7e000100fe7e7e001000ef7e",
    ("stuffed", "wake"): "ff7e007d3100ee7e7e0000020103f97e",
    ("stuffed", "read"): "7e000300fc7e",
    ("stuffed", "stream"): "7e0000020103f97e",
    ("stuffed", "status"): "7e00d201012b7e",
}
ALL = [
    (dialect.name, name, sent)
    for dialect in DIALECTS.values()
    for name in NAMES
    if (sent := getattr(dialect.commands, name)) is not None
]


@pytest.mark.parametrize(("dialect", "command"), BYTES)
def test_commands_are_these_bytes(dialect: str, command: str) -> None:
    assert getattr(DIALECTS[dialect].commands, command).hex() == BYTES[dialect, command]


@pytest.mark.parametrize(("dialect", "name", "sent"), ALL)
def test_each_command_is_heard_by_its_name_byte_by_byte(dialect: str, name: str, sent: bytes) -> None:
    listener = CommandListener(DIALECTS[dialect].commands)
    heard = [listener.understand(bytes([byte])) for byte in sent]
    assert heard[-1] == [NAMES[name]]
    assert not any(heard[:-1])
    assert listener.held == 0


@pytest.mark.parametrize("dialect", DIALECTS)
def test_what_is_sent_on_opening_wakes_the_sensor_and_makes_it_measure(dialect: str) -> None:
    heard = CommandListener(DIALECTS[dialect].commands).understand(DIALECTS[dialect].start)
    assert heard == (["wake"] if DIALECTS[dialect].polled else ["wake", "stream"])


@pytest.mark.parametrize("dialect", DIALECTS)
@settings(max_examples=25, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_commands_are_found_among_rubbish_under_any_split(dialect: str, seed: int) -> None:
    random = Random(seed)
    commands = [(NAMES[name], sent) for owner, name, sent in ALL if owner == dialect]
    sequence = random.choices(commands, k=8)
    rubbish = bytes([b for b in range(1, 0x40) if b != 0x42])
    data = b"".join([bytes(random.choices(rubbish, k=random.randrange(5))) + sent for _, sent in sequence])
    listener = CommandListener(DIALECTS[dialect].commands)
    assert [name for piece in split(data, random) for name in listener.understand(piece)] == [n for n, _ in sequence]


@pytest.mark.parametrize("dialect", DIALECTS)
@settings(max_examples=25, deadline=None)
@given(st.lists(st.binary(max_size=100), max_size=5))
def test_no_input_raises_or_makes_the_listener_grow(dialect: str, pieces: list[bytes]) -> None:
    listener = CommandListener(DIALECTS[dialect].commands)
    longest = max(len(sent) for owner, _, sent in ALL if owner == dialect)
    for piece in pieces:
        listener.understand(piece)
        assert listener.held < longest


def test_a_sensor_without_commands_hears_nothing() -> None:
    listener = CommandListener(Commands())
    assert listener.understand(b"\x42\x4d\xe4\x00\x00\x01\x73") == []
    assert listener.held == 0
