"""Units of samples and readings, and the two constants between them."""

from enum import StrEnum

# Standard gravity, m/s2, exact (3rd CGPM 1901).
STANDARD_GRAVITY = 9.80665


class SampleUnit(StrEnum):
    """The unit in which a source delivers samples."""

    G = "g"
    METRES_PER_SECOND_SQUARED = "m/s2"
    VOLT = "V"
    COUNTS = "counts"


class Unit(StrEnum):
    """The unit of a reading, as printed and stored."""

    MILLIMETRES_PER_SECOND = "mm/s"
    G = "g"
    ONE = "1"
