"""A map with everything that belongs to it."""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from enum import IntFlag
from typing import Any

import numpy as np
from astropy.wcs import WCS
from numpy.typing import NDArray

from kspipe.kernels.noise import NoiseTerm, total_error
from kspipe.maps.psf import PsfImage

__all__ = ["CommonError", "Flag", "NoiseTerm", "SkyMap", "Step"]

Array = NDArray[np.float64]


class Flag(IntFlag):
    """What a pixel's flags say; one meaning for each bit in every map and table."""

    NONPOSITIVE_SFR = 1
    NONPOSITIVE_GAS = 2
    LOW_SNR = 4
    OUTSIDE_RANGE = 8
    LOW_COVERAGE = 16
    NO_SOLUTION = 32
    USER_MASK = 64
    BRIDGED = 128
    # alpha_CO depends on the gas that it gives, and CO is negative: taken at zero CO.
    NEGATIVE_CO = 256
    # Neither C+ nor anything colder than 500 K can carry off the heat.
    NO_COLD_SOLUTION = 512
    # Without CO, more than one amount of gas leaves the observed HI atomic.
    SEVERAL_ROOTS = 1024

    @classmethod
    def meanings(cls) -> dict[str, int]:
        """Return the names, in lower case, with their values."""
        return {flag.name.lower(): flag.value for flag in cls if flag.name}


@dataclass(frozen=True)
class CommonError:
    """An error that all pixels of a map share; never part of the random error.

    Attributes
    ----------
    calibration : float
        Fractional 1-sigma error of the flux scale.
    pedestal : float
        1-sigma error of the zero level, in the map's unit.
    matching : float
        Fractional 1-sigma error of a band whose PSF is no Gaussian but is read as one.
    """

    calibration: float = 0.0
    pedestal: float = 0.0
    matching: float = 0.0


@dataclass(frozen=True)
class Step:
    """What one step did to a map, and what it left.

    Attributes
    ----------
    step, what, origin : str
        Its name, what was read or done, and who said so.
    flux : float
        On the grid's sky [unit of the map times sr].
    noise : float
        Median random 1-sigma error there [unit of the map].
    n_pixels : int
        Observed pixels there.
    detail : dict
        Further plain values for the summary.
    """

    step: str
    what: str
    origin: str
    flux: float
    noise: float
    n_pixels: int
    detail: dict[str, Any] = field(default_factory=dict)


@dataclass(frozen=True)
class SkyMap:
    """An intensity map on the sky.

    Attributes
    ----------
    name, tracer : str
        The recipe's name for the map and what it is a map of.
    value : (ny, nx) float64 array
        Intensity in `unit`; NaN where not observed.
    noise : tuple of NoiseTerm
    coverage : (ny, nx) float64 array
        Share of the beam that fell on observed sky, 0 to 1.
    flags : (ny, nx) int32 array
        Bits of `Flag`.
    unit : str
        Canonical unit of the tracer.
    wcs : astropy.wcs.WCS
        Celestial, two axes.
    beam_arcsec2 : (2, 2) float64 array
        Beam covariance on (east, north).
    averages_pixels : bool
        Whether a value is the mean over its pixel on top of the beam (detectors) or the intensity
        at the pixel's centre (radio).
    psf : PsfImage or None
        Point-spread function that stands for the beam, of a map on its own pixels.
    common : CommonError
    history : tuple of str
        Every step, in order.
    steps : tuple of Step
        The steps that are shown in a table, with the flux and noise that each left.
    facts : dict
        Numbers worth showing: flux before and after, origins of unit, beam and noise.
    """

    name: str
    tracer: str
    value: Array
    noise: tuple[NoiseTerm, ...]
    coverage: Array
    flags: NDArray[np.int32]
    unit: str
    wcs: WCS
    beam_arcsec2: Array
    averages_pixels: bool
    psf: PsfImage | None = None
    common: CommonError = CommonError()
    history: tuple[str, ...] = ()
    steps: tuple[Step, ...] = ()
    facts: dict[str, object] = field(default_factory=dict)

    @property
    def error(self) -> Array:
        """Random 1-sigma error: the root sum of squares of the terms."""
        return total_error(self.noise)

    def with_step(self, step: str, **changes: object) -> SkyMap:
        """Return a changed copy with one more line of history."""
        return replace(self, history=(*self.history, step), **changes)  # type: ignore[arg-type]
