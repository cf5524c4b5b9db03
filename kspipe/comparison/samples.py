"""Which pixels are independent, and how many there are in effect."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.geometry import beam_area, hexagonal_lattice

__all__ = ["SPACING_BEAMS", "independent_beams", "independent_samples"]

# Two noise values this many FWHM apart correlate by exp(-2 ln 2 x 1.5^2) = 0.044.
SPACING_BEAMS: Final = 1.5


def independent_samples(
    shape: tuple[int, int], centre_pixel: tuple[float, float], pixels_per_beam: float
) -> NDArray[np.bool_]:
    """Mark phase 0 of a hexagonal lattice through the galaxy's centre, 1.5 beams apart or more."""
    return hexagonal_lattice(shape, centre_pixel, SPACING_BEAMS * pixels_per_beam)


def independent_beams(
    n_pixels: int, pixel_area_arcsec2: float, beam_arcsec2: NDArray[np.float64]
) -> float:
    """Effective number of independent values for the mean over an area.

    Noise correlated like the beam sums coherently over two beam areas, so that the number is area
    / (2 beam areas).
    """
    return n_pixels * pixel_area_arcsec2 / (2.0 * beam_area(beam_arcsec2))
