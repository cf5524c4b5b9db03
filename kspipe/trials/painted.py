"""A sky painted through a recipe's own headers, beams, coverage and noise, ready for the chain."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import Any, Final

import numpy as np
from astropy.io import fits
from numpy.typing import NDArray

from kspipe.conversions import Field, Parameters
from kspipe.core.errors import Fault, InputError
from kspipe.core.seeds import generator
from kspipe.kernels.geometry import beam_axes
from kspipe.maps import MapSource
from kspipe.maps.read import relative_area_of
from kspipe.maps.skymap import NoiseTerm, SkyMap
from kspipe.recipe import Recipe
from kspipe.recipe.map_table import MapTable, NoiseTyped, noise_value
from kspipe.recipe.quantity import Measured
from kspipe.relations import LAWS
from kspipe.simulate import (
    DiscModel,
    FinePlane,
    PaintedDisc,
    add_noise,
    look,
    look_at,
    paint_disc,
)
from kspipe.simulate.sky import SfrLaw
from kspipe.stages.place import Place
from kspipe.stages.plan import InMemory, Plan, choices_of, make_plan
from kspipe.stages.reduce import load_one, match_one
from kspipe.stages.surface import Disc, fields_of, parameters_of, surfaces_of
from kspipe.trials.intensity import intensities_of

__all__ = ["Paint", "Painter", "Sky", "noise_factors"]

Array = NDArray[np.float64]

# How much finer than the grid, and than the finest map's pixels, the sky is painted.
FINER: Final = 4.0
# Pixels of the painted plane per sigma of the sharpest beam.
PIXELS_PER_SIGMA: Final = 2.1
MOST_PIXELS: Final = 6000
# A line's level: 10 Msun/pc2 of gas last 2 Gyr.
LINE_GYR: Final = 2.0


@dataclass(frozen=True)
class Paint:
    """What is painted.

    Attributes
    ----------
    relation : str
        The recipe's name of a relation; empty for a straight line in logarithms.
    slope : float
        Of the line.
    shift_dex : float
        Star formation above the law.
    scatter_dex : float
        Log-normal, about the law, before the beam averages it.
    scatter_beams : float
        FWHM of its correlation in final beams. Samples 1.5 beams apart share a scatter that is
        smooth over a beam or more, and no longer count as independent.
    inclination_off_deg : float
        True inclination less the recipe's: the chain believes the recipe.
    alpha_co_off : float
        True alpha_CO over the recipe's.
    noise : mapping of str to float
        Noise of a map over that of the recipe, by map; 1 where absent.
    """

    relation: str = ""
    slope: float = 1.4
    shift_dex: float = 0.0
    scatter_dex: float = 0.2
    scatter_beams: float = 0.5
    inclination_off_deg: float = 0.0
    alpha_co_off: float = 1.0
    noise: Mapping[str, float] = field(default_factory=dict)

    @property
    def is_line(self) -> bool:
        """Whether a straight line is painted rather than a relation."""
        return not self.relation

    def law(self, recipe: Recipe) -> SfrLaw:
        """Median Sigma_SFR of Sigma_gas and 12 + log10(O/H)."""
        factor = 10.0**self.shift_dex
        if self.is_line:
            return lambda gas, _oh: factor * (10.0 / (LINE_GYR * 1e3)) * (gas / 10.0) ** self.slope
        table = recipe.relations[self.relation]
        law = LAWS.get(table.law)

        def predict(gas: Array, oh: Array) -> Array:
            inputs = {"sigma_gas": gas, "oh": oh}
            return np.asarray(
                factor * law.predict(inputs, table.parameters, slopes=False).sigma_sfr
            )

        return predict


def noise_factors(typed: Sequence[str]) -> dict[str, float]:
    """Read ``co=0.5``: the noise of a map over that of the recipe.

    Raises
    ------
    InputError
        If it is no name with a number.
    """
    factors = {}
    for word in typed:
        name, _, number = word.partition("=")
        try:
            factors[name.strip()] = float(number)
        except ValueError:
            raise InputError(
                Fault("--noise", f"{word!r} cannot be read", "type, for example, --noise co=0.5")
            ) from None
    return factors


@dataclass(frozen=True)
class Sky:
    """One painted sky and what each map shows of it without noise.

    Attributes
    ----------
    clean : dict of str to (ny, nx) float64 array
        By map, on its own pixels, canonical intensity.
    truth : Disc
        Surface densities of the true sky at the final beam, at the grid's pixel centres, by the
        recipe's records and the true inclination and alpha_CO; without noise.
    """

    clean: dict[str, Array]
    truth: Disc


@dataclass(frozen=True)
class Painter:
    """A recipe's instruments.

    Attributes
    ----------
    recipe : Recipe
    plan : Plan
    loaded : dict of str to SkyMap
        The recipe's maps on their own pixels: their coverage and noise are used, not their values.
    plane : FinePlane
    memory : mapping or None
        Maps in memory that stood in for files.
    """

    recipe: Recipe
    plan: Plan
    loaded: dict[str, SkyMap]
    plane: FinePlane
    memory: InMemory | None = None

    @classmethod
    def of(cls, recipe: Recipe, memory: InMemory | None = None) -> Painter:
        """Read the recipe's headers, coverage and noise.

        Raises
        ------
        InputError
            If a map cannot be painted: one with a PSF image or in magnitudes, or metallicity from
            a map.
        """
        plan = make_plan(recipe, memory)
        faults = [fault for source in plan.sources.values() for fault in _unpaintable(source)]
        if not isinstance(recipe.metallicity.oh, Measured):
            faults.append(
                Fault("metallicity", "a sky is painted with a gradient only", "type oh = ...")
            )
        faults += [
            Fault(name, "varies over the disc: a sky is painted with numbers only", "type a number")
            for name, field in fields_of(recipe, Place.of(recipe, plan.grid)).items()
            if name != "oh" and np.ndim(field.value) > 0
        ]
        if faults:
            raise InputError(*faults)
        loaded = {name: load_one(plan, name) for name in plan.sources}
        return cls(recipe, plan, loaded, _plane(plan), memory)

    @cached_property
    def _fields(self) -> dict[str, Field]:
        return fields_of(self.recipe, Place.of(self.recipe, self.plan.grid))

    @cached_property
    def tracers(self) -> list[str]:
        """What the maps show."""
        return [source.tracer.key for source in self.plan.sources.values()]

    def _parameters(self, paint: Paint) -> Parameters:
        """The recipe's numbers with the true inclination."""
        tilt = self.recipe.galaxy.inclination.value + paint.inclination_off_deg
        numbers = {n: f for n, f in self._fields.items() if np.ndim(f.value) == 0}
        parameters = parameters_of(self.recipe, numbers)
        return replace(parameters, cos_i=math.cos(math.radians(tilt)))

    def _model(self, paint: Paint) -> DiscModel:
        """A disc as large as the galaxy: by r25, or by the grid where the recipe has none."""
        galaxy = self.recipe.galaxy
        half = 0.5 * min(self.plan.grid.shape) * self.plan.grid.pixel_arcsec
        size_arcsec = galaxy.r25.value if galaxy.r25 else 0.6 * half
        kpc = galaxy.pc_per_arcsec / 1e3
        r25, beam = size_arcsec * kpc, self.plan.fwhm_arcsec * kpc
        return DiscModel(
            inclination_deg=galaxy.inclination.value + paint.inclination_off_deg,
            pa_deg=galaxy.position_angle.value,
            kpc_per_arcsec=kpc,
            # Of CO and of stars 0.2 and 0.25 r25 (Leroy et al. 2008; from memory).
            mol_scale_kpc=0.2 * r25,
            star_scale_kpc=0.25 * r25,
            atom_radius_kpc=1.3 * r25,
            clump_kpc=0.7 * beam,
            scatter_kpc=paint.scatter_beams * beam,
            scatter_dex=paint.scatter_dex,
        )

    def sky(self, paint: Paint, number: int) -> Sky:
        """Paint a sky; each number has clumps and scatter of its own."""
        rng = generator(self.recipe.seed, "closure", "sky", number)
        disc = paint_disc(self._model(paint), self.plane, self._oh, paint.law(self.recipe), rng)
        intensity = self._intensities(disc, paint)
        clean, truth = {}, {}
        east, north = self.plan.grid.offsets_arcsec()
        for name, source in self.plan.sources.items():
            image = intensity[source.tracer.key]
            clean[name] = look(
                image,
                self.plane,
                source.wcs,
                source.image.shape,
                self.recipe.galaxy.centre.degrees,
                source.beam_arcsec2,
                averages_pixels=source.request.averages_pixels,
            )
            truth[name] = look_at(image, self.plane, east, north, self.plan.target_arcsec2)
        return Sky(clean, self._truth(truth, paint))

    def _oh(self, radius_kpc: Array) -> Array:
        slope, per = self.recipe.metallicity.slope
        galaxy = self.recipe.galaxy
        if per == "r25" and galaxy.r25 is not None:
            slope /= galaxy.r25.value * galaxy.pc_per_arcsec / 1e3
        centre = self.recipe.metallicity.oh
        return (centre.value if isinstance(centre, Measured) else math.nan) + slope * radius_kpc

    def _intensities(self, disc: PaintedDisc, paint: Paint) -> dict[str, Array]:
        made = intensities_of(disc, self.tracers, choices_of(self.recipe), self._parameters(paint))
        # Where a solar mass of gas shines less than the recipe believes, its alpha_CO is larger.
        return {
            tracer: image / paint.alpha_co_off if tracer.startswith("CO(") else image
            for tracer, image in made.items()
        }

    def _truth(self, seen: dict[str, Array], paint: Paint) -> Disc:
        """Convert what a noise-free telescope of the final beam sees, knowing the truth."""
        skies = {}
        for name, source in self.plan.sources.items():
            value = seen[name]
            if source.tracer.key.startswith("CO("):
                value = value * paint.alpha_co_off
            skies[name] = replace(
                self.loaded[name],
                value=value,
                # Errors that are nothing beside any scatter, so that a fit weighs all alike.
                noise=(NoiseTerm(name, 1e-3 * np.abs(value) + 1e-12, np.zeros((2, 2))),),
                coverage=np.ones(value.shape),
                flags=np.zeros(value.shape, dtype=np.int32),
                wcs=self.plan.grid.wcs,
                beam_arcsec2=self.plan.target_arcsec2,
            )
        galaxy = self.recipe.galaxy
        tilt = galaxy.inclination.value + paint.inclination_off_deg
        inclined = replace(galaxy.inclination, value=tilt)
        true = self.recipe.model_copy(
            update={"galaxy": galaxy.model_copy(update={"inclination": inclined})}
        )
        return surfaces_of(true, skies, self.plan.grid)

    def chain_recipe(self, paint: Paint) -> Recipe:
        """The recipe for the chain: noise that it states as a number follows the paint."""
        maps = dict(self.recipe.maps)
        for name, factor in paint.noise.items():
            if self.plan.sources[name].request.noise.kind == "value" and factor != 1.0:
                maps[name] = _scaled_noise(maps[name], factor)
        return self.recipe.model_copy(update={"maps": maps})

    def reduce(self, sky: Sky, paint: Paint, number: int) -> Disc:
        """Send one noisy sky through the whole chain, in memory."""
        plan = make_plan(self.chain_recipe(paint), self.observe(sky, paint, number))
        matched = {name: match_one(plan, name) for name in plan.sources}
        return surfaces_of(plan.recipe, matched, plan.grid)

    def observe(self, sky: Sky, paint: Paint, number: int) -> dict[str, Any]:
        """Add noise, and write each map as its own file would have it.

        Returns
        -------
        dict of str to (HDU, HDU or None)
            To be handed to the stages as maps in memory.
        """
        maps = {}
        for name, source in self.plan.sources.items():
            rng = generator(self.recipe.seed, "closure", f"noise {name}", number)
            loaded = self.loaded[name]
            factor = paint.noise.get(name, 1.0)
            terms = tuple(term.with_sigma(factor * term.sigma) for term in loaded.noise)
            noisy = add_noise(sky.clean[name], terms, source.jacobian_arcsec, rng)
            noisy[~np.isfinite(loaded.value)] = np.nan
            maps[name] = (_hdu(source, noisy), _noise_hdu(source, factor))
        return maps


def _scaled_noise(table: MapTable, factor: float) -> MapTable:
    """Scale a noise level that is typed as a number."""
    typed = (
        table.noise if isinstance(table.noise, NoiseTyped) else NoiseTyped(level=str(table.noise))
    )
    value, unit = noise_value(typed.level)
    scaled = typed.model_copy(update={"level": f"{value * factor!r} {unit}"})
    return table.model_copy(update={"noise": scaled})


def _unpaintable(source: MapSource) -> list[Fault]:
    where = f"maps.{source.request.name}"
    faults = []
    if source.psf is not None:
        faults.append(Fault(f"{where}.psf", "a sky is painted through Gaussian beams only"))
    if source.door.is_magnitude or source.noise_door.is_magnitude:
        faults.append(Fault(where, "a sky cannot be painted in magnitudes"))
    if source.request.noise.gain is not None:
        faults.append(Fault(f"{where}.noise.gain", "photon noise of a painted sky is not made"))
    return faults


def _plane(plan: Plan) -> FinePlane:
    """A plane fine enough for grid, pixels and beams, and a little wider than the grid."""
    pixel = min(
        plan.grid.pixel_arcsec / FINER,
        *(source.pixel_arcsec / FINER for source in plan.sources.values()),
        *(
            math.sqrt(float(np.linalg.eigvalsh(s.beam_arcsec2)[0])) / PIXELS_PER_SIGMA
            for s in plan.sources.values()
        ),
    )
    east, north = plan.grid.offsets_arcsec()
    reach = max(float(np.abs(east).max()), float(np.abs(north).max()))
    plane = FinePlane.around(reach + 3.0 * beam_axes(plan.target_arcsec2)[0], pixel)
    if plane.n > MOST_PIXELS:
        raise InputError(
            Fault(
                "grid.size",
                f"a sky of {2 * reach / 60:.3g} arcmin in pixels of {pixel:.2g} arcsec takes "
                f"{plane.n} pixels a side; at most {MOST_PIXELS} are painted",
                "type a smaller grid.size",
            )
        )
    return plane


def _hdu(source: MapSource, intensity: Array) -> fits.PrimaryHDU:
    """Put intensities back into the unit and the axes of the file."""
    stored = intensity / source.door.factor
    if source.door.per_pixel:
        stored = stored * relative_area_of(source)
    header = _plain_header(source.image.header)
    # A beam from a table of the file does not travel with one image.
    beam = source.beam
    header["BMAJ"], header["BMIN"] = beam.major_arcsec / 3600.0, beam.minor_arcsec / 3600.0
    header["BPA"] = beam.pa_deg
    return fits.PrimaryHDU(_in_axes(stored, header), header)


def _noise_hdu(source: MapSource, factor: float) -> fits.PrimaryHDU | None:
    if source.noise_image is None:
        return None
    power = {"sigma": 1.0, "variance": 2.0, "inverse variance": -2.0}[source.request.noise.stated]
    data = source.noise_image.read() * factor**power
    header = _plain_header(source.noise_image.header)
    return fits.PrimaryHDU(_in_axes(data, header), header)


def _plain_header(header: fits.Header) -> fits.Header:
    """A copy without what belongs to how the numbers were stored."""
    plain = header.copy()
    for card in ("BSCALE", "BZERO", "BLANK", "XTENSION", "PCOUNT", "GCOUNT", "CHECKSUM", "DATASUM"):
        plain.remove(card, ignore_missing=True)
    return plain


def _in_axes(data: Array, header: fits.Header) -> NDArray[np.float32]:
    """Give an image the degenerate axes of its header."""
    sizes = [header[f"NAXIS{axis}"] for axis in range(header["NAXIS"], 0, -1)]
    return data.reshape(sizes).astype(np.float32)
