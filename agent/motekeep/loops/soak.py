"""The soak: whether what a new document makes of the air is what its rehearsal promised.

Owns the rule and its count. Pure: fed with the readings as they are made. Must not know what follows from it.

The rule. Three readings in a row that are bad end the soak: one odd minute is weather, three are the document. A
reading is bad when a channel that the document corrects
- has a raw figure and no value, or the correction alone makes the reading fail; not so in fog and under a full counter,
  where a document does right to state no number;
- lies further from what its raw figure leads to expect than `max_shift`, as a share of raw (5 ug/m3 at the least). What
  is expected is raw times the ratio of the means in the rehearsal, 1 without one.
Time is counted as measured by readings that the document made; a pause of measuring prolongs the soak.
"""

from collections.abc import Mapping

from motekeep.measure.reading import FAIL
from motekeep.message.documents import ReadingDocument
from motekeep.message.rehearsal import FLOOR_UG_M3, of_correction

IN_A_ROW = 3
# The air, not the document: a step that can state no number here does what it should.
WEATHER = frozenset({"fog", "coincidence-censored", "climate-missing"})


class Soak:
    """Of one document, by its digest. `ratios` are value over raw by channel, from the rehearsal."""

    def __init__(self, digest: str, ratios: Mapping[str, float], max_shift: float, seconds: float) -> None:
        self.digest = digest
        self.left_s = seconds
        self._ratios = ratios
        self._max_shift = max_shift
        self._bad = 0

    @property
    def over(self) -> bool:
        return self.left_s <= 0.0

    def see(self, reading: ReadingDocument) -> str | None:
        """Why the document must go, None while it may stay."""
        if reading.calibration is None or reading.calibration.digest != self.digest:
            return None
        self.left_s -= float(reading.seconds)
        why = self._fault(reading)
        self._bad = self._bad + 1 if why else 0
        return why if self._bad >= IN_A_ROW else None

    def _fault(self, reading: ReadingDocument) -> str | None:
        weather = not WEATHER.isdisjoint(reading.reasons)
        if reading.flag == FAIL and all(of_correction(reason) for reason in reading.reasons) and not weather:
            return f"soak-invalid: the correction fails, {', '.join(reading.reasons)}"
        for name, ratio in self._ratios.items():
            figure = getattr(reading, name)
            if figure is None or figure.raw is None or (figure.value is not None and figure.u is None):
                continue
            if figure.value is None:
                if not weather:
                    return f"soak-invalid: {name} has no value at raw {figure.raw:g} ug/m3"
                continue
            moved = abs(figure.value - ratio * figure.raw) / max(abs(figure.raw), FLOOR_UG_M3)
            if moved > self._max_shift:
                return (
                    f"soak-jump: {name} is {figure.value:g} at raw {figure.raw:g} ug/m3,"
                    f" {ratio * figure.raw:.4g} was expected; off by {moved:.2f} of raw"
                )
        return None
