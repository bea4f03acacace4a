"""The account of a sensor after a reading: what it has been through, and what its figures are made with.

Owns the types that carry it to health. Judges nothing.
"""

from dataclasses import dataclass

from motekeep.instant import Instant
from motekeep.measure.document import CalibrationDocument
from motekeep.measure.dose import Dose
from motekeep.measure.reading import Reading


@dataclass(frozen=True, slots=True)
class Limits:
    """What was set for a sensor: dust drawn through between two cleanings (ug), hours of its laser, whether it must
    have a calibration. `halved`: the dose limit is half of what was written, as its optics look up."""

    dose_ug: float = 700.0
    laser_hours: float = 8000.0
    calibration_required: bool = False
    halved: bool = False


@dataclass(frozen=True, slots=True)
class Account:
    """`at` is the end of the reading; `document` the calibration in force for it, None without one."""

    at: Instant
    dose: Dose
    document: CalibrationDocument | None
    reading: Reading
