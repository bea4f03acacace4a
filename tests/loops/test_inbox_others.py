"""Topics outside of our own tree: news is taken, what a broker had kept is not, nonsense is counted."""

from motekeep.edges.ports import Received
from motekeep.loops.inbox import Inbox
from motekeep.measure.climate import from_message
from motekeep.message.topics import Topics


def inbox(taken: list[float]) -> Inbox:
    def read(payload: bytes) -> None:
        taken.append(from_message(payload, "mqtt").rh_pct)

    return Inbox(Topics("motekeep", "quarry", "gate"), ["north"], lambda _s, _n: None, {"weather/mast": read})


def test_fresh_climate_is_taken() -> None:
    taken: list[float] = []
    assert inbox(taken).receive(Received("weather/mast", b'{"rh": 61.5}'))
    assert taken == [61.5]


def test_a_retained_climate_is_of_unknown_age_and_passed_over() -> None:
    taken: list[float] = []
    box = inbox(taken)
    assert box.receive(Received("weather/mast", b'{"rh": 61.5}', retained=True))
    assert taken == []
    assert box.bad == 0


def test_an_absurd_climate_is_counted_and_raises_nothing() -> None:
    taken: list[float] = []
    box = inbox(taken)
    assert not box.receive(Received("weather/mast", b'{"rh": 400}'))
    assert not box.receive(Received("weather/mast", b"\xff"))
    assert (taken, box.bad) == ([], 2)
