"""The serial line of one emulated sensor: printed numbers into frames and bytes, whole or damaged.

Owns what bytes leave the sensor. The bytes of each dialect come from `motekeep.wire`, so that the emulator cannot
speak a dialect of its own. Must not know physics.
"""

from collections.abc import Sequence

import numpy as np

from motekeep.wire.dialects import DIALECTS
from motekeep.wire.frame import Frame, Layout
from motekeep.wire.stuffed import FAN, FAN_SPEED, FLAG, LASER, STATE_AT, STATUS_BITS
from motesim.aerosol import Floats
from motesim.emulator import STANDARD_EDGES_UM, Face, Printed
from motesim.faults import FaultSet
from motesim.plan import SensorPlan
from motesim.relaxation import generators

Spoken = list[tuple[float, bytes]]

_JITTER_S = 0.003  # of a frame's arrival: the scheduling of a small gateway, common practice, no source
_RUBBISH_MOST = 80  # bytes: longer than any frame, so that a decoder has to search
_ID_DIALECT = "aa"  # its revision field carries a 16-bit id
_SELF_WATCHING = "stuffed"  # it measures its own fan speed and says so in its status word
_BITS_SET = 0x80 << STATE_AT  # its state byte then tells the host to read that word


def layout_of(plan: SensorPlan) -> Layout:
    """The layout this sensor prints. Raises ValueError when the dialect has none of that length."""
    layouts = DIALECTS[plan.dialect].layouts
    if plan.length is None:
        # the usual one counts and carries no climate of its own, where the dialect has a choice
        return min(layouts, key=lambda layout: (not layout.sizes_um, layout.climate))
    for layout in layouts:
        if layout.name == f"{plan.dialect}-{plan.length}":
            return layout
    raise ValueError(f"dialect {plan.dialect} has no layout of length {plan.length}")


def face_of(layout: Layout) -> Face:
    """What an emulator has to know of a layout. A sensor that prints few sizes, or none, counts at all of them."""
    sizes = layout.sizes_um
    inside = sizes == STANDARD_EDGES_UM[: len(sizes)]
    edges = STANDARD_EDGES_UM if inside else (*sizes, 10.0) if sizes[-1] < 10.0 else sizes
    return Face(
        edges_um=edges,
        printed=len(sizes),
        masses=layout.mass,
        mass_resolution=layout.mass_resolution,
        mass_top=layout.mass_top,
        count_top=layout.count_top,
        floats=bool(sizes) and layout.count_top is None,
        fan_bits=(FAN, FAN_SPEED) if layout.name == _SELF_WATCHING else (0, 0),
    )


class Line:
    """The way from printed numbers to bytes of one sensor."""

    def __init__(self, plan: SensorPlan, faults: FaultSet) -> None:
        self.dialect = DIALECTS[plan.dialect]
        self.layout = layout_of(plan)
        self.face = face_of(self.layout)
        self._faults = faults
        self.identity = plan.seed & 0xFF
        streams = generators(plan.seed, ["jitter", "damage"])
        self._jitter = streams["jitter"]
        self._damage = streams["damage"]

    def frames(self, printed: Printed) -> list[Frame]:
        """One frame for each line of `printed`, in order."""
        layout, face = self.layout, self.face
        counts = printed.columns.counts[:, : face.printed].tolist()
        masses = printed.columns.mass.tolist()
        ambient = printed.columns.ambient.tolist() if layout.ambient else [[]] * len(masses)
        revisions = printed.revision
        if self.dialect.name == _ID_DIALECT:
            revisions = revisions * 256 + self.identity
        errors = printed.error
        if self.dialect.name == _SELF_WATCHING:
            known = np.where((errors != 0) & (errors & STATUS_BITS == 0), LASER, errors & STATUS_BITS)
            errors = np.where(known != 0, known | _BITS_SET, 0)
        rh: Sequence[float | None] = printed.rh.tolist() if layout.climate else [None] * len(masses)
        warm: Sequence[float | None] = printed.temperature.tolist() if layout.climate else [None] * len(masses)
        return [
            Frame(layout, tuple(m), tuple(c), b"", tuple(a), h, t, r, e)
            for m, c, a, h, t, r, e in zip(
                masses, counts, ambient, rh, warm, revisions.tolist(), errors.tolist(), strict=True
            )
        ]

    def parts(self, said: bytes) -> tuple[bytes, bytes]:
        """The status unit and the values unit of what a self-watching sensor said; all is values where it is marred."""
        end = said.find(FLAG, 1) + 1
        return (said[:end], said[end:]) if 0 < end < len(said) else (b"", said)

    def speak(self, printed: Printed) -> Spoken:
        """What comes out of the port, with the moment it came, in order of time."""
        encode = self.dialect.encode
        times = printed.times
        arrived = (times + np.abs(self._jitter.normal(0.0, _JITTER_S, len(times)))).tolist()
        spoken = list(zip(arrived, map(encode, self.frames(printed)), strict=True))
        if self._faults.faults:
            spoken = self._marred(times, spoken)
        return spoken

    def _marred(self, times: Floats, spoken: Spoken) -> Spoken:
        faults, rng = self._faults, self._damage
        n = len(spoken)
        silent = faults.any_of(("silent", "port-gone"), times)
        altered = rng.random(n) < faults.level("bad-checksums", times)
        chance = faults.level("byte-damage", times)
        step = float(np.median(np.diff(times))) if n > 1 else 1.0
        bursts = rng.random(n) < faults.level("rubbish", times) * step / 60.0
        if not (silent.any() or altered.any() or chance.any() or bursts.any()):
            return spoken
        out: Spoken = []
        for index, (at, data) in enumerate(spoken):
            if silent[index]:
                continue
            if bursts[index]:
                out.append((at - 0.1 * step, rng.bytes(int(rng.integers(1, _RUBBISH_MOST)))))
            data = self._one_altered(data) if altered[index] else data  # noqa: PLW2901
            out.append((at, self._bruised(data, float(chance[index])) if chance[index] else data))
        return [(at, data) for at, data in out if data]

    def _one_altered(self, data: bytes) -> bytes:
        """One bit of one byte between header and tail turned over: always seen by a sum of bytes."""
        # header and length stay, so that the damage is a bad sum and not a lost frame
        place = int(self._damage.integers(4, max(len(data) - 2, 5)))
        marred = bytearray(data)
        marred[place] ^= 1 << int(self._damage.integers(8))
        return bytes(marred)

    def _bruised(self, data: bytes, chance: float) -> bytes:
        """Each byte altered or lost with this chance, half and half."""
        draws = self._damage.random(len(data))
        if draws.min() >= chance:
            return data
        out = bytearray()
        for byte, draw in zip(data, draws, strict=True):
            if draw >= chance:
                out.append(byte)
            elif draw < chance / 2.0:
                out.append(byte ^ int(self._damage.integers(1, 256)))
        return bytes(out)
