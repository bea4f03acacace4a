"""What a device remembers of a sensor's calibration: what is in force, what was, and the guard against replay.

Owns the record that the journal keeps in the transaction of a switch, and the rules of issue numbers. Pure: who is
still trusted is asked of the caller. Must not know files, signatures or time.

The rules of issues.
- A new document must have a higher issue than any that was accepted from a signer who is still trusted. So that this
  can be asked again at any time, the highest document of each signer is kept here with its signature, word for word:
  taking a stolen key out of the signers undoes the number that it has burnt.
- The same issue with other bytes is told apart from an older one: somebody has given a number twice.
- Going back (a withdrawal, a restore) changes what is in force and never the numbers.
"""

from collections.abc import Callable, Collection
from typing import Literal

from pydantic import Field, ValidationError

from motekeep.errors import OfferRefusedError
from motekeep.message.documents import Document, Time

By = Literal["offer", "install", "restore", "withdrawal", "by-hand"]

KEEP = 5
# Each with its document, some kilobytes. People who sign for one sensor in its life are fewer.
MOST_GUARDS = 8


class Accepted(Document):
    """A document that was accepted once; its text and signature are on the shelf. `withdrawn` is why it was, if so;
    `ratios` are value over raw by channel in its rehearsal."""

    issue: int
    digest: str
    signer: str
    key: str
    valid_until: Time
    at: Time
    ratios: dict[str, float] = Field(default_factory=dict)
    proven: bool = False
    withdrawn: str | None = None


class Guard(Document):
    """The document with the highest issue that was accepted from one key, with what proves it."""

    issue: int
    digest: str
    key: str
    document: str
    signature: str


class CalibrationRecord(Document):
    """Newest of `accepted` last. `in_force` is the digest of one of them; `since` and `by` say when and how it came."""

    in_force: str | None = None
    since: Time | None = None
    by: By = "offer"
    accepted: tuple[Accepted, ...] = ()
    guards: tuple[Guard, ...] = ()

    @property
    def current(self) -> Accepted | None:
        return self.find(self.in_force) if self.in_force is not None else None

    def find(self, digest: str) -> Accepted | None:
        return next((a for a in self.accepted if a.digest == digest), None)

    @property
    def digests(self) -> Collection[str]:
        """What the shelf must keep."""
        return frozenset(a.digest for a in self.accepted)

    def before(self, digest: str) -> tuple[Accepted, ...]:
        """Where to go back to from this one, best first: accepted before it and never withdrawn."""
        earlier: list[Accepted] = []
        for entry in self.accepted:
            if entry.digest == digest:
                break
            if entry.withdrawn is None:
                earlier.append(entry)
        return tuple(reversed(earlier))

    def highest(self, trusted: Callable[[Guard], bool]) -> Guard | None:
        """The guard that the next issue must exceed; `trusted` is asked from the highest down, until one is."""
        for guard in sorted(self.guards, key=lambda g: g.issue, reverse=True):
            if trusted(guard):
                return guard
        return None

    # -- what changes it ------------------------------------------------------------------------------------------

    def accept(self, entry: Accepted, guard: Guard, by: By) -> "CalibrationRecord":
        """With a new document in force. The oldest goes when there are more than five."""
        others = tuple(a for a in self.accepted if a.digest != entry.digest)
        held = sorted((g for g in self.guards if g.key != guard.key), key=lambda g: g.issue)
        own = max((g for g in (*self.guards, guard) if g.key == guard.key), key=lambda g: g.issue)
        return CalibrationRecord(
            in_force=entry.digest,
            since=entry.at,
            by=by,
            accepted=(*others, entry)[-KEEP:],
            guards=(*held[1 - MOST_GUARDS :], own),
        )

    def restore(self, digest: str, at: str) -> "CalibrationRecord":
        """With an earlier one in force again, because a person says so: whatever it was withdrawn for is forgiven."""
        accepted = tuple(a.model_copy(update={"withdrawn": None}) if a.digest == digest else a for a in self.accepted)
        return self.model_copy(update={"in_force": digest, "since": at, "by": "restore", "accepted": accepted})

    def withdraw(self, why: str, to: str | None, at: str) -> "CalibrationRecord":
        """With the one in force marked and `to` in its place, or none."""
        accepted = tuple(
            a.model_copy(update={"withdrawn": why}) if a.digest == self.in_force else a for a in self.accepted
        )
        return self.model_copy(update={"in_force": to, "since": at, "by": "withdrawal", "accepted": accepted})

    def take_out(self, at: str) -> "CalibrationRecord":
        """With none in force: a person removed the file."""
        return self.model_copy(update={"in_force": None, "since": at, "by": "by-hand"})

    def prove(self) -> "CalibrationRecord":
        """With the soak of the one in force over."""
        accepted = tuple(
            a.model_copy(update={"proven": True}) if a.digest == self.in_force else a for a in self.accepted
        )
        return self.model_copy(update={"accepted": accepted})


def record_name(sensor: str) -> str:
    """The name under which the journal keeps a sensor's record."""
    return f"calibration/{sensor}"


def recalled(text: str | None) -> CalibrationRecord | None:
    """The record that `json_text` made this text of; None when it made none."""
    try:
        return CalibrationRecord.model_validate_json(text or "")
    except ValidationError:
        return None


def check_issue(issue: int, digest: str, record: CalibrationRecord, highest: Guard | None) -> None:
    """Raises OfferRefusedError when the number does not allow this document."""
    entry = record.find(digest)
    if entry is not None and entry.withdrawn is not None:
        raise OfferRefusedError(
            "withdrawn", f"issue {issue} was in force and was withdrawn: {entry.withdrawn}", "sign a mended one anew"
        )
    if highest is None or issue > highest.issue:
        return
    if issue == highest.issue and digest != highest.digest:
        raise OfferRefusedError(
            "issue-reused",
            f"issue {issue} was accepted before with other content ({highest.digest[:19]})",
            f"give it issue {highest.issue + 1} or higher",
        )
    raise OfferRefusedError(
        "issue-not-higher",
        f"issue {issue} is not above {highest.issue}, the highest accepted from a trusted signer",
        f"give it issue {highest.issue + 1} or higher, or use `motekeep calibration restore`",
    )


class CalibrationAsk(Document):
    """What a person at the gateway asks of the daemon: put this document into force, or an earlier one again."""

    kind: Literal["install", "restore"]
    sensor: str
    document: str = ""
    signature: str = ""
    issue: int | None = None


class CalibrationAnswer(Document):
    """What became of it, in words."""

    done: bool
    said: str
