"""The order of a roll, over a wire of paper: killed at any point, asleep, cut off, and going on."""

import json
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from emulated_fleet import Gateway, document_text
from ferry.rolling import offer
from moteferry.roll.conductor import Conductor, Course, Outcome
from moteferry.roll.fleet import Fleet, Seat
from moteferry.roll.gate import Rule, Step
from moteferry.roll.link import Came, Down, LinkEvent, Taken, Up
from moteferry.roll.offer import Offer, Target
from moteferry.roll.register import Register
from moteferry.roll.undo import accepted_in
from moteferry.roll.waves import split
from motekeep.message.topics import Topics

START = 1_800_000_000.0
RULE = Rule(hold_s=600, patience_s=300)


class KilledError(BaseException):
    """SIGKILL, as far as a test in one process can tell."""


@dataclass
class Paper:
    """Broker, gateways and time in one. Each call of `events` takes `turn_s`; past `kill_at` of them it kills."""

    gateways: dict[Target, Gateway]
    now: float = START
    turn_s: float = 30.0
    kill_at: int | None = None
    up: bool = True
    retained: dict[str, str] = field(default_factory=dict)
    script: Callable[["Paper"], None] = lambda _: None
    inbox: list[LinkEvent] = field(default_factory=list)
    taken: list[str] = field(default_factory=list)
    listening_since: float = START - 1000
    turns: int = 0

    @property
    def idle(self) -> bool:
        return True

    @property
    def listening_s(self) -> float:
        return self.now - self.listening_since if self.up else 0.0

    def send(self, messages: Iterable[tuple[str, str]]) -> None:
        for topic, body in messages:
            self.retained[topic] = body
            self.taken.append(topic)
            self.inbox.append(Taken(topic, None))
            _, site, name, _, sensor, _ = topic.split("/")
            gateway = self.gateways[Target(site, name, sensor)]
            if not body or gateway.behaviour == "silent":
                continue
            gateway.take(json.loads(body)["document"].encode())
            self.say(gateway)

    def drop_waiting(self) -> list[str]:
        return []

    def events(self, timeout_s: float) -> list[LinkEvent]:
        self.turns += 1
        self.now += self.turn_s
        if self.kill_at is not None and self.turns > self.kill_at:
            raise KilledError
        assert self.turns < 2000, "the roll does not end"
        self.script(self)
        if self.up:
            for gateway in self.gateways.values():
                self.say_health(gateway)
        found, self.inbox = self.inbox, []
        return found if self.up else []

    def say(self, gateway: Gateway) -> None:
        target = gateway.target
        topic = Topics("motekeep", target.site, target.gateway).calibration_state(target.sensor)
        document = gateway.state()
        if document["in_force"]:
            document["in_force"]["since"] = None  # a gateway's own clock is not that of this paper
        self.inbox.append(Came(topic, json.dumps(document).encode(), retained=False))

    def say_health(self, gateway: Gateway) -> None:
        topic = Topics("motekeep", gateway.target.site, gateway.target.gateway).health
        self.inbox.append(Came(topic, json.dumps(gateway.health()).encode(), retained=False))


@dataclass
class Table:
    """A fleet of `count`, a register, and rolls on it."""

    folder: Path
    count: int = 6
    waves: str = "1,50%,rest"

    def __post_init__(self) -> None:
        self.offers: list[Offer] = [offer(8, Target("quarry", f"gate-{n}", "north")) for n in range(self.count)]
        self.paper = Paper({o.target: Gateway(o.target) for o in self.offers})
        self.register = Register(self.folder / "register.db")
        with self.register.transaction():
            self.register.keep(self.offers)
            self.roll = self.register.roll("roll", "f", self.waves, START)

    def gateway(self, n: int) -> Gateway:
        return self.paper.gateways[self.offers[n].target]

    def run(self) -> Outcome:
        """A process of its own: knows what the register and the retained messages say."""
        fleet = Fleet("motekeep", [o.target for o in self.offers])
        self.paper.inbox.clear()
        for gateway in self.paper.gateways.values():
            self.paper.say_health(gateway)
            if gateway.in_force or gateway.refused:
                self.paper.say(gateway)
        for event in self.paper.inbox:
            assert isinstance(event, Came)
            fleet.hear(event.topic, event.payload, retained=True, now=self.paper.now)
        self.paper.inbox.clear()
        self.paper.listening_since = self.paper.now
        # every turn judges all: the steady clock knows nothing of half minutes on paper
        course = Course(self.roll, "motekeep", split(self.offers, self.waves), RULE, sweep_s=0.0)
        return Conductor(course, fleet, self.register, self.paper, wall=lambda: self.paper.now).run()

    def events(self, n: int) -> list[str]:
        return [e.event for e in self.register.events(target=self.offers[n].target)]


@pytest.fixture
def table(tmp_path: Path) -> Table:
    return Table(tmp_path)


def test_a_roll_goes_wave_after_wave_and_holds_each(table: Table) -> None:
    outcome = table.run()
    assert outcome.done
    assert len(outcome.passed) == 6
    assert table.paper.now - START >= 3 * RULE.hold_s
    names = [(e.target.gateway, e.event) for e in table.register.events()]
    assert names.index(("gate-0", "passed")) < names.index(("gate-1", "offered"))
    assert names.index(("gate-3", "passed")) < names.index(("gate-4", "offered"))


KILLS = {"kills": st.lists(st.integers(1, 40), max_size=4), "silent": st.integers(0, 5)}


@settings(max_examples=8)
@given(**KILLS)
def test_killed_at_any_point_it_goes_on_and_no_device_sees_a_second_issue(
    tmp_path_factory: pytest.TempPathFactory, kills: list[int], silent: int
) -> None:
    kill_and_go_on(tmp_path_factory.mktemp("roll"), kills, silent)


@pytest.mark.long
@settings(max_examples=300)
@given(**KILLS)
def test_killed_at_any_point_it_goes_on_the_long_form(
    tmp_path_factory: pytest.TempPathFactory, kills: list[int], silent: int
) -> None:
    kill_and_go_on(tmp_path_factory.mktemp("roll"), kills, silent)


def kill_and_go_on(folder: Path, kills: list[int], silent: int) -> None:
    table = Table(folder)
    table.gateway(silent).behaviour = "silent"  # answers nothing until the last run
    for turns in kills:
        table.paper.kill_at, table.paper.turns = turns, 0
        try:
            outcome = table.run()
        except KilledError:
            continue
        assert [f.step for f in outcome.failures] == [Step.SILENT]
    table.paper.kill_at, table.paper.turns = None, 0
    table.gateway(silent).behaviour = "well"
    assert table.run().done
    for n in range(table.count):
        assert {issue for issue, _ in table.gateway(n).offers} == {8}
        assert len(set(table.gateway(n).offers)) == 1
        assert table.events(n).count("accepted") == 1
        assert table.events(n).count("passed") == 1


def test_a_soak_that_began_before_a_sleep_is_over_after_it(table: Table) -> None:
    table.paper.kill_at = 2
    with pytest.raises(KilledError):
        table.run()
    assert table.events(0) == ["offered", "accepted"]
    table.paper.kill_at, table.paper.turns, table.paper.now = None, 0, table.paper.now + 8 * 3600
    table.paper.script = lambda paper: setattr(paper, "kill_at", 3)
    with pytest.raises(KilledError):
        table.run()
    assert table.events(0) == ["offered", "accepted", "passed"]
    assert "offered" in table.events(1)


def test_what_went_wrong_during_the_sleep_stops_it(table: Table) -> None:
    table.paper.kill_at = 2
    with pytest.raises(KilledError):
        table.run()
    table.gateway(0).withdraw(None)
    table.paper.kill_at, table.paper.turns = None, 0
    outcome = table.run()
    assert [(f.target.gateway, f.step) for f in outcome.failures] == [("gate-0", Step.WITHDRAWN)]
    assert table.events(1) == []


def test_a_withdrawal_in_an_earlier_wave_stops_the_later_one(table: Table) -> None:
    def withdraw_when_the_second_wave_soaks(paper: Paper) -> None:
        if "accepted" in table.events(1) and table.gateway(0).in_force:
            table.gateway(0).withdraw(None)
            paper.say(table.gateway(0))

    table.paper.script = withdraw_when_the_second_wave_soaks
    outcome = table.run()
    assert [(f.target.gateway, f.step) for f in outcome.failures] == [("gate-0", Step.WITHDRAWN)]
    assert table.events(4) == []


def test_a_link_that_breaks_for_an_hour_costs_only_time(table: Table) -> None:
    def cut(paper: Paper) -> None:
        if paper.turns == 3:
            paper.up = False
            paper.inbox = [Down("the connection broke")]
        elif paper.turns == 120:
            paper.up, paper.listening_since = True, paper.now
            paper.inbox = [Up(2)]

    table.paper.script = cut
    assert table.run().done


def test_silence_takes_the_offer_back_and_says_who(table: Table) -> None:
    table.gateway(0).behaviour = "silent"
    outcome = table.run()
    assert [(f.target.gateway, f.why) for f in outcome.failures] == [("gate-0", "no answer in 5 min")]
    assert table.paper.retained[Topics("motekeep", "quarry", "gate-0").calibration_offer("north")] == ""
    assert table.events(0) == ["offered", "silent"]
    assert len(outcome.open) == 5


def test_who_refused_is_offered_it_again_once_somebody_repeats_the_roll(table: Table) -> None:
    table.gateway(0).behaviour = "refuses"
    assert [f.step for f in table.run().failures] == [Step.REFUSED]
    table.gateway(0).behaviour = "well"
    assert table.run().done
    assert table.events(0) == ["offered", "refused", "offered", "accepted", "passed"]


def test_the_state_before_is_that_of_the_first_offer_even_after_a_kill(table: Table) -> None:
    """Else a document that made a gateway ill before the kill would be judged against the illness that it made."""
    table.gateway(0).behaviour = "silent"  # as far as the roll hears
    table.paper.kill_at = 2
    with pytest.raises(KilledError):
        table.run()
    table.gateway(0).behaviour = "well"
    table.gateway(0).take(document_text(table.offers[0].target, 8, 0.9).encode())
    table.gateway(0).fail()
    table.paper.kill_at, table.paper.turns = None, 0
    [failure] = table.run().failures
    assert (failure.target.gateway, failure.step) == ("gate-0", Step.WORSE)


def test_a_device_that_took_it_as_it_was_taken_back_is_undone_to_what_it_had_before(table: Table) -> None:
    earlier = offer(7, table.offers[0].target)
    table.gateway(0).take(earlier.document.encode())
    table.gateway(0).behaviour = "silent"
    assert [f.step for f in table.run().failures] == [Step.SILENT]
    table.gateway(0).behaviour = "well"
    table.gateway(0).take(table.offers[0].document.encode())
    assert table.run().done
    befores = {o.target: was for o, was in accepted_in(table.register, table.roll)}
    assert befores[table.offers[0].target].in_force == Seat(issue=7, digest=earlier.digest, signer="operator")
