"""Scales of 12 + log10(O/H), and how far apart two of them are."""

from __future__ import annotations

from typing import Final

from kspipe.conversions.strong_lines import STRONG_LINES, Line

__all__ = ["OH_SCALES", "USUAL_SHIFT_DEX", "scale_shift_dex"]

# "Denicolo" is the N2 scale of Denicolo, Terlevich & Terlevich 2002; "direct" is from electron
# temperatures.
OH_SCALES: Final = tuple(
    sorted({record.oh_scale for record in STRONG_LINES} | {"Denicolo", "direct", "not stated"})
)

# Offsets between scales of the same galaxy: 0.1 to 0.3 dex (common practice).
USUAL_SHIFT_DEX: Final = (0.1, 0.3)


def scale_shift_dex(given: str, wanted: str, oh: float) -> float | None:
    """How much 12 + log10(O/H) changes from one scale to another, where it is known.

    Parameters
    ----------
    given, wanted : str
        Of `OH_SCALES`.
    oh : float
        On the scale `given`.

    Returns
    -------
    float or None
        None where the two scales are not straight lines in one and the same line ratio.

    Notes
    -----
    Two calibrations of one line ratio x, OH = a + b x, differ by a' + b' (OH - a) / b - OH.
    """
    if given == wanted:
        return 0.0
    lines = {r.oh_scale: r.function for r in STRONG_LINES if isinstance(r.function, Line)}
    first, second = lines.get(given), lines.get(wanted)
    if first is None or second is None or first.name != second.name:
        return None
    return second.zero + second.slope * (oh - first.zero) / first.slope - oh
