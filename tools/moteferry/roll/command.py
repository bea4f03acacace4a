"""`moteferry roll` and `moteferry history`: from the words of the command line to a roll and what came of it.

Owns the order of a run: read, listen, plan, ask, roll. Must not know what a wave or a gate decides.
"""

import hashlib
import json
import sys
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import click
import structlog

from moteferry.roll.conductor import Conductor, Course
from moteferry.roll.fleet import Fleet
from moteferry.roll.gate import Before, Rule
from moteferry.roll.link import Came, Link, Up
from moteferry.roll.offer import Offer, RollError, Target, check_apart, check_signatures, offer_of, read_offer
from moteferry.roll.plan import Plan, Standing, make_plan
from moteferry.roll.register import FAILED, HAS, STANDS, Event, Register
from moteferry.roll.show import Screen, outcome_json, plan_json, show_outcome, show_plan, show_ways, tenure_json
from moteferry.roll.undo import NoWayBack, WayBack, accepted_in, way_back, write_and_sign
from moteferry.roll.waves import sizes, split
from moteferry.signing import sign
from motekeep.edges.login import BrokerSettings
from motekeep.instant import from_rfc3339, rfc3339

# Nothing says that all retained messages have come: they have when nothing came for this long, at most after LISTEN_S.
QUIET_S = 2.5
SETTLED_S = 0.3  # when health and state of every target have come
LISTEN_S = 60.0
CONNECT_S = 20.0


@dataclass(frozen=True, slots=True)
class Wish:
    """The command line of a roll."""

    broker: BrokerSettings
    root: str
    register: Path
    waves: str
    rule: Rule
    yes: bool
    go_on: bool
    as_json: bool


@dataclass(frozen=True, slots=True)
class UndoWish:
    key: Path | None
    out: Path


def roll(wish: Wish, documents: Sequence[Path], known: Sequence[Path]) -> bool:
    """Plan, and with `yes` roll; whether every document is, or could be, where it belongs."""
    offers = _read(documents)
    sizes(wish.waves, max(1, len(offers)))  # a bad --waves is told before anything else
    with Register(wish.register) as register:
        _take_in(register, offers, known)
        fleet = Fleet(wish.root, [offer.target for offer in offers])
        with _listening(wish, fleet) as link:
            well, told = _roll(wish, "roll", offers, fleet, register, link)
    _tell(wish, told)
    return well


def undo(wish: Wish, documents: Sequence[Path], known: Sequence[Path], how: UndoWish) -> bool:
    """Take those documents back, or those of the last roll; whether every sensor is, or could be, back."""
    with Register(wish.register) as register:
        _take_in(register, _read(documents), known)
        rolled = _rolled(register, [read_offer(path).digest for path in documents])
        fleet = Fleet(wish.root, [offer.target for offer, _ in rolled])
        with _listening(wish, fleet) as link:
            ways, stuck = _ways_back(register, rolled, fleet)
            if not wish.as_json:
                show_ways(ways, stuck)
            well, told = True, dict[str, Any]()
            if ways:
                offers = _signed(ways, how, register, quiet=wish.as_json) if wish.yes else [way.offer for way in ways]
                well, told = _roll(wish, "undo", offers, fleet, register, link)
            if wish.yes:
                _note_undone(register, ways)
    _tell(wish, {**told, "stuck": [{**no_way.target._asdict(), "why": no_way.why} for no_way in stuck]})
    return well and not stuck


def history(path: Path, only: tuple[str | None, str | None, str | None], at: str | None, *, as_json: bool) -> bool:
    """Who had which calibration when; whether anything is known."""
    moment = from_rfc3339(at) if at is not None else None
    with Register(path, write=False) as register:
        tenures = [
            tenure
            for tenure in register.tenures()
            if all(asked is None or asked == own for asked, own in zip(only, tenure.target, strict=True))
            and (moment is None or (tenure.since <= moment and (tenure.until is None or moment < tenure.until)))
        ]
    if as_json:
        click.echo(json.dumps([tenure_json(tenure) for tenure in tenures], indent=1))
        return bool(tenures)
    for tenure in tenures:
        until = rfc3339(round(tenure.until)) if tenure.until is not None else "now"
        what = f"issue {tenure.issue} {tenure.digest}" if tenure.digest is not None else "none"
        signer = f" signed by {tenure.signer}" if tenure.signer else ""
        click.echo(f"{tenure.target!s:<32} {rfc3339(round(tenure.since))} to {until:<20}  {what}{signer}")
    if not tenures:
        click.echo("nothing is known of that")
    return bool(tenures)


# -- reading -----------------------------------------------------------------------------------------------------


def _read(documents: Sequence[Path]) -> list[Offer]:
    offers = [read_offer(path) for path in documents]
    check_apart(offers)
    return offers


def _take_in(register: Register, offers: Sequence[Offer], known: Sequence[Path]) -> None:
    """Signatures cost a process each: those that were checked in an earlier run are not checked again."""
    new = [offer for offer in offers if not register.has(offer)]
    check_signatures(new)
    with register.transaction():
        register.keep(new)
        register.keep(offer for path in known if not register.has(offer := offer_of(path.read_bytes(), "")))


@contextmanager
def _listening(wish: Wish, fleet: Fleet) -> Iterator[Link]:
    """A link that has heard what the broker has kept of the targets. The agent's edge logs; here to standard error."""
    logging = structlog.get_config()
    structlog.configure(logger_factory=lambda *_: structlog.PrintLogger(sys.stderr))
    broker = BrokerSettings(
        wish.broker.host,
        wish.broker.port,
        "",
        filters=fleet.filters(with_readings=wish.rule.hold_s > 0),
        username=wish.broker.username,
        password_file=wish.broker.password_file,
        tls=wish.broker.tls,
    )
    link = Link(broker)
    link.start()
    try:
        began = quiet_since = time.monotonic()
        up = False
        while time.monotonic() - began < (LISTEN_S if up else CONNECT_S):
            for event in link.events(0.1):
                match event:
                    case Up():
                        up, quiet_since = True, time.monotonic()
                    case Came(topic, payload, retained):
                        fleet.hear(topic, payload, retained=retained, now=time.time())
                        if retained:  # of whomever: those asked about may come last
                            quiet_since = time.monotonic()
            if up and time.monotonic() - quiet_since > (SETTLED_S if fleet.complete else QUIET_S):
                break
        if not up:
            raise RollError(f"connecting to {broker.host}:{broker.port}", "no answer", "look at --broker")
        yield link
    finally:
        link.stop()
        structlog.configure(**logging)


# -- rolling -----------------------------------------------------------------------------------------------------


def _roll(
    wish: Wish, kind: str, offers: Sequence[Offer], fleet: Fleet, register: Register, link: Link
) -> tuple[bool, dict[str, Any]]:
    """Whether all is well, and the same as JSON."""
    now = time.time()
    plan = make_plan(offers, fleet, now, unwell_too=kind == "undo")
    where = f"{wish.broker.host}:{wish.broker.port}"
    _note_found(register, offers, fleet, now)
    if not wish.yes:
        planned = sizes(wish.waves, len(plan.of(Standing.OFFER)))
        if not wish.as_json:
            show_plan(plan, planned, wish.rule, where)
            click.echo(
                "nothing was sent; --yes rolls it" if planned else "nothing was sent, and there is nothing to send"
            )
        return not plan.left_out(), {"plan": plan_json(plan, planned)}
    with register.transaction():
        register.keep(offers)
        number = register.roll(kind, _fingerprint(offers), wish.waves, now)
        waves = _waves(wish, number, plan, register, now)
    if not wish.as_json:
        show_plan(plan, [len(wave) for wave in waves], wish.rule, where)
    screen = Screen(quiet=wish.as_json)
    try:
        outcome = Conductor(Course(number, wish.root, waves, wish.rule), fleet, register, link, show=screen.show).run()
    except KeyboardInterrupt:
        click.echo("\ninterrupted: what was offered stays offered; the same command goes on", err=True)
        raise
    finally:
        screen.close()
    register.end(number, "done" if outcome.done else "stopped", time.time())
    left = plan.left_out({offer.target for wave in waves for offer in wave})
    if not wish.as_json:
        show_outcome(outcome, left, undo=kind == "undo")
    told = {"plan": plan_json(plan, [len(wave) for wave in waves]), **outcome_json(outcome)}
    return outcome.done and not left, {**told, "left_out": [str(entry.target) for entry in left]}


def _fingerprint(offers: Sequence[Offer]) -> str:
    """A roll is the same one as long as it is of exactly the same documents."""
    return hashlib.sha256("\n".join(sorted(offer.digest for offer in offers)).encode()).hexdigest()


def _tell(wish: Wish, told: dict[str, Any]) -> None:
    if wish.as_json:
        click.echo(json.dumps(told, indent=1))


def _waves(wish: Wish, roll: int, plan: Plan, register: Register, now: float) -> list[list[Offer]]:
    """Who was placed before stays there; who can be offered now and has no place gets one behind them.

    Left out: who was never offered it and cannot be now, who has a later issue by now, and with --go-on who failed.
    """
    entries = {entry.target: entry for entry in plan.entries}
    last = {event.target: event.event for event in register.events(roll=roll) if event.event in STANDS}
    places = {target: wave for target, wave in register.places(roll).items() if target in entries}
    behind = max(places.values(), default=-1) + 1
    new = [entry.offer for entry in plan.of(Standing.OFFER) if entry.target not in places]
    placed = [(offer, behind + i) for i, wave in enumerate(split(new, wish.waves)) for offer in wave] if new else []
    register.place(roll, placed)
    register.add(
        [Event(o.target, "planned", now, o.issue, o.digest, why=f"wave {wave + 1}", roll=roll) for o, wave in placed]
    )
    places |= {offer.target: wave for offer, wave in placed}
    waves: dict[int, list[Offer]] = {}
    for target, wave in places.items():
        entry, event = entries[target], last.get(target, "planned")
        never = event == "planned" and entry.standing is not Standing.OFFER
        passed_by = event not in FAILED and (entry.in_force or 0) > entry.offer.issue
        if not (never or passed_by or (wish.go_on and event in FAILED)):
            waves.setdefault(wave, []).append(entry.offer)
    return [waves[wave] for wave in sorted(waves)]


def _note_found(register: Register, offers: Sequence[Offer], fleet: Fleet, now: float) -> None:
    """What devices have in force by no act of this register, or that it did not live to see."""
    in_force = register.in_force()
    found: list[Event] = []
    for offer in offers:
        state, known = fleet.states.get(offer.target), in_force.get(offer.target)
        if state is None:
            continue
        seat = state.in_force
        if (seat.digest if seat is not None else None) == (known.digest if known is not None else None):
            continue
        if seat is not None and seat.digest == offer.digest and _offered(register, offer):
            continue  # the roll that offered it tells
        # what nothing was known of has been so since the device said it, at the least
        since = seat.since if seat is not None and known is None else None
        at = min(now, since.timestamp()) if since is not None else now
        event = Event(offer.target, HAS[0], at)
        if seat is not None:
            event = replace(event, issue=seat.issue, digest=seat.digest, signer=seat.signer)
        found.append(event)
    with register.transaction():
        register.add(found)


def _offered(register: Register, offer: Offer) -> bool:
    return any(e.event == "offered" and e.digest == offer.digest for e in register.events(target=offer.target))


# -- undoing -----------------------------------------------------------------------------------------------------


def _rolled(register: Register, digests: Sequence[str]) -> list[tuple[Offer, Before]]:
    if not digests:
        last = register.last_roll()
        return accepted_in(register, last) if last is not None else []
    wanted = set(digests)
    found: dict[Target, tuple[Offer, Before]] = {}
    for roll in {e.roll for e in register.events() if e.event == "accepted" and e.digest in wanted and e.roll}:
        found |= {offer.target: (offer, was) for offer, was in accepted_in(register, roll) if offer.digest in wanted}
    return list(found.values())


def _ways_back(
    register: Register, rolled: Sequence[tuple[Offer, Before]], fleet: Fleet
) -> tuple[list[WayBack], list[NoWayBack]]:
    ways: list[WayBack] = []
    stuck: list[NoWayBack] = []
    now = time.time()
    for offer, was in rolled:
        state = fleet.states.get(offer.target)
        if state is not None and was.in_force is not None and state.holds(was.in_force.digest):
            continue  # the device has gone back by itself
        seen = [state.highest_issue or 0] if state is not None else []
        if state is not None and state.in_force is not None:
            seen.append(state.in_force.issue)
        highest = max(register.highest_issue(offer.target), offer.issue, *seen)
        way = way_back(register, offer, was, now, highest)
        if isinstance(way, WayBack):
            ways.append(way)
        else:
            stuck.append(way)
    return ways, stuck


def _signed(ways: Sequence[WayBack], how: UndoWish, register: Register, *, quiet: bool) -> list[Offer]:
    unsigned = [way for way in ways if not way.offer.signature]
    if not unsigned:
        return [way.offer for way in ways]
    if how.key is None:
        raise RollError("signing the way back", "no key is named", "give --key; a key in an agent by its .pub file")
    key = how.key
    signing = write_and_sign(ways, how.out, lambda path: sign(path, key), register)
    if quiet:
        return list(signing)
    with click.progressbar(signing, length=len(ways), label=f"signing into {how.out}", file=sys.stderr) as signed:
        return list(signed)


def _note_undone(register: Register, ways: Sequence[WayBack]) -> None:
    now = time.time()
    in_force = register.in_force()
    undone = []
    for way in ways:
        tenure = in_force.get(way.offer.target)
        events = register.events(target=way.offer.target)
        noted = any(e.event == "undone" and e.digest == way.undone.digest for e in events)
        if tenure is not None and tenure.digest == way.offer.digest and not noted:
            why = f"by issue {way.offer.issue}"
            undone.append(Event(way.offer.target, "undone", now, way.undone.issue, way.undone.digest, why=why))
    with register.transaction():
        register.add(undone)
