"""The sensor's side of the commands: what a host sent, by name. For the emulator and the tests.

Owns the recognition. Must not know a dialect: its `Commands` say all.
"""

from dataclasses import fields
from typing import Final

from motekeep.wire.frame import Commands

# How an emulator hears each field of Commands.
NAMES: Final = {field.name: field.name.removesuffix("_mode") for field in fields(Commands)}


class CommandListener:
    """Recognises whole commands in what a host sends, fed with any split of it; all else is passed over.

    Names: `sleep`, `wake`, `read`, `stream`, `poll`, `status`. Never raises on input and holds less than the longest
    command between calls. Where one command begins like another the longer one counts, once it can be told.
    """

    __slots__ = ("_held", "_known")

    def __init__(self, commands: Commands) -> None:
        known = {bytes(sent): name for field, name in NAMES.items() if (sent := getattr(commands, field)) is not None}
        self._known = dict(sorted(known.items(), key=lambda item: -len(item[0])))
        self._held = b""

    @property
    def held(self) -> int:
        return len(self._held)

    def understand(self, data: bytes) -> list[str]:
        """The commands that became whole with these bytes, in order."""
        buffer = self._held + data
        heard: list[str] = []
        at = 0
        while at < len(buffer):
            rest = buffer[at : at + len(next(iter(self._known), b""))]
            matched = next((sent for sent in self._known if rest.startswith(sent)), None)
            if matched is not None:
                heard.append(self._known[matched])
                at += len(matched)
            elif any(sent.startswith(rest) for sent in self._known):
                break
            else:
                at += 1
        self._held = buffer[at:]
        return heard
