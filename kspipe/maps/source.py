"""A map as it lies on disk: what its header says, before any pixel is read."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from typing import Final

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS
from astropy.wcs.utils import skycoord_to_pixel
from numpy.typing import NDArray

from kspipe.core.errors import BeamError, Fault, GridError, MapError, ShapeError
from kspipe.core.tracers import TRACERS, Tracer
from kspipe.kernels.geometry import beam_area
from kspipe.maps.beams import Beam, find_beam
from kspipe.maps.header import (
    celestial_wcs,
    observed_frequency_ghz,
    pixel_jacobian,
    shifted_wcs,
)
from kspipe.maps.intensity import (
    Door,
    UnitReading,
    linear_door,
    open_door,
    read_stored_unit,
    refuse_unused_counts,
)
from kspipe.maps.psf import PsfImage, read_psf
from kspipe.maps.request import MapRequest
from kspipe.maps.stored import StoredImage

__all__ = ["MapSource"]

Array = NDArray[np.float64]

# A beam of more pixels than this is BMAJ in the wrong unit, not a map.
MOST_PIXELS_PER_BEAM: Final = 300.0


@dataclass(frozen=True)
class MapSource:
    """A map whose header was read and found usable.

    Attributes
    ----------
    request : MapRequest
    image : StoredImage
    noise_image : StoredImage or None
    wcs : astropy.wcs.WCS
        Celestial part, with the recipe's shift.
    beam : Beam
    unit : UnitReading
    door : Door
        From stored numbers to the canonical intensity.
    noise_door : Door
        From stored noise numbers (as sigma) to the canonical intensity; that of the map where
        the noise is in its unit.
    pedestal : float
        1-sigma error of the zero level, canonical intensity.
    jacobian_arcsec : (2, 2) float64 array
        ICRS offset (east, north) per pixel step at the galaxy's centre.
    beam_arcsec2 : (2, 2) float64 array
        Beam covariance on ICRS axes.
    psf : PsfImage or None
        What the map is smoothed from instead of the beam.
    """

    request: MapRequest
    image: StoredImage
    noise_image: StoredImage | None
    wcs: WCS
    beam: Beam
    unit: UnitReading
    door: Door
    noise_door: Door
    pedestal: float
    jacobian_arcsec: Array
    beam_arcsec2: Array
    psf: PsfImage | None = None

    @property
    def tracer(self) -> Tracer:
        """What it is a map of."""
        return TRACERS[self.request.tracer]

    @property
    def pixel_arcsec(self) -> float:
        """Side of a square pixel of the same area, at the galaxy's centre."""
        return math.sqrt(abs(float(np.linalg.det(self.jacobian_arcsec))))

    @classmethod
    def open(
        cls,
        request: MapRequest,
        *,
        centre_deg: tuple[float, float],
        velocity_kms: float | None,
        velocity_convention: str,
        memory: tuple[fits.PrimaryHDU, fits.PrimaryHDU | None] | None = None,
    ) -> MapSource:
        """Read the header of a map and check everything that it can tell.

        Parameters
        ----------
        request : MapRequest
        centre_deg : (float, float)
            The galaxy's centre, ICRS.
        velocity_kms, velocity_convention
            See `observed_frequency_ghz`.
        memory : tuple of HDU, optional
            The map and its noise in memory, read instead of the files.

        Raises
        ------
        MapError
            One of its kinds, saying what to type.
        """
        where = f"maps.{request.name}"
        tracer = TRACERS[request.tracer]
        image = StoredImage.find(request.file, request.hdu, memory[0] if memory else None)
        wcs = celestial_wcs(image.header, f"{where}, {image}")
        if any(request.shift_arcsec):
            wcs = shifted_wcs(wcs, request.shift_arcsec, centre_deg)
        unit = read_stored_unit(
            image.header.get("BUNIT"), request.unit, tracer, f"{where}, {image}"
        )
        x, y = _centre_pixel(wcs, image.shape, centre_deg)
        own, jacobian = pixel_jacobian(wcs, x, y, icrs=False), pixel_jacobian(wcs, x, y)
        if not abs(float(np.linalg.det(own))) > 0:
            raise GridError(
                Fault(
                    f"{where}, {image}",
                    f"neighbouring pixels lie at one place on the sky: CRVAL1 and CRVAL2 are "
                    f"{image.header.get('CRVAL1')!r} and {image.header.get('CRVAL2')!r}",
                    "check CRVAL1 and CRVAL2 (degrees are expected)",
                )
            )
        to_icrs = jacobian @ np.linalg.inv(own)
        pixel_area = abs(float(np.linalg.det(own)))
        psf = _psf(request, jacobian, where)
        beam, is_stated = _beam(request, image, psf, np.linalg.inv(to_icrs), where)
        _check_beam(beam, math.sqrt(pixel_area), image, where, request)
        refuse_unused_counts(unit, request.counts, request.zero_point, f"{where}, {image}")

        def through(reading: UnitReading, at: str) -> Door:
            frequency, note = None, ""
            if reading.needs_frequency and tracer.unit == "K km/s":
                frequency, note = observed_frequency_ghz(
                    tracer, image.header, velocity_kms, velocity_convention, at
                )
            return open_door(
                reading,
                tracer,
                frequency_ghz=frequency,
                frequency_note=note,
                # A PSF image has no solid angle that a unit could count by.
                beam_area_arcsec2=beam_area(beam.covariance_arcsec2) if is_stated else None,
                pixel_area_arcsec2=pixel_area,
                counts=request.counts,
                zero_point=request.zero_point,
                wavelength_um=request.wavelength_um,
                where=at,
            )

        door = through(unit, f"{where}, {image}")
        noise_image, noise_door = _noise(request, image, tracer, door, through, memory)
        pedestal = 0.0
        if request.pedestal_error is not None:
            level, text = request.pedestal_error
            at = f"{where}.pedestal_error"
            reading = read_stored_unit(None, text, tracer, at, key=at)
            pedestal = level * linear_door(through(reading, at), tracer, at).factor
        return cls(
            request=request,
            image=image,
            noise_image=noise_image,
            wcs=wcs,
            beam=beam,
            unit=unit,
            door=door,
            noise_door=noise_door,
            pedestal=pedestal,
            jacobian_arcsec=jacobian,
            beam_arcsec2=to_icrs @ beam.covariance_arcsec2 @ to_icrs.T,
            psf=psf,
        )


def _psf(request: MapRequest, jacobian_arcsec: Array, where: str) -> PsfImage | None:
    if request.psf is None:
        return None
    image = StoredImage.find(request.psf, None)
    return read_psf(
        image.read(), image.header, jacobian_arcsec, str(image), f"{where}.psf, {image}"
    )


def _beam(
    request: MapRequest, image: StoredImage, psf: PsfImage | None, to_own: Array, where: str
) -> tuple[Beam, bool]:
    """Find the Gaussian beam, or that of the PSF image's core; and say whether it was stated."""
    beam = find_beam(
        image.header, image.beams, typed=request.beam, name=request.name, where=f"{where}, {image}"
    )
    if beam is not None:
        return beam, True
    if psf is not None:
        core = to_own @ psf.core_arcsec2 @ to_own.T
        return Beam.from_covariance(core, f"the core of the {psf.origin}"), False
    raise BeamError(
        Fault(
            f"{where}, {image}",
            "the header has no beam (no BMAJ, no table BEAMS, none in HISTORY)",
            'type beam = "... arcsec" for this map, or psf = "file.fits"',
        )
    )


def _check_beam(
    beam: Beam, pixel_arcsec: float, image: StoredImage, where: str, request: MapRequest
) -> None:
    """Refuse a beam that no map of these pixels can have."""
    ratio = beam.minor_arcsec / pixel_arcsec
    if ratio < 1.0 and not request.averages_pixels:
        raise BeamError(
            Fault(
                where,
                f"a beam of {beam} ({beam.origin}) is narrower than the pixels of "
                f"{pixel_arcsec:.4g} arcsec: no map sampled at points is written so",
                'type beam = "... arcsec" for this map, or averages_pixels = true if values are '
                "means over the pixel",
            )
        )
    field_arcsec = max(image.shape) * pixel_arcsec
    if ratio > MOST_PIXELS_PER_BEAM or beam.major_arcsec > field_arcsec or ratio < 0.2:
        raise BeamError(
            Fault(
                f"{where}, {image}",
                f"a beam of {beam} ({beam.origin}) on pixels of {pixel_arcsec:.4g} arcsec and a "
                f"field of {field_arcsec:.4g} arcsec is not plausible; BMAJ counts in degrees",
                'type beam = "... arcsec" for this map',
            )
        )


def _centre_pixel(
    wcs: WCS, shape: tuple[int, int], centre_deg: tuple[float, float]
) -> tuple[float, float]:
    """Pixel of the galaxy's centre, or of the image's where the galaxy is outside."""
    x, y = skycoord_to_pixel(SkyCoord(*centre_deg, unit="deg"), wcs, origin=0, mode="wcs")
    inside = -0.5 <= x <= shape[1] - 0.5 and -0.5 <= y <= shape[0] - 0.5
    return (float(x), float(y)) if inside else ((shape[1] - 1) / 2, (shape[0] - 1) / 2)


def _noise(
    request: MapRequest,
    image: StoredImage,
    tracer: Tracer,
    door: Door,
    through: Callable[[UnitReading, str], Door],
    memory: tuple[fits.PrimaryHDU, fits.PrimaryHDU | None] | None,
) -> tuple[StoredImage | None, Door]:
    """Find the noise image, check its shape, and open its door."""
    where = f"maps.{request.name}.noise"
    noise = request.noise
    if noise.gain is not None or noise.kind == "measure":
        linear_door(door, tracer, where)
    if noise.kind == "measure":
        return None, door
    if noise.kind == "value":
        if noise.unit:
            door = through(read_stored_unit(None, noise.unit, tracer, where, key=where), where)
        return None, linear_door(door, tracer, where)
    if noise.file is None:
        raise MapError(Fault(where, "no file is given"))
    found = StoredImage.find(noise.file, noise.hdu, memory[1] if memory else None)
    if found.shape != image.shape:
        raise ShapeError(
            Fault(
                f"{where}, {found}",
                f"the noise map has {found.shape[1]} x {found.shape[0]} pixels, the map "
                f"{image.shape[1]} x {image.shape[0]}",
                "give a noise map on the pixels of the map",
            )
        )
    # A unit typed for the map holds for its noise too where both files carry the same card.
    cards = [str(one.header.get("BUNIT") or "").strip() for one in (found, image)]
    if noise.stated == "sigma" and cards[0] and cards[0] != cards[1]:
        at = f"{where}, {found}"
        door = through(read_stored_unit(cards[0], None, tracer, at), at)
    return found, linear_door(door, tracer, where)
