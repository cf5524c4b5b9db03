"""Units of the interstellar radiation field in the far ultraviolet, and the way between them."""

from __future__ import annotations

from typing import Any, Final, Literal

__all__ = ["FIELD_UNITS", "FieldUnit", "field_in"]

FieldUnit = Literal["solar neighbourhood", "Draine", "Habing"]

# How many Habing fields (1.6e-3 erg/s/cm2 from 6 to 13.6 eV) each unit is worth. The field of
# Draine 1978 is 1.7 of Habing's (common practice), and papers that scale to the solar
# neighbourhood take Draine's for it.
_IN_HABING: Final[dict[FieldUnit, float]] = {
    "solar neighbourhood": 1.7,
    "Draine": 1.7,
    "Habing": 1.0,
}
FIELD_UNITS: Final = tuple(_IN_HABING)


def field_in(field: Any, given: FieldUnit, wanted: FieldUnit) -> Any:
    """Express a radiation field in another unit.

    Parameters
    ----------
    field : float or float64 array
    given, wanted : {"solar neighbourhood", "Draine", "Habing"}

    Examples
    --------
    >>> field_in(1.0, "Draine", "Habing")
    1.7
    """
    factor = _IN_HABING[given] / _IN_HABING[wanted]
    return field if factor == 1.0 else field * factor
