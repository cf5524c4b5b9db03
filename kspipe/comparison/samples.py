"""Which pixels are independent, how many there are in effect, and what a fit is given."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, ShapeError
from kspipe.kernels.geometry import beam_area, hexagonal_lattice
from kspipe.kernels.latent import Measurements

__all__ = [
    "LEAST_SAMPLES",
    "SPACING_BEAMS",
    "LinearSamples",
    "independent_beams",
    "independent_samples",
    "lattice_phases",
]

Array = NDArray[np.float64]

# Two noise values this many FWHM apart correlate by exp(-2 ln 2 x 1.5^2) = 0.044.
SPACING_BEAMS: Final = 1.5
# A line with scatter has three numbers; fewer points than this give no error worth printing.
LEAST_SAMPLES: Final = 10
# Sum of all values over its error, below which nothing was detected.
_DETECTION: Final = 3.0


@dataclass(frozen=True)
class LinearSamples:
    """Independent pairs of measurements in linear units, negative ones included.

    Attributes
    ----------
    x : (n,) float64 array
        Sigma_gas or Sigma_mol [Msun/pc2].
    y : (n,) float64 array
        Sigma_SFR [Msun/yr/kpc2].
    var_x, var_y, cov : (n,) float64 array
        Random variances and covariance of x and y.
    """

    x: Array
    y: Array
    var_x: Array
    var_y: Array
    cov: Array

    def __post_init__(self) -> None:
        shapes = {name: np.shape(getattr(self, name)) for name in ("x", "y", *_VARIANCES)}
        if len(set(shapes.values())) > 1 or len(next(iter(shapes.values()))) != 1:
            raise ShapeError(Fault("samples", f"arrays differ in shape or are not 1-D: {shapes}"))

    @property
    def usable(self) -> NDArray[np.bool_]:
        """Finite values with positive variances; whether they are positive does not matter."""
        finite = np.all([np.isfinite(getattr(self, name)) for name in ("x", "y", *_VARIANCES)], 0)
        return np.asarray(finite & (self.var_x > 0) & (self.var_y > 0))

    @property
    def n(self) -> int:
        """Number of usable samples."""
        return int(self.usable.sum())

    def take(self, which: Array | NDArray[np.bool_] | NDArray[np.intp]) -> LinearSamples:
        """Return part of the samples."""
        return LinearSamples(*(getattr(self, name)[which] for name in ("x", "y", *_VARIANCES)))

    def measurements(self) -> Measurements:
        """Usable samples as a kernel takes them."""
        kept = self.take(self.usable)
        return Measurements(kept.x, kept.y, kept.var_x, kept.var_y, kept.cov)

    def obstacle(self) -> str | None:
        """Say why nothing can be fitted; None where a fit makes sense."""
        kept = self.take(self.usable)
        if kept.n < LEAST_SAMPLES:
            return (
                f"{kept.n} independent samples: a fit needs {LEAST_SAMPLES}; "
                "use a smaller beam or a larger field"
            )
        for name, value, variance in (("gas", kept.x, kept.var_x), ("SFR", kept.y, kept.var_y)):
            signal = float(value.sum() / np.sqrt(variance.sum()))
            if signal < _DETECTION:
                return (
                    f"{name} is not detected: the sum of {kept.n} samples is {signal:.1f} times "
                    f"its error, less than {_DETECTION:g}"
                )
        return None

    @property
    def is_one_map(self) -> bool:
        """Whether x and y carry the same noise to within 1 %, as multiples of one map do."""
        kept = self.take(self.usable)
        return bool(kept.x.size and np.all(kept.cov**2 > 0.99**2 * kept.var_x * kept.var_y))


_VARIANCES: Final = ("var_x", "var_y", "cov")


def independent_samples(
    shape: tuple[int, int], centre_pixel: tuple[float, float], pixels_per_beam: float
) -> NDArray[np.bool_]:
    """Mark phase 0 of a hexagonal lattice through the galaxy's centre, 1.5 beams apart or more."""
    return hexagonal_lattice(shape, centre_pixel, SPACING_BEAMS * pixels_per_beam)


def lattice_phases(
    shape: tuple[int, int],
    centre_pixel: tuple[float, float],
    pixels_per_beam: float,
    n_phases: int = 4,
) -> list[NDArray[np.bool_]]:
    """Shift the hexagonal lattice to the middles of its cells.

    Parameters
    ----------
    shape, centre_pixel, pixels_per_beam
        As for `independent_samples`.
    n_phases : int
        1 to 4: the lattice itself, then shifted by half of either or of both of its vectors.

    Returns
    -------
    list of (ny, nx) bool array
        Phase 0 first.
    """
    spacing = SPACING_BEAMS * pixels_per_beam
    half, row = 0.5 * spacing, 0.5 * spacing * np.sqrt(0.75)
    shifts = [(0.0, 0.0), (half, 0.0), (0.5 * half, row), (-0.5 * half, row)][:n_phases]
    return [
        hexagonal_lattice(shape, (centre_pixel[0] + dx, centre_pixel[1] + dy), spacing)
        for dx, dy in shifts
    ]


def independent_beams(
    n_pixels: int, pixel_area_arcsec2: float, beam_arcsec2: NDArray[np.float64]
) -> float:
    """Effective number of independent values for the mean over an area.

    Noise correlated like the beam sums coherently over two beam areas, so that the number is area
    / (2 beam areas).
    """
    return n_pixels * pixel_area_arcsec2 / (2.0 * beam_area(beam_arcsec2))
