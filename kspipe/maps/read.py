"""From stored numbers to a `SkyMap` in the canonical intensity of its tracer."""

from __future__ import annotations

from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.core.errors import Fault, MapError, ShapeError
from kspipe.maps.header import pixel_areas_arcsec2
from kspipe.maps.psf_records import psf_record
from kspipe.maps.skymap import CommonError, NoiseTerm, SkyMap
from kspipe.maps.source import MapSource
from kspipe.maps.stored import StoredImage

__all__ = ["load_map", "relative_area_of", "relative_noise", "with_photon_noise"]

Array = NDArray[np.float64]

# More pixels at exactly zero than this are a mask, not a measurement. A magnitude of zero is no
# galaxy's.
MOST_ZEROS: Final = 0.01


def load_map(source: MapSource) -> SkyMap:
    """Read the pixels of a map and of its noise.

    Parameters
    ----------
    source : MapSource
        The header, checked.

    Returns
    -------
    SkyMap
        On the map's own pixels; without noise terms where the noise is to be measured.

    Raises
    ------
    MapError
        If nothing is finite, the noise is not positive, or exact zeros need a meaning.
    """
    request, where = source.request, f"maps.{source.request.name}, {source.image}"
    value = source.image.read()
    history = [f"read {source.image}: {value.shape[1]} x {value.shape[0]} pixels"]
    blank = ~np.isfinite(value)
    value[blank] = np.nan
    history += _zeros(value, source, where)
    if not np.isfinite(value).any():
        raise MapError(Fault(where, "no pixel of the map is finite"))

    relative_area = relative_area_of(source)
    value = source.door.intensity(value, relative_area)
    record = psf_record(request.tracer, source.beam_arcsec2) if source.psf is None else None
    history += [source.door.reason, source.beam.story]
    history += [source.psf.story] if source.psf else []
    history += [str(record)] if record else []

    noise: tuple[NoiseTerm, ...] = ()
    if request.noise.kind != "measure":
        sigma, note = _stated_sigma(source, value, relative_area, where)
        correlated = request.noise.correlated != "none"
        term = NoiseTerm(
            source=request.name,
            sigma=sigma,
            correlation_arcsec2=source.beam_arcsec2 if correlated else np.zeros((2, 2)),
        )
        unobserved = np.isfinite(value) & ~np.isfinite(sigma)
        value[unobserved] = np.nan
        noise = (term,)
        history.append(note)
        if unobserved.any():
            history.append(f"{int(unobserved.sum())} pixels without a stated error left out")
    return SkyMap(
        name=request.name,
        tracer=request.tracer,
        value=value,
        noise=noise,
        coverage=np.isfinite(value).astype(float),
        flags=np.zeros(value.shape, dtype=np.int32),
        unit=source.tracer.unit,
        wcs=source.wcs,
        beam_arcsec2=source.beam_arcsec2,
        averages_pixels=request.averages_pixels,
        psf=source.psf,
        common=CommonError(
            request.calibration_error, source.pedestal, record.matching_error if record else 0.0
        ),
        history=tuple(history),
        facts={
            "file": str(source.image),
            "unit": source.door.reason,
            "beam": f"{source.beam} from {source.beam.origin}",
            "pixel_arcsec": source.pixel_arcsec,
            "blank_pixels": int(np.isnan(value).sum()),
            **({"matching_error": record.matching_error} if record else {}),
        },
    )


def _zeros(value: Array, source: MapSource, where: str) -> list[str]:
    """Obey the recipe on exact zeros, or ask."""
    zero = value == 0.0
    finite = int(np.isfinite(value).sum())
    if source.request.zeros == "blank":
        value[zero] = np.nan
        return [f"{int(zero.sum())} pixels at exactly zero taken as not observed (recipe)"]
    most = 0.0 if source.door.is_magnitude else MOST_ZEROS * finite
    if source.request.zeros is None and finite and zero.sum() > most:
        raise MapError(
            Fault(
                where,
                f"{zero.sum() / finite:.1%} of the pixels are exactly zero: not observed, or "
                "masked, or no emission?",
                f'type maps.{source.request.name}.zeros = "blank" or "flux"',
            )
        )
    return []


def relative_area_of(source: MapSource) -> Array | float:
    """Area of each pixel over that at the galaxy's centre; one where no unit counts per pixel."""
    if not (source.door.per_pixel or source.noise_door.per_pixel):
        return 1.0
    at_centre = abs(float(np.linalg.det(source.jacobian_arcsec)))
    return pixel_areas_arcsec2(source.wcs, source.image.shape) / at_centre


def _stated_sigma(
    source: MapSource, value: Array, relative_area: Array | float, where: str
) -> tuple[Array, str]:
    """1-sigma error per pixel in the canonical unit."""
    noise, door = source.request.noise, source.noise_door
    read_as = "" if door is source.door else f"; {door.reason}"
    if noise.kind == "value" or source.noise_image is None:
        level = door.intensity(np.full(value.shape, noise.value), relative_area)
        note = f"noise {noise.value:g} {noise.unit or source.unit.text} from the recipe"
        relative = relative_noise(source)
        if relative is not None:
            level *= relative
            note += f" where its shape ({noise.shape_is}) is one"
        return level, f"{note}, correlated like: {noise.correlated}{read_as}"
    sigma = source.noise_image.read()
    # An infinite error, and an infinite weight, are no measurement.
    sigma[~np.isfinite(sigma)] = np.nan
    observed = np.isfinite(value) & np.isfinite(sigma)
    if not observed.any():
        raise MapError(
            Fault(f"{where}, noise", f"{source.noise_image} is blank where the map is not")
        )
    least = float(np.min(sigma, where=observed, initial=np.inf))
    if least <= 0:
        count = int(np.sum(observed & (sigma <= 0)))
        raise MapError(
            Fault(
                f"maps.{source.request.name}.noise, {source.noise_image}",
                f"{count} pixels of the noise map are zero or negative (least value {least:g}); a "
                f"{noise.stated} is positive",
                'check what the file holds (is = "sigma", "variance" or "inverse variance") or '
                "blank those pixels",
            )
        )
    if noise.stated != "sigma":
        with np.errstate(invalid="ignore", divide="ignore"):
            sigma = sigma ** (0.5 if noise.stated == "variance" else -0.5)
    note = f"noise from {source.noise_image}, read as {noise.stated}"
    return (
        door.intensity(sigma, relative_area),
        f"{note}, correlated like: {noise.correlated}{read_as}",
    )


def relative_noise(source: MapSource) -> Array | None:
    """How the noise varies over the field, from the recipe's shape; None where it gives none.

    Noise goes as 1 / primary beam (one where the beam is one), as 1 / sqrt(exposure) or
    1 / sqrt(weight) (one at the largest), and as the square root of the number of channels summed
    (one for one channel).

    Raises
    ------
    ShapeError
        If the shape is not on the pixels of the map.
    MapError
        If it is not positive anywhere.
    """
    noise = source.request.noise
    if noise.shape_file is None:
        return None
    where = f"maps.{source.request.name}.noise.shape"
    image = StoredImage.find(noise.shape_file, None)
    if image.shape != source.image.shape:
        raise ShapeError(
            Fault(
                f"{where}, {image}",
                f"the shape has {image.shape[1]} x {image.shape[0]} pixels, the map "
                f"{source.image.shape[1]} x {source.image.shape[0]}",
            )
        )
    stored = image.read()
    positive = np.where(stored > 0, stored, np.nan)
    if not np.isfinite(positive).any():
        raise MapError(Fault(f"{where}, {image}", "no pixel is positive"))
    if noise.shape_is == "primary beam":
        return np.asarray(1.0 / positive)
    if noise.shape_is in ("exposure", "weight"):
        return np.asarray(np.sqrt(np.nanmax(positive) / positive))
    return np.asarray(np.sqrt(positive))


def with_photon_noise(sky: SkyMap, source: MapSource) -> SkyMap:
    """Add the noise of the photons counted in each pixel as a term of its own.

    The measured value stands for the true one, negative values for none: below a few photons
    per pixel the error is only that good.
    """
    gain = source.request.noise.gain or np.inf
    per_unit = source.door.factor
    sigma = per_unit * np.sqrt(np.maximum(sky.value / per_unit, 0.0) / gain)
    term = NoiseTerm(f"{sky.name} photons", sigma, np.zeros((2, 2)))
    step = f"photon noise added: {gain:g} photons per stored unit of a pixel"
    return sky.with_step(step, noise=(*sky.noise, term))
