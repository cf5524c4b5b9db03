"""What a recipe asks for one map and its noise, as plain values."""

from __future__ import annotations

import math
from dataclasses import dataclass
from pathlib import Path
from typing import Literal

__all__ = ["MapRequest", "NoiseRequest"]


@dataclass(frozen=True)
class NoiseRequest:
    """How a recipe states the noise of a map.

    Attributes
    ----------
    kind : {"measure", "value", "file"}
    value : float
        1-sigma error per stored pixel, for ``value``.
    unit : str
        Unit of `value`; empty for that of the map.
    file : Path or None
    hdu : int or None
    stated : {"sigma", "variance", "inverse variance"}
        What the numbers in `file` are.
    correlated : {"beam", "none", "measure"}
        Whether the noise has the correlation of the beam (radio), none (detectors), or one to be
        measured on blank sky.
    shape_file : Path or None
        Map of how the noise varies over the field.
    shape_is : {"primary beam", "exposure", "weight", "channels"}
        Noise goes as 1 / primary beam, 1 / sqrt(exposure or weight), sqrt(channels summed).
    gain : float or None
        Photons per stored unit of one pixel: adds photon noise sqrt(value / gain).
    """

    kind: Literal["measure", "value", "file"]
    value: float = math.nan
    unit: str = ""
    file: Path | None = None
    hdu: int | None = None
    stated: Literal["sigma", "variance", "inverse variance"] = "sigma"
    correlated: Literal["beam", "none", "measure"] = "none"
    shape_file: Path | None = None
    shape_is: Literal["primary beam", "exposure", "weight", "channels"] = "primary beam"
    gain: float | None = None


@dataclass(frozen=True)
class MapRequest:
    """What a recipe says of one map; plain values, so that it travels between processes.

    Attributes
    ----------
    name, tracer : str
    file : Path
    noise : NoiseRequest
    hdu : int or None
    unit : str or None
        Overrides BUNIT.
    beam : (float, float, float) or None
        FWHM major, minor [arcsec] and position angle [deg]; overrides the header.
    averages_pixels : bool
        Whether values are means over the pixel on top of the beam.
    calibration_error : float
        Fraction.
    pedestal_error : (float, str) or None
        1-sigma error of the zero level with its unit.
    background : {"keep", "subtract"}
        Whether the level of the sky beyond the galaxy is taken off.
    zeros : {"flux", "blank"} or None
        What pixels at exactly zero mean.
    counts : str or None
        Physical intensity or flux per pixel of one stored count (per second), with its unit.
    zero_point : float or None
        AB magnitude of one stored count (per second).
    wavelength_um : float or None
        Effective wavelength for units per Angstrom; by default that of the tracer.
    psf : Path or None
        Image of the point-spread function, instead of a Gaussian beam.
    regrid : {"spline", "area"} or None
        How the map is brought to the grid; None for the choice by its sampling.
    shift_arcsec : (float, float)
        East and north, added to the map's sky coordinates.
    mask_negative : bool
        Whether connected regions below -4 sigma are taken as not observed.
    short_spacings : {"yes", "no", "unknown"} or None
        Whether an interferometer map holds them.
    largest_scale_arcsec : float or None
        Largest scale that it recovers.
    total_flux : str or None
        Flux by a single dish, with its unit, to compare with.
    """

    name: str
    tracer: str
    file: Path
    noise: NoiseRequest
    hdu: int | None = None
    unit: str | None = None
    beam: tuple[float, float, float] | None = None
    averages_pixels: bool = False
    calibration_error: float = 0.0
    pedestal_error: tuple[float, str] | None = None
    background: Literal["keep", "subtract"] = "keep"
    zeros: Literal["flux", "blank"] | None = None
    counts: str | None = None
    zero_point: float | None = None
    wavelength_um: float | None = None
    psf: Path | None = None
    regrid: Literal["spline", "area"] | None = None
    shift_arcsec: tuple[float, float] = (0.0, 0.0)
    mask_negative: bool = False
    short_spacings: Literal["yes", "no", "unknown"] | None = None
    largest_scale_arcsec: float | None = None
    total_flux: str | None = None
