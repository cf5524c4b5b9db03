"""The quantities that may vary over the disc, each with its unit and its possible values."""

from __future__ import annotations

import math
from typing import Annotated, Final

from kspipe.recipe.varying import Kind, Varying, varying

__all__ = [
    "ABUNDANCE",
    "ALPHA_CO_VALUE",
    "FIELD_STRENGTH",
    "FRACTION",
    "RATIO",
    "Abundance",
    "FieldStrength",
    "Fraction",
    "LineMap",
    "MetalContent",
    "Ratio",
    "RatioOrZero",
    "Reddening",
]

ABUNDANCE: Final = Kind("", '8.69 or "8.69 +- 0.05"', 6.5, 9.5, "12+log10(O/H) between 6.5 and 9.5")
METAL_CONTENT: Final = Kind("", '0.5 or "0.5 +- 0.1"', 0, 10, "a Z' between 0 and 10")
RATIO: Final = Kind("", '0.65 or "0.65 +- 0.08"', 0, 10, "a ratio between 0 and 10")
RATIO_OR_ZERO: Final = Kind(
    "", '0.3 or "0.3 +- 0.1"', 0, 10, "a ratio, 0 or 0 to 10", from_low=True
)
REDDENING: Final = Kind(
    "", '0.03 or "0.03 +- 0.005"', 0, 3, "E(B-V), 0 or between 0 and 3 mag", from_low=True
)
ALPHA_CO_VALUE: Final = Kind(
    "", '4.35 or "4.35 +- 1.3"', 0, 1000, "alpha_CO between 0 and 1000 Msun/pc2 per K km/s"
)
FRACTION: Final = Kind(
    "", '0.3 or "0.3 +- 0.1"', 0, 1, "a fraction from 0 to below 1", from_low=True
)
FIELD_STRENGTH: Final = Kind("", '1.0 or "1.0 +- 0.3"', 0, math.inf, "a positive field")
LINE_VALUE: Final = Kind("", "-0.6 or 1.2", -math.inf, math.inf, "a number")

Abundance = Annotated[Varying, varying(ABUNDANCE)]
MetalContent = Annotated[Varying, varying(METAL_CONTENT)]
Ratio = Annotated[Varying, varying(RATIO)]
RatioOrZero = Annotated[Varying, varying(RATIO_OR_ZERO)]
Reddening = Annotated[Varying, varying(REDDENING)]
Fraction = Annotated[Varying, varying(FRACTION)]
FieldStrength = Annotated[Varying, varying(FIELD_STRENGTH)]
LineMap = Annotated[Varying, varying(LINE_VALUE)]
