"""Small things that many tests need: a WCS, an HDU, a map, a recipe, a comparison of maps."""

from __future__ import annotations

import copy
import math
import tomllib
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS
from demo import load_demo

from kspipe.maps import MapRequest, MapSource, NoiseRequest
from kspipe.maps.read import load_map
from kspipe.maps.skymap import NoiseTerm, SkyMap

CHECKOUT = Path(__file__).resolve().parents[1]
# Kept apart from the constants of kspipe on purpose.
ARCSEC2_SR = math.radians(1 / 3600) ** 2
SIGMA_PER_FWHM = 1 / math.sqrt(8 * math.log(2))
C_KM_S = 299792.458  # exact, SI

CENTRE = (48.1, -27.31)


def make_wcs(
    shape: tuple[int, int] = (40, 50),
    pixel_arcsec: float = 2.0,
    *,
    centre: tuple[float, float] = CENTRE,
    rotation_deg: float = 0.0,
    flip: bool = False,
    projection: str = "TAN",
    axes: tuple[str, str] = ("RA--", "DEC-"),
    crpix: tuple[float, float] | None = None,
) -> WCS:
    """Celestial WCS with `centre` on the middle of the array; longitude grows to the left."""
    ny, nx = shape
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = [f"{axis}-{projection}" for axis in axes]
    wcs.wcs.cunit = ["deg", "deg"]
    wcs.wcs.crval = list(centre)
    wcs.wcs.crpix = [(nx + 1) / 2, (ny + 1) / 2] if crpix is None else list(crpix)
    turn = math.radians(rotation_deg)
    step = pixel_arcsec / 3600
    matrix = np.array([[math.cos(turn), -math.sin(turn)], [math.sin(turn), math.cos(turn)]])
    if rotation_deg:
        wcs.wcs.cd = matrix @ np.diag([step if flip else -step, step])
    else:
        wcs.wcs.cdelt = [step if flip else -step, step]
    if axes[0].startswith("RA"):
        wcs.wcs.radesys = "ICRS"
    wcs.wcs.set()
    return wcs


def make_hdu(
    data: np.ndarray,
    *,
    wcs: WCS | None = None,
    unit: str | None = "K km/s",
    beam_arcsec: float | tuple[float, float, float] | None = 8.0,
    cards: dict[str, Any] | None = None,
    pixel_arcsec: float = 2.0,
) -> fits.PrimaryHDU:
    """Image with sky coordinates, unit and beam; a card given as None is taken out."""
    header = (wcs or make_wcs(data.shape[-2:], pixel_arcsec)).to_header()
    if unit is not None:
        header["BUNIT"] = unit
    if beam_arcsec is not None:
        beam = beam_arcsec if isinstance(beam_arcsec, tuple) else (beam_arcsec, beam_arcsec, 0.0)
        header["BMAJ"], header["BMIN"], header["BPA"] = beam[0] / 3600, beam[1] / 3600, beam[2]
    hdu = fits.PrimaryHDU(data, header)
    for key, value in (cards or {}).items():
        if value is None:
            del hdu.header[key]
        else:
            hdu.header[key] = value
    return hdu


def make_request(file: Path | str = "map.fits", /, **changes: Any) -> MapRequest:
    """Request for a map called ``probe`` with a stated noise of one stored unit."""
    noise = NoiseRequest("value", value=1.0)
    given: dict[str, Any] = {"name": "probe", "tracer": "HI", "noise": noise}
    return MapRequest(file=Path(file), **(given | changes))


def open_source(
    image: fits.PrimaryHDU | Path,
    /,
    *,
    noise_hdu: fits.PrimaryHDU | None = None,
    velocity_kms: float | None = None,
    convention: str = "optical",
    centre: tuple[float, float] = CENTRE,
    **changes: Any,
) -> MapSource:
    """Open a file, or an HDU in memory."""
    in_file = isinstance(image, Path)
    return MapSource.open(
        make_request(image if in_file else "map.fits", **changes),
        centre_deg=centre,
        velocity_kms=velocity_kms,
        velocity_convention=convention,
        memory=None if in_file else (image, noise_hdu),
    )


def read_map(image: fits.PrimaryHDU | Path, /, **changes: Any) -> SkyMap:
    """Open and load."""
    return load_map(open_source(image, **changes))


def make_sky(
    value: np.ndarray,
    *,
    wcs: WCS,
    beam_arcsec2: np.ndarray,
    unit: str = "MJy/sr",
    noise: tuple[NoiseTerm, ...] = (),
    averages_pixels: bool = False,
    name: str = "probe",
) -> SkyMap:
    """Map on its own pixels."""
    return SkyMap(
        name=name,
        tracer="24um",
        value=value,
        noise=noise,
        coverage=np.isfinite(value).astype(float),
        flags=np.zeros(value.shape, dtype=np.int32),
        unit=unit,
        wcs=wcs,
        beam_arcsec2=beam_arcsec2,
        averages_pixels=averages_pixels,
    )


def round_beam(fwhm_arcsec: float) -> np.ndarray:
    """Covariance of a round Gaussian, written out."""
    return (fwhm_arcsec * SIGMA_PER_FWHM) ** 2 * np.eye(2)


def elliptical_beam(major: float, minor: float, pa_deg: float) -> np.ndarray:
    """Covariance on (east, north); the angle runs from north through east."""
    pa = math.radians(pa_deg)
    turn = np.array([[math.sin(pa), -math.cos(pa)], [math.cos(pa), math.sin(pa)]])
    return turn @ np.diag([major**2, minor**2]) @ turn.T * SIGMA_PER_FWHM**2


def assert_maps_close(
    first: np.ndarray, second: np.ndarray, *, rtol: float, atol: float = 0.0
) -> None:
    """Blank in the same pixels, close in the others; at least one pixel must be seen."""
    first, second = np.asarray(first, dtype=float), np.asarray(second, dtype=float)
    assert first.shape == second.shape
    np.testing.assert_array_equal(np.isfinite(first), np.isfinite(second))
    seen = np.isfinite(first)
    assert seen.any()
    np.testing.assert_allclose(first[seen], second[seen], rtol=rtol, atol=atol)


@cache
def _demo_hdus() -> dict[str, fits.PrimaryHDU]:
    return load_demo().paint(noise_seed=1)


def demo_recipe(folder: Path, **changes: Any) -> dict[str, Any]:
    """Write the demonstration maps to `folder`; return recipes/orrinda_short.toml on them.

    Changes replace whole tables (``None`` takes one out). Fits take seconds and are off unless
    ``comparison`` is among the changes.
    """
    text = (CHECKOUT / "recipes" / "orrinda_short.toml").read_text(encoding="utf-8")
    raw = tomllib.loads(text.replace("../demo_maps/", ""))
    for stem, hdu in _demo_hdus().items():
        if not (folder / f"{stem}.fits").exists():
            hdu.writeto(folder / f"{stem}.fits")
    raw |= {"comparison": {"fits": False}, **changes}
    return copy.deepcopy({key: value for key, value in raw.items() if value is not None})
