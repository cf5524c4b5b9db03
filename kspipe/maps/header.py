"""Reading the sky coordinates and the observed frequency off a header."""

from __future__ import annotations

import math
import warnings
from typing import Final

import astropy.units as u
import numpy as np
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS, FITSFixedWarning
from astropy.wcs.utils import pixel_to_skycoord, skycoord_to_pixel, wcs_to_celestial_frame
from numpy.typing import NDArray

from kspipe.core.constants import C_KM_S, DEG_ARCSEC
from kspipe.core.errors import Fault, GridError
from kspipe.core.tracers import Tracer
from kspipe.kernels.coarse import evaluate_smoothly

__all__ = [
    "celestial_wcs",
    "header_frequency_ghz",
    "observed_frequency_ghz",
    "pixel_area_at",
    "pixel_areas_arcsec2",
    "pixel_jacobian",
    "shifted_wcs",
    "sky_of_pixels",
]

Array = NDArray[np.float64]

# Pixel sizes by CD and by CDELT may differ by rounding.
SIZE_TOLERANCE: Final = 0.01
# Header and galaxy velocity may differ by a rotation curve, not by more.
VELOCITY_TOLERANCE: Final = 0.002


def celestial_wcs(header: fits.Header, where: str) -> WCS:
    """Read the celestial coordinates of a map.

    Raises
    ------
    GridError
        If the header has no celestial axes, no pixel size, or an absurd one.
    """
    if not _has_pixel_size(header):
        raise GridError(
            Fault(
                where,
                "the header has no pixel size (CDELT1 and CDELT2, or a CD matrix)",
                "add CDELT1 and CDELT2 to a copy of the file",
            )
        )
    _refuse_two_sizes(header, where)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FITSFixedWarning)
        try:
            whole = WCS(header)
            wcs = whole.celestial
            has_sky = wcs.has_celestial and wcs.naxis == 2
            if has_sky:
                wcs_to_celestial_frame(wcs)
        except Exception as error:  # astropy raises many kinds for malformed cards
            raise GridError(Fault(where, f"the sky coordinates cannot be read: {error}")) from error
    kinds = [header.get(f"CTYPE{i}", "absent") for i in (1, 2)]
    if not has_sky or (whole.wcs.lng, whole.wcs.lat) != (0, 1):
        swapped = has_sky and (whole.wcs.lng, whole.wcs.lat) == (1, 0)
        raise GridError(
            Fault(
                where,
                f"no sky coordinates: CTYPE1 and CTYPE2 are {kinds[0]!r} and {kinds[1]!r}; "
                "expected a pair such as 'RA---TAN' and 'DEC--TAN' on axes 1 and 2",
                "exchange the axes of a copy of the map"
                if swapped
                else "give a map with a celestial WCS",
            )
        )
    scale_arcsec = math.sqrt(abs(float(np.linalg.det(wcs.pixel_scale_matrix)))) * DEG_ARCSEC
    if not 1e-3 < scale_arcsec < 2 * DEG_ARCSEC:
        raise GridError(
            Fault(
                where,
                f"pixels of {scale_arcsec:.3g} arcsec; expected 0.001 arcsec to 2 degrees",
                "check CDELT and CUNIT (degrees are expected)",
            )
        )
    return wcs


def _has_pixel_size(header: fits.Header) -> bool:
    """Whether the size is said for both axes; the standard's default is one degree."""
    by_step = all(isinstance(header.get(f"CDELT{axis}"), int | float) for axis in (1, 2))
    return by_step or any(f"CD{i}_{j}" in header for i in (1, 2) for j in (1, 2))


def _refuse_two_sizes(header: fits.Header, where: str) -> None:
    """Refuse a CD matrix and CDELT cards that give pixels of different size."""
    keys = ("CD1_1", "CD1_2", "CD2_1", "CD2_2")
    by_matrix = [header.get(key, 0.0) for key in keys]
    by_step = [header.get(f"CDELT{axis}") for axis in (1, 2)]
    known = [value for value in (*by_matrix, *by_step) if isinstance(value, int | float)]
    if not any(key in header for key in keys) or len(known) < len(keys) + len(by_step):
        return
    cd = math.sqrt(abs(by_matrix[0] * by_matrix[3] - by_matrix[1] * by_matrix[2]))
    cdelt = math.sqrt(abs(by_step[0] * by_step[1]))
    # Many writers leave CDELT = 1 beside a CD matrix, as the standard's default has it.
    if cd > 0 and cdelt not in (0.0, 1.0) and abs(cdelt / cd - 1.0) > SIZE_TOLERANCE:
        raise GridError(
            Fault(
                where,
                f"the CD matrix gives pixels of {cd * DEG_ARCSEC:.4g} arcsec, CDELT of "
                f"{cdelt * DEG_ARCSEC:.4g} arcsec",
                "remove the wrong cards from a copy of the file",
            )
        )


def shifted_wcs(
    wcs: WCS, shift_arcsec: tuple[float, float], centre_deg: tuple[float, float]
) -> WCS:
    """Add an offset to the sky positions of a map.

    Parameters
    ----------
    wcs : astropy.wcs.WCS
        Celestial, any frame.
    shift_arcsec : (float, float)
        East and north on ICRS.
    centre_deg : (float, float)
        Where the offset is exact, ICRS.

    Returns
    -------
    astropy.wcs.WCS

    Notes
    -----
    The reference pixel is moved, not the reference value: another reference value also turns a
    map about a point that may be far away, in an all-sky projection a quarter of the sky.
    """
    centre = SkyCoord(*centre_deg, unit="deg")
    before = centre.spherical_offsets_by(*(-offset * u.arcsec for offset in shift_arcsec))
    # Mode "wcs" is what the reference pixel counts in, behind any distortion.
    now, then = (np.array(skycoord_to_pixel(at, wcs, mode="wcs")) for at in (centre, before))
    moved = wcs.deepcopy()
    moved.wcs.crpix = wcs.wcs.crpix - (now - then)
    moved.wcs.set()
    return moved


def pixel_jacobian(wcs: WCS, x: Array | float, y: Array | float, *, icrs: bool = True) -> Array:
    """Sky offset (east, north) [arcsec] for one pixel step in x and in y.

    Parameters
    ----------
    wcs : astropy.wcs.WCS
        Celestial, any frame.
    x, y : float or (...) float64 array
        Pixel positions.
    icrs : bool
        East and north of ICRS; else those of the map's own frame, on which its beam angle counts.

    Returns
    -------
    (..., 2, 2) float64 array
        Columns are the steps in x and y.
    """
    half = np.array([[0.5, -0.5, 0.0, 0.0], [0.0, 0.0, 0.5, -0.5]])
    xs, ys = (np.asarray(p, dtype=float)[..., None] + h for p, h in zip((x, y), half, strict=True))
    lon, lat = sky_of_pixels(wcs, xs, ys) if icrs else wcs.all_pix2world(xs, ys, 0)
    dlon = (lon[..., ::2] - lon[..., 1::2] + 180.0) % 360.0 - 180.0
    dlat = lat[..., ::2] - lat[..., 1::2]
    cosine = np.cos(np.radians(np.mean(lat, axis=-1, keepdims=True)))
    return np.stack([dlon * cosine, dlat], axis=-2) * DEG_ARCSEC


def pixel_areas_arcsec2(wcs: WCS, shape: tuple[int, int]) -> Array:
    """Area of each pixel from the local Jacobian [arcsec2], to a millionth."""
    middle = float(pixel_area_at(wcs, np.array((shape[1] - 1) / 2), np.array((shape[0] - 1) / 2)))
    tolerance = 1e-6 * middle if math.isfinite(middle) else 0.0
    (areas,), _ = evaluate_smoothly(lambda x, y: (pixel_area_at(wcs, x, y),), shape, tolerance)
    return areas


def pixel_area_at(wcs: WCS, x: Array, y: Array) -> Array:
    """Area of a pixel-sized square about each position [arcsec2].

    Its corners are put on the unit sphere; the area is half the cross product of the diagonals,
    exact to (pixel size)^2 in radians.
    """

    def corner(dx: float, dy: float) -> Array:
        lon, lat = np.radians(wcs.all_pix2world(x + dx, y + dy, 0))
        return np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], -1)

    h = 0.5
    cross = np.cross(corner(h, h) - corner(-h, -h), corner(h, -h) - corner(-h, h))
    return np.asarray(0.5 * np.linalg.norm(cross, axis=-1) * (180.0 / math.pi * DEG_ARCSEC) ** 2)


def header_frequency_ghz(header: fits.Header) -> float | None:
    """Observed frequency off a degenerate spectral axis of kind FREQ; None where there is none."""
    for axis in range(1, header.get("NAXIS", 0) + 1):
        if str(header.get(f"CTYPE{axis}", "")).startswith("FREQ"):
            unit = str(header.get(f"CUNIT{axis}", "Hz")).strip().lower()
            to_ghz = {"hz": 1e-9, "khz": 1e-6, "mhz": 1e-3, "ghz": 1.0}.get(unit)
            value = header.get(f"CRVAL{axis}")
            if to_ghz is None or not isinstance(value, (int, float)) or value <= 0:
                return None
            offset = (1.0 - header.get(f"CRPIX{axis}", 1.0)) * header.get(f"CDELT{axis}", 0.0)
            return float(value + offset) * to_ghz
    return None


def observed_frequency_ghz(
    tracer: Tracer, header: fits.Header, velocity_kms: float | None, convention: str, where: str
) -> tuple[float, str]:
    """Frequency at which a line was observed, and where that was read.

    Parameters
    ----------
    tracer : Tracer
    header : astropy.io.fits.Header
    velocity_kms : float or None
        The galaxy's velocity, if the recipe gives it.
    convention : {"optical", "radio"}
        v/c = nu0/nu - 1 or 1 - nu/nu0.
    where : str
        For messages.

    Returns
    -------
    frequency_ghz : float
    origin : str

    Raises
    ------
    GridError
        If neither recipe nor header tells, or if they contradict each other.
    """
    from_header = header_frequency_ghz(header)
    if velocity_kms is None:
        if from_header is None:
            raise GridError(
                Fault(
                    where,
                    "Jy per beam needs the observed frequency, and the header has no FREQ axis",
                    'type galaxy.velocity = "... km/s"',
                )
            )
        return from_header, "header FREQ axis"
    beta = velocity_kms / C_KM_S
    frequency = tracer.frequency_ghz * (
        1.0 / (1.0 + beta) if convention == "optical" else 1.0 - beta
    )
    if from_header is not None and abs(from_header / frequency - 1.0) > VELOCITY_TOLERANCE:
        raise GridError(
            Fault(
                where,
                f"the header's FREQ axis says {from_header:.6g} GHz, galaxy.velocity gives "
                f"{frequency:.6g} GHz for {tracer.key}",
                "correct galaxy.velocity or the tracer",
            )
        )
    return frequency, f"galaxy.velocity, {convention} convention"


def sky_of_pixels(wcs: WCS, x: Array, y: Array) -> tuple[Array, Array]:
    """ICRS longitude and latitude [deg] of pixel positions in any celestial frame."""
    sky = pixel_to_skycoord(x, y, wcs, origin=0, mode="all").icrs
    return np.asarray(sky.ra.deg), np.asarray(sky.dec.deg)
