"""All fits of a comparison: lines by sample, relations, their ranking, and trends."""

from __future__ import annotations

import math
from collections.abc import Iterable, Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from kspipe.comparison.areas import peak_apertures, ring_means
from kspipe.comparison.estimators import classical_fits
from kspipe.comparison.line import LineFit, PhasedLine, fit_line, fit_line_phases
from kspipe.comparison.phases import Phase, beam_correlation_length
from kspipe.comparison.posterior import draw_posterior
from kspipe.comparison.ranking import BLOCK_LENGTHS, rank_relations
from kspipe.comparison.relation_fit import FreeParameter, RelationUse, fit_relation
from kspipe.comparison.residuals import Residuals
from kspipe.comparison.samples import (
    SPACING_BEAMS,
    LinearSamples,
    independent_beams,
    lattice_phases,
)
from kspipe.comparison.trends import trends
from kspipe.conversions import Surface
from kspipe.core.seeds import generator
from kspipe.kernels.blocks import correlation_length, square_blocks
from kspipe.kernels.geometry import beam_axes, disc_azimuth
from kspipe.kernels.noise import covariance, propagate
from kspipe.kernels.statistics import beam_averaging_dex
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.relations import LAWS
from kspipe.stages.environments import environment_areas
from kspipe.stages.law_inputs import law_inputs
from kspipe.stages.surface import Disc

__all__ = ["fit_all", "write_fits_table"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Width of the distribution of clouds in a beam for which the effect of averaging is quoted [dex].
CLOUD_WIDTH_DEX: Final = 0.35
_HELD: Final = ("radius_kpc", "sigma_gas")


@dataclass(frozen=True)
class _Galaxy:
    """What every fit draws its samples from."""

    recipe: Recipe
    disc: Disc
    grid: Grid
    used: Mask
    beam_arcsec2: Array
    masks: list[Mask]
    areas: dict[str, Mask]

    @property
    def fwhm_pix(self) -> float:
        return beam_axes(self.beam_arcsec2)[0] / self.grid.pixel_arcsec

    def n_independent(self, area: Mask) -> float:
        pixel = self.grid.pixel_arcsec**2
        return independent_beams(int(area.sum()), pixel, self.beam_arcsec2)

    def gas_axes(self) -> dict[str, Surface]:
        names = ("sigma_gas", "sigma_mol")
        return {name: self.disc.surfaces[name] for name in names if name in self.disc.surfaces}

    def phases(self, x: Surface, y: Surface, area: Mask) -> list[Phase]:
        return [_phase(x, y, mask & area) for mask in self.masks]


def _phase(x: Surface, y: Surface, mask: Mask) -> Phase:
    rows, columns = np.nonzero(mask)
    positions = np.stack([columns, rows], axis=1).astype(float)
    return Phase(_samples(x, y, mask), positions)


def _samples(x: Surface, y: Surface, mask: Mask) -> LinearSamples:
    shared = np.broadcast_to(covariance(x.noise, y.noise), x.value.shape)
    return LinearSamples(
        x.value[mask], y.value[mask], x.error[mask] ** 2, y.error[mask] ** 2, shared[mask]
    )


def fit_all(
    recipe: Recipe,
    disc: Disc,
    grid: Grid,
    used: Mask,
    residuals: Mapping[str, Residuals],
    beam_arcsec2: Array,
) -> dict[str, Any]:
    """Fit lines to every sample, and rank the relations.

    Parameters
    ----------
    recipe : Recipe
    disc : Disc
    grid : Grid
    used : (ny, nx) bool array
        Covered pixels.
    residuals : mapping of str to Residuals
        By the recipe's name of the relation.
    beam_arcsec2 : (2, 2) float64 array

    Returns
    -------
    dict
        Sections ``fits``, ``ranking`` and ``trends`` of the summary, as plain values.
    """
    table = recipe.comparison
    fwhm = beam_axes(beam_arcsec2)[0] / grid.pixel_arcsec
    masks = lattice_phases(grid.shape, grid.centre_pixel, fwhm, table.lattice_phases)
    # Region files are read first, so that a fault in one costs no fit.
    areas = environment_areas(recipe, disc.radius_kpc, grid)
    galaxy = _Galaxy(recipe, disc, grid, used, beam_arcsec2, masks, areas)
    gas, sfr = disc.surfaces["sigma_gas"], disc.surfaces["sigma_sfr"]
    beam_length = beam_correlation_length(fwhm)
    phases = galaxy.phases(gas, sfr, used)
    line = fit_line_phases(phases, beam_length, components=table.population_components)
    length = beam_length
    if line.mean.is_fitted:
        measured = correlation_length(_line_residual(line.mean, gas, sfr), used)
        length = max(beam_length, measured) if math.isfinite(measured) else beam_length
    population = line.optima[0].parameters[3:] if line.optima else None
    blocks = square_blocks(phases[0].positions, BLOCK_LENGTHS * length, grid.centre_pixel)
    return {
        "fits": {
            "correlation_length_pix": length,
            "lines": _lines(galaxy, line, length),
            "apertures": [
                asdict(a) for a in peak_apertures(gas, sfr, used, fwhm, grid.jacobian_arcsec())
            ],
            "relations": _relations(galaxy, phases[0], masks[0] & used, population, length),
        },
        "ranking": _ranking(galaxy, phases[0].samples, masks[0] & used, blocks, population),
        "trends": _trends(galaxy, residuals, masks[0] & used),
    }


def _line_residual(line: LineFit, gas: Surface, sfr: Surface) -> Array:
    """Difference from the fitted line over its random error."""
    with np.errstate(invalid="ignore", divide="ignore"):
        positive = np.maximum(gas.value, gas.error)
        predicted = 10.0 ** (line.intercept + line.slope * (np.log10(positive) - line.pivot))
        error = np.hypot(sfr.error, line.slope * predicted / positive * gas.error)
        return np.asarray((sfr.value - predicted) / error)


def _lines(galaxy: _Galaxy, everywhere: PhasedLine, length: float) -> list[dict[str, Any]]:
    """Every sample with its own line."""
    table, disc = galaxy.recipe.comparison, galaxy.disc
    components = table.population_components
    sfr = disc.surfaces["sigma_sfr"]
    rows = []
    for axis, gas in galaxy.gas_axes().items():
        phases = galaxy.phases(gas, sfr, galaxy.used)
        line = everywhere
        if axis != "sigma_gas":
            line = fit_line_phases(phases[:1], length, components=components)
        row = _row(galaxy, "all pixels", axis, line, galaxy.used)
        if line.mean.is_fitted:
            row["classical"] = [
                asdict(fit) for fit in classical_fits(phases[0].samples, line.mean.pivot)
            ]
            row["posterior"] = _posterior(galaxy, axis, line, phases[0].samples)
        rows.append(row)
    rows.append(_ring_row(galaxy))
    for name, environment in table.environments.items():
        area = galaxy.used & galaxy.areas[name]
        gas = _scaled_gas(disc, environment.alpha_co_scale)
        line = fit_line_phases(galaxy.phases(gas, sfr, area), length, components=1)
        row = _row(galaxy, name, "sigma_gas", line, area)
        rows.append({**row, "alpha_co_scale": environment.alpha_co_scale})
    return rows


def _row(galaxy: _Galaxy, sample: str, axis: str, line: PhasedLine, area: Mask) -> dict[str, Any]:
    fit = line.mean
    effective = math.nan
    if fit.is_fitted:
        effective = fit.n * (line.phases[0].slope_error / fit.slope_error) ** 2
    return {
        "sample": sample,
        "x": axis,
        "n_pixels": int(area.sum()),
        "n_independent": galaxy.n_independent(area),
        "n_effective_for_slope": effective,
        **_plain_fit(fit),
        "phases": [_plain_fit(phase) for phase in line.phases],
    }


def _plain_fit(fit: LineFit) -> dict[str, Any]:
    plain = asdict(fit)
    plain["covariance"] = fit.covariance.tolist()
    if fit.is_fitted:
        plain["beam_averaging_dex"] = beam_averaging_dex(fit.slope, CLOUD_WIDTH_DEX)
    return plain


def _ring_row(galaxy: _Galaxy) -> dict[str, Any]:
    """Means of rings 1.5 beams wide along the major axis, one line through them."""
    recipe, grid, disc = galaxy.recipe, galaxy.grid, galaxy.disc
    beam_kpc = beam_axes(galaxy.beam_arcsec2)[0] * recipe.galaxy.pc_per_arcsec / 1e3
    rings = ring_means(
        disc.surfaces["sigma_gas"],
        disc.surfaces["sigma_sfr"],
        galaxy.used,
        disc.radius_kpc,
        SPACING_BEAMS * beam_kpc,
        grid.jacobian_arcsec(),
    )
    fit = fit_line(rings.samples, components=1)
    return {
        "sample": "radial bins",
        "x": "sigma_gas",
        "n_pixels": int(rings.n_pixels.sum()),
        "n_independent": galaxy.n_independent(galaxy.used),
        "n_effective_for_slope": float(fit.n),
        **_plain_fit(fit),
        "edges_kpc": rings.edges_kpc.tolist(),
        "mean_sigma_gas": rings.samples.x.tolist(),
        "mean_sigma_sfr": rings.samples.y.tolist(),
    }


def _scaled_gas(disc: Disc, scale: float) -> Surface:
    """Total gas with alpha_CO times a factor."""
    gas = disc.surfaces["sigma_gas"]
    if scale == 1.0 or "sigma_mol" not in disc.surfaces:
        return gas
    atom, mol = disc.surfaces["sigma_atom"], disc.surfaces["sigma_mol"]
    noise = propagate({"atom": atom.noise, "mol": mol.noise}, {"atom": 1.0, "mol": scale})
    return Surface(atom.value + scale * mol.value, noise, gas.slopes)


def _posterior(
    galaxy: _Galaxy, axis: str, line: PhasedLine, samples: LinearSamples
) -> dict[str, Any] | None:
    """Draws of phase 0, where the recipe asks for them."""
    n_draws = galaxy.recipe.comparison.posterior_draws
    if not n_draws:
        return None
    if line.phases[0].is_limit:
        return {"message": "not drawn: the scatter is an upper limit"}
    rng = generator(galaxy.recipe.seed, "posterior", axis)
    drawn = draw_posterior(line.models[0], samples.measurements(), line.optima[0], n_draws, rng)
    intervals = {
        name: {str(p): drawn.interval(name, p / 100.0) for p in (68, 95)}
        for name in ("slope", "scatter_dex")
    }
    return {
        "effective_draws": drawn.effective,
        "tail": drawn.tail,
        "is_converged": drawn.is_converged,
        "message": drawn.message,
        **intervals,
    }


def _inputs(galaxy: _Galaxy, uses: Iterable[RelationUse], mask: Mask) -> dict[str, Array]:
    """What some laws take beside the gas, per sample; taken as known."""
    known = law_inputs(galaxy.recipe, galaxy.disc)
    laws = [LAWS.get(use.law) for use in uses]
    names = {name for law in laws for name in (*law.needs, *law.optional) if name in known} - {
        law.gas for law in laws
    }
    inputs = {name: np.broadcast_to(known[name].value, mask.shape)[mask] for name in names}
    # Share of the gas that a scale of alpha_CO acts on.
    if "f_mol" in galaxy.disc.surfaces:
        share = np.nan_to_num(galaxy.disc.surfaces["f_mol"].value[mask])
        inputs["f_mol"] = np.clip(share, 0.0, 1.0)
    return inputs


def _uses(recipe: Recipe) -> list[RelationUse]:
    return [
        RelationUse(
            name,
            table.law,
            table.parameters,
            (
                FreeParameter("zero_point"),
                *(
                    FreeParameter(key, width)
                    for key, width in recipe.comparison.free.get(name, {}).items()
                ),
            ),
        )
        for name, table in recipe.relations.items()
    ]


def _relations(
    galaxy: _Galaxy, phase: Phase, mask: Mask, population: Array | None, length: float
) -> dict[str, Any]:
    """Each relation with its free parameters; the molecular fraction where CO was observed."""
    disc = galaxy.disc
    given: dict[str, Any] = {
        "components": galaxy.recipe.comparison.population_components,
        "population": population,
        "places": (phase.positions, length),
    }
    out: dict[str, Any] = {}
    for use in _uses(galaxy.recipe):
        law, inputs = LAWS.get(use.law), _inputs(galaxy, [use], mask)
        samples = phase.samples
        if law.gas == "sigma_mol":
            inputs["f_mol"] = np.ones(samples.x.size)
            samples = _samples(disc.surfaces["sigma_mol"], disc.surfaces["sigma_sfr"], mask)
        fit, _, _ = fit_relation(samples, inputs, use, **given)
        out[use.name] = {"sigma_sfr": asdict(fit)}
        if law.has_fraction and law.gas == "sigma_gas" and "sigma_mol" in disc.surfaces:
            of_gas = _samples(disc.surfaces["sigma_gas"], disc.surfaces["sigma_mol"], mask)
            molecular = RelationUse(
                use.name, use.law, use.parameters, (FreeParameter("zero_point"),), "f_mol"
            )
            fit, _, _ = fit_relation(of_gas, inputs, molecular, **given)
            out[use.name]["f_mol"] = asdict(fit)
    return out


def _ranking(
    galaxy: _Galaxy,
    samples: LinearSamples,
    mask: Mask,
    blocks: NDArray[np.intp],
    population: Array | None,
) -> list[dict[str, Any]]:
    """Both footings, side by side; laws of molecular gas alone stand on another abscissa."""
    every = _uses(galaxy.recipe)
    uses = [use for use in every if LAWS.get(use.law).gas == "sigma_gas"]
    apart = {use.name: "takes molecular gas only" for use in every if use not in uses}
    if len(uses) < 2 or samples.obstacle():
        return []
    out = []
    for width in (0.0, galaxy.recipe.comparison.zero_point_prior):
        rng = generator(galaxy.recipe.seed, "ranking", f"{width:g}")
        ranking = rank_relations(
            samples,
            _inputs(galaxy, uses, mask),
            uses,
            blocks,
            rng,
            zero_point_width_dex=width,
            components=galaxy.recipe.comparison.population_components,
            population=population,
        )
        out.append({**asdict(ranking), "left_out": {**ranking.left_out, **apart}})
    return out


def _trends(
    galaxy: _Galaxy, residuals: Mapping[str, Residuals], mask: Mask
) -> dict[str, list[dict[str, Any]]]:
    disc, table = galaxy.disc, galaxy.recipe.galaxy
    azimuth = disc_azimuth(
        *galaxy.grid.offsets_arcsec(),
        inclination_deg=table.inclination.value,
        pa_deg=table.position_angle.value,
    )
    quantities = {
        "radius_kpc": disc.radius_kpc[mask],
        "azimuth": azimuth[mask],
        "metallicity": disc.oh[mask],
    }
    for name in ("sigma_star", "sigma_gas", "f_mol"):
        if name in disc.surfaces:
            quantities[name] = disc.surfaces[name].value[mask]
    observed = disc.surfaces["sigma_sfr"].value[mask]
    return {
        name: [asdict(t) for t in trends(observed, r.predicted[mask], quantities, _HELD)]
        for name, r in residuals.items()
    }


_COLUMNS: Final = {
    "sample": "which pixels",
    "x": "abscissa; ordinate is sigma_sfr",
    "method": "estimator; 'latent' is the generative model",
    "n_pixels": "pixels of the sample",
    "n_independent": "effective number for a mean: area over two beam areas",
    "n_samples": "independent samples that enter",
    "slope": "",
    "slope_err": "random, 1 sigma",
    "pivot": "log10 x at which slope and intercept are uncorrelated",
    "intercept": "log10 of the median of sigma_sfr at the pivot [dex]",
    "intercept_err": "random, 1 sigma",
    "scatter": "intrinsic, of log10 sigma_sfr [dex]; an upper limit at 95 % where scatter_is_limit",
    "scatter_err": "random, 1 sigma",
    "scatter_is_limit": "",
    "message": "why there is no result",
}


def write_fits_table(fits: Mapping[str, Any], path: Path) -> None:
    """Write the lines as ECSV: one row for each sample and estimator."""
    rows = []
    for line in fits["lines"]:
        common = [line["sample"], line["x"]]
        counts = [line["n_pixels"], line["n_independent"]]
        numbers = [line[k] for k in ("slope", "slope_error", "pivot", "intercept")]
        rest = [line[k] for k in ("intercept_error", "scatter_dex", "scatter_error", "is_limit")]
        rows.append([*common, "latent", *counts, line["n"], *numbers, *rest, line["message"]])
        for old in line.get("classical", []):
            place = [old["slope"], math.nan, old["pivot"], old["intercept"]]
            empty = [math.nan, math.nan, math.nan, False, "for comparison with older papers"]
            rows.append([*common, old["method"], *counts, old["n"], *place, *empty])
    table = Table(rows=rows, names=list(_COLUMNS))
    for name, what in _COLUMNS.items():
        table[name].info.description = what
    table.write(path, format="ascii.ecsv", overwrite=False)
