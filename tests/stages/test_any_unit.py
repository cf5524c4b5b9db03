"""The same sky, stored in other units, gives the same surface densities."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.io import fits
from demo_disc import disc_of, matched_maps, recipe_of, shared_folder

from kspipe.maps.skymap import SkyMap
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import match_one
from kspipe.stages.surface import surfaces_of

K, C = 1.380649e-23, 299792458.0  # exact, SI
ARCSEC = np.pi / 648000


def rayleigh_jeans(frequency_hz: float, beam_sr: float) -> float:
    """Kelvin for 1 Jy/beam: c^2 / (2 k nu^2) per solid angle (textbook)."""
    return C**2 / (2 * K * frequency_hz**2) * 1e-26 / beam_sr


def gaussian_sr(header: fits.Header) -> float:
    axes = header["BMAJ"] * header["BMIN"] * 3600**2 * ARCSEC**2
    return float(np.pi / (4 * np.log(2)) * axes)


def pixel_sr(header: fits.Header) -> np.ndarray:
    """Solid angle of each pixel of a gnomonic map: cos^3 of the distance from its centre."""
    y, x = np.indices((header["NAXIS2"], header["NAXIS1"]))
    steps = [np.radians(header[f"CDELT{i}"]) for i in (1, 2)]
    offsets = np.hypot((x + 1 - header["CRPIX1"]) * steps[0], (y + 1 - header["CRPIX2"]) * steps[1])
    return np.asarray(abs(steps[0] * steps[1]) * np.cos(np.arctan(offsets)) ** 3)


def hdu_in(name: str, unit: str, factor: float | np.ndarray) -> fits.PrimaryHDU:
    with fits.open(shared_folder() / f"{name}.fits") as hdus:
        header = hdus[0].header.copy()
        data = hdus[0].data.astype(float) * factor
    header["BUNIT"] = unit
    return fits.PrimaryHDU(data, header)


@pytest.mark.slow
def test_the_same_sky_in_any_unit() -> None:
    out = shared_folder()
    base = disc_of(out)
    grid, _ = matched_maps(out)
    hi, co = (fits.getheader(out / f"{name}.fits") for name in ("hi", "co"))
    fuv = fits.getheader(out / "fuv.fits")
    # The line is seen at nu0 / (1 + v / c), optical convention.
    shift = 1 + 640e3 / C
    hi_kelvin = rayleigh_jeans(1420.405751768e6 / shift, gaussian_sr(hi)) * 1e-3
    co_jansky = 1 / rayleigh_jeans(230.538e9 / shift, gaussian_sr(co))
    factors = {
        "hi": ("K km/s", hi_kelvin),
        "co": ("Jy/beam km/s", co_jansky),
        "fuv": ("Jy/pixel", 1e6 * pixel_sr(fuv)),
        "ir": ("mJy/arcsec2", 1e9 * ARCSEC**2),
    }
    files = {"hi": ("hi", "hi_noise"), "co": ("co", None), "fuv": ("fuv", None)}
    files["ir"] = ("mir24", "mir24_noise")
    memory = {
        name: (
            hdu_in(image, *factors[name]),
            hdu_in(noise, *factors[name]) if noise else None,
        )
        for name, (image, noise) in files.items()
    }
    raw = recipe_of(out)
    # The FUV map has no BUNIT that the recipe would not have to give.
    maps = {
        name: table.model_copy(update={"unit": "Jy/pixel" if name == "fuv" else None})
        for name, table in raw.maps.items()
    }
    plan = make_plan(raw.model_copy(update={"maps": maps}), memory)
    matched: dict[str, SkyMap] = {name: match_one(plan, name) for name in plan.sources}
    got = surfaces_of(plan.recipe, matched, grid)
    for name, surface in base.surfaces.items():
        if name in ("f_mol", "t_dep"):
            continue  # ratios blow up rounding where the denominator is near zero
        for mine, theirs in (
            (surface.value, got.surfaces[name].value),
            (surface.error, got.surfaces[name].error),
        ):
            both = np.isfinite(mine)
            np.testing.assert_array_equal(both, np.isfinite(theirs))
            # Matched maps were written in single precision: 6e-8 of each number, and of terms
            # that cancel.
            scale = np.abs(mine[both]).max()
            np.testing.assert_allclose(theirs[both], mine[both], rtol=1e-6, atol=1e-7 * scale)
