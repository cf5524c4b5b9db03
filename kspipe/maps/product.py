"""Product files: a value with its extensions, and matched maps with all their noise terms."""

from __future__ import annotations

import json
import textwrap
import unicodedata
import warnings
from collections.abc import Iterable, Mapping
from pathlib import Path
from typing import Any

import numpy as np
from astropy.io import fits
from astropy.wcs import WCS, FITSFixedWarning
from numpy.typing import NDArray

from kspipe.core.constants import DEG_ARCSEC
from kspipe.kernels.correlation import SampledCorrelation
from kspipe.kernels.geometry import beam_axes, beam_covariance
from kspipe.kernels.noise import NoiseTerm
from kspipe.maps.skymap import CommonError, Flag, SkyMap, Step

__all__ = ["read_image", "read_matched", "write_matched", "write_product"]

Array = NDArray[np.float64]

# FITS spelling of the units that products carry.
FITS_UNITS = {
    "K km/s": "K km s-1",
    "MJy/sr": "MJy sr-1",
    "erg/s/cm2/sr": "erg s-1 cm-2 sr-1",
    "Msun/pc2": "solMass pc-2",
    "Msun/yr/kpc2": "solMass yr-1 kpc-2",
}


def write_product(
    path: Path,
    value: Array,
    unit: str,
    wcs: WCS,
    beam_arcsec2: Array,
    *,
    extensions: Mapping[str, tuple[Array | NDArray[np.int32], str]],
    history: Iterable[str],
    cards: Mapping[str, tuple[Any, str]] | None = None,
    tables: Iterable[fits.BinTableHDU] = (),
) -> None:
    """Write one product file.

    Parameters
    ----------
    path : Path
    value : (ny, nx) float64 array
        Primary image.
    unit : str
        BUNIT, in FITS spelling; empty for a pure number.
    wcs : astropy.wcs.WCS
    beam_arcsec2 : (2, 2) float64 array
    extensions : mapping of str to (array, unit)
        Further images by EXTNAME; integer arrays are flags and carry the meaning of their bits.
    history : iterable of str
        One HISTORY entry each.
    cards : mapping of str to (value, comment), optional
        Further cards of the primary header.
    tables : iterable of BinTableHDU
        Put behind the images.
    """
    sky = _sky_header(wcs, beam_arcsec2)
    primary = fits.PrimaryHDU(value.astype(np.float32), header=sky)
    _set_unit(primary.header, unit)
    for key, (card, comment) in (cards or {}).items():
        primary.header[key] = (card, comment)
    for entry in history:
        for line in textwrap.wrap(_ascii(entry), 70, subsequent_indent="  "):
            primary.header.add_history(line)
    hdus = [primary]
    for name, (array, extension_unit) in extensions.items():
        is_flags = np.issubdtype(array.dtype, np.integer)
        # A correlation counts in lags, not on the sky.
        on_sky = sky if array.shape == value.shape else None
        image = fits.ImageHDU(array.astype(np.int32 if is_flags else np.float32), on_sky, name)
        _set_unit(image.header, extension_unit)
        if is_flags:
            for meaning, bit in Flag.meanings().items():
                image.header[f"FLAG{bit}"] = (meaning, "meaning of this bit")
        hdus.append(image)
    fits.HDUList([*hdus, *tables]).writeto(path)


def _ascii(text: str) -> str:
    """Write a text in the letters that FITS knows; accents are dropped, the rest is escaped."""
    plain = unicodedata.normalize("NFKD", text.replace("±", "+-"))
    letters = "".join(c for c in plain if not unicodedata.combining(c))
    return letters.encode("ascii", "backslashreplace").decode()


def _sky_header(wcs: WCS, beam_arcsec2: Array) -> fits.Header:
    header = wcs.to_header()
    for key in ("DATE-OBS", "MJD-OBS", "MJDREF", "MJDREFI", "MJDREFF"):
        header.remove(key, ignore_missing=True)
    major, minor, pa = beam_axes(beam_arcsec2)
    header["BMAJ"] = (major / DEG_ARCSEC, "[deg] beam FWHM, major axis")
    header["BMIN"] = (minor / DEG_ARCSEC, "[deg] beam FWHM, minor axis")
    header["BPA"] = (pa, "[deg] beam angle, north through east")
    return header


def _set_unit(header: fits.Header, unit: str) -> None:
    header["BUNIT"] = (unit, "unit of the image")


def write_matched(path: Path, sky: SkyMap) -> None:
    """Write a matched map with every noise term, so that nothing is smoothed twice."""
    unit = FITS_UNITS[sky.unit]
    extensions: dict[str, tuple[Array | NDArray[np.int32], str]] = {
        f"NOISE{i}": (term.sigma, unit) for i, term in enumerate(sky.noise, 1)
    }
    extensions["COVERAGE"] = (sky.coverage, "")
    extensions["FLAGS"] = (sky.flags, "")
    extensions |= {
        f"NCORR{i}": (term.sampled.values, "")
        for i, term in enumerate(sky.noise, 1)
        if term.sampled is not None
    }
    cards: dict[str, tuple[Any, str]] = {
        "TRACER": (sky.tracer, "what it is a map of"),
        "MAPNAME": (sky.name, "name in the recipe"),
        "CALERR": (sky.common.calibration, "fractional flux-scale error, all pixels"),
        "PEDERR": (sky.common.pedestal, "zero-level error, all pixels"),
        "MATCHERR": (sky.common.matching, "fractional error of a PSF read as Gaussian"),
    }
    for i, term in enumerate(sky.noise, 1):
        cards[f"NSRC{i}"] = (term.source, f"source of NOISE{i}")
        for j, (row, column) in enumerate(((0, 0), (0, 1), (1, 1)), 1):
            cards[f"NCOV{i}{j}"] = (
                float(term.correlation_arcsec2[row, column]),
                "[arcsec2] noise correlation EE, EN, NN",
            )
        if term.sampled is not None:
            for j, step in enumerate(term.sampled.jacobian_arcsec.ravel(), 1):
                cards[f"NJAC{i}{j}"] = (float(step), "[arcsec] Ex, Ey, Nx, Ny of NCORR per pixel")
    write_product(
        path,
        sky.value,
        unit,
        sky.wcs,
        sky.beam_arcsec2,
        extensions=extensions,
        history=sky.history,
        cards=cards,
        tables=[_steps_table(sky.steps)] if sky.steps else [],
    )


_STEP_TEXTS = ("step", "what", "origin")
_STEP_NUMBERS = {"flux": "D", "noise": "D", "n_pixels": "K"}


def _steps_table(steps: tuple[Step, ...]) -> fits.BinTableHDU:
    """Write steps as a table; a FITS table holds ASCII only."""
    texts = {
        key: [getattr(step, key).encode("ascii", "backslashreplace").decode() for step in steps]
        for key in _STEP_TEXTS
    }
    texts["detail"] = [json.dumps(step.detail) for step in steps]
    columns = [
        fits.Column(key, f"{max(1, *map(len, column))}A", array=np.array(column))
        for key, column in texts.items()
    ]
    columns += [
        fits.Column(key, kind, array=np.array([getattr(step, key) for step in steps]))
        for key, kind in _STEP_NUMBERS.items()
    ]
    return fits.BinTableHDU.from_columns(columns, name="STEPS")


def _read_steps(table: NDArray[Any]) -> tuple[Step, ...]:
    return tuple(
        Step(
            **{key: row[key].decode() for key in _STEP_TEXTS},
            flux=float(row["flux"]),
            noise=float(row["noise"]),
            n_pixels=int(row["n_pixels"]),
            detail=json.loads(row["detail"]),
        )
        for row in table
    )


def read_matched(path: Path) -> SkyMap:
    """Read back what `write_matched` wrote (values to single precision)."""
    with fits.open(path) as hdus:
        header = hdus[0].header
        arrays = {hdu.name: np.array(hdu.data) for hdu in hdus[1:]}
        value = np.array(hdus[0].data, dtype=float)
    wcs, beam = _read_sky(header)
    terms = []
    for i in range(1, 100):
        if f"NSRC{i}" not in header:
            break
        ee, en, nn = (float(header[f"NCOV{i}{j}"]) for j in (1, 2, 3))
        correlation = np.array([[ee, en], [en, nn]])
        sampled = None
        if f"NCORR{i}" in arrays:
            jacobian = np.array([header[f"NJAC{i}{j}"] for j in (1, 2, 3, 4)]).reshape(2, 2)
            sampled = SampledCorrelation(arrays[f"NCORR{i}"].astype(float), jacobian)
        sigma = arrays[f"NOISE{i}"].astype(float)
        terms.append(NoiseTerm(header[f"NSRC{i}"], sigma, correlation, sampled))
    canonical = {fits_unit: unit for unit, fits_unit in FITS_UNITS.items()}
    return SkyMap(
        name=header["MAPNAME"],
        tracer=header["TRACER"],
        value=value,
        noise=tuple(terms),
        coverage=arrays["COVERAGE"].astype(float),
        flags=arrays["FLAGS"],
        unit=canonical[header["BUNIT"]],
        wcs=wcs,
        beam_arcsec2=beam,
        averages_pixels=False,
        common=CommonError(
            *(float(header.get(key, 0.0)) for key in ("CALERR", "PEDERR", "MATCHERR"))
        ),
        history=tuple(str(line) for line in header.get("HISTORY", [])),
        steps=_read_steps(arrays["STEPS"]) if "STEPS" in arrays else (),
    )


def _read_sky(header: fits.Header) -> tuple[WCS, Array]:
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", FITSFixedWarning)
        wcs = WCS(header)
    beam = beam_covariance(header["BMAJ"] * DEG_ARCSEC, header["BMIN"] * DEG_ARCSEC, header["BPA"])
    return wcs, beam


def read_image(path: Path, extension: str | int = 0) -> tuple[Array, fits.Header]:
    """Read one image of a product file with its header."""
    with fits.open(path) as hdus:
        hdu = hdus[extension]
        return np.array(hdu.data, dtype=float), hdu.header.copy()
