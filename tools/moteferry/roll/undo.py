"""The way back: the parameters of the document that was in force before, as a new issue.

Owns the text of it and the proof that only the issue changed. Devices take no issue twice and none below the highest,
so going back is a new document, signed like any other. Must not know a broker.
"""

import re
from collections.abc import Callable, Iterable, Iterator
from dataclasses import dataclass, replace
from pathlib import Path

from moteferry.roll.gate import Before
from moteferry.roll.offer import Offer, RollError, Target, offer_of
from moteferry.roll.register import Register
from moteferry.signing import signature_path
from motekeep.errors import DocumentError
from motekeep.instant import rfc3339
from motekeep.measure.document_text import parse

ISSUE = re.compile(rb"^([ \t]*issue[ \t]*=[ \t]*)[0-9_]+", re.MULTILINE)
UNSIGNED = ""


@dataclass(frozen=True, slots=True)
class WayBack:
    """From the document `undone` to the one before it. `offer` has no signature while nobody has signed it."""

    undone: Offer
    earlier: Offer
    offer: Offer


@dataclass(frozen=True, slots=True)
class NoWayBack:
    target: Target
    why: str


def accepted_in(register: Register, roll: int) -> list[tuple[Offer, Before]]:
    """What devices accepted in a roll, with how they were before."""
    befores: dict[Target, Before] = {}
    accepted: dict[Target, str] = {}
    for event in register.events(roll=roll):
        if event.event == "offered":
            was = Before.model_validate_json(event.before or "{}")
            # offered again to a device that had taken it unnoticed: what it had before is in the earlier event
            if was.in_force is None or was.in_force.digest != event.digest:
                befores[event.target] = was
        elif event.event == "accepted" and event.digest is not None:
            accepted[event.target] = event.digest
    found = []
    for target, digest in accepted.items():
        offer = register.document(digest)
        if offer is not None and target in befores:
            found.append((offer, befores[target]))
    return found


def way_back(register: Register, undone: Offer, was: Before, now: float, highest: int) -> WayBack | NoWayBack:
    """The document that undoes this one: the one that an earlier attempt made, or a new issue above `highest`."""
    if was.in_force is None:
        return NoWayBack(
            undone.target, "it had no document before, so there is nothing to go back to: fit another and roll that"
        )
    earlier = register.document(was.in_force.digest)
    if earlier is None:
        return NoWayBack(
            undone.target, f"the text of issue {was.in_force.issue} is not in the register: hand it in with --known"
        )
    if earlier.valid_until <= now:
        return NoWayBack(
            undone.target, f"issue {earlier.issue} was valid until {rfc3339(earlier.valid_until)}: fit a new one"
        )
    made = register.way_back(undone.digest)
    if made is not None:
        return WayBack(undone, earlier, made)
    text = reissued(earlier, highest + 1, f"the parameters of issue {earlier.issue} again: undoes {undone.issue}")
    return WayBack(undone, earlier, offer_of(text, UNSIGNED))


def reissued(earlier: Offer, issue: int, why: str) -> bytes:
    """The same document under another issue. Raises RollError unless it means exactly the same."""
    text = earlier.document.encode()
    changed = f"# {why}\n".encode() + ISSUE.sub(rb"\g<1>%d" % issue, text, count=1)
    try:
        old, new = parse(text), parse(changed)
    except DocumentError as error:
        raise RollError(f"re-issuing issue {earlier.issue} of {earlier.target}", str(error), "") from error
    if replace(old, issue=issue, digest=new.digest) != new:
        raise RollError(
            f"re-issuing issue {earlier.issue} of {earlier.target}",
            "its text cannot be changed in the issue alone",
            f"write issue {issue} by hand, sign it, and roll it",
        )
    return changed


def write_and_sign(
    ways: Iterable[WayBack], folder: Path, sign: Callable[[Path], object], register: Register
) -> Iterator[Offer]:
    """Each document to its file, signed, and into the register before the next: one at a time, since a key may want
    to be touched. What an earlier attempt signed is not signed again."""
    for way in ways:
        if way.offer.signature != UNSIGNED:
            yield way.offer
            continue
        folder.mkdir(parents=True, exist_ok=True)
        path = folder / f"{'-'.join(way.offer.target)}-{way.offer.issue}.toml"
        path.write_bytes(way.offer.document.encode())
        sign(path)
        offer = replace(way.offer, signature=signature_path(path).read_text("ascii"))
        register.keep_way_back(way.undone.digest, offer)
        yield offer
