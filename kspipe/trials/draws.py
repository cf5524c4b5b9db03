"""Draws of the assumptions, sent through the real conversion on independent samples."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.samples import LinearSamples
from kspipe.conversions import Choices, Converted, Field, Parameters, convert
from kspipe.core.tracers import CO_LINES
from kspipe.kernels.geometry import beam_axes, disc_radius
from kspipe.recipe import Recipe
from kspipe.relations import LAWS
from kspipe.stages.plan import choices_of
from kspipe.stages.surface import parameters_of
from kspipe.trials.priors import Prior
from kspipe.trials.reduced import Reduced

__all__ = ["Drawn", "SampleInputs", "convert_draws", "inputs_of", "not_carried", "sums_of"]

Array = NDArray[np.float64]

# Numbers that are converted together: a few dozen arrays of them fit the memory of a laptop.
BLOCK: Final = 1_000_000


@dataclass(frozen=True)
class SampleInputs:
    """Independent samples before the conversion.

    Attributes
    ----------
    recipe : Recipe
    choices : Choices
    parameters : Parameters
    intensity : dict of str to (n,) float64 array
        By tracer.
    sigma : dict of str to dict of str to (n,) float64 array
        Random error by tracer and source.
    east_arcsec, north_arcsec : (n,) float64 array
        From the galaxy's centre.
    oh : (n,) float64 array
    level : dict of str to (n,) float64 array
        Mean intensity by tracer of the ring, one beam wide, that each sample lies in: what light
        spread smoothly over the disc is counted in.
    """

    recipe: Recipe
    choices: Choices
    parameters: Parameters
    intensity: dict[str, Array]
    sigma: dict[str, dict[str, Array]]
    east_arcsec: Array
    north_arcsec: Array
    oh: Array
    level: dict[str, Array]


def inputs_of(reduced: Reduced, chosen: NDArray[np.bool_]) -> SampleInputs:
    """Take the chosen pixels out of the matched maps.

    Parameters
    ----------
    reduced : Reduced
    chosen : (ny, nx) bool array
        Independent samples.
    """
    disc = reduced.disc
    east, north = reduced.grid.offsets_arcsec()
    fields = {name: _chosen(field, chosen) for name, field in disc.fields.items()}
    return SampleInputs(
        recipe=reduced.recipe,
        choices=choices_of(reduced.recipe),
        parameters=parameters_of(reduced.recipe, fields),
        intensity={tracer: sky.value[chosen] for tracer, sky in disc.intensity.items()},
        sigma={
            tracer: {term.source: term.sigma[chosen] for term in sky.noise}
            for tracer, sky in disc.intensity.items()
        },
        east_arcsec=east[chosen],
        north_arcsec=north[chosen],
        oh=disc.oh[chosen],
        level={t: _ring_means(sky.value, reduced)[chosen] for t, sky in disc.intensity.items()},
    )


def _chosen(field: Field, chosen: NDArray[np.bool_]) -> Field:
    """The same quantity at some pixels; a number stays a number."""
    if np.ndim(field.value) == 0:
        return field
    return Field(np.broadcast_to(field.value, chosen.shape)[chosen])


def _ring_means(value: Array, reduced: Reduced) -> Array:
    """Mean over the covered pixels of the ring, one beam wide, that each pixel lies in."""
    galaxy = reduced.recipe.galaxy
    beam_kpc = beam_axes(reduced.beam_arcsec2)[0] * galaxy.pc_per_arcsec / 1e3
    ring = (reduced.disc.radius_kpc / beam_kpc).astype(int)
    used = reduced.used & np.isfinite(value)
    sums = [
        np.bincount(ring[used], weights, minlength=int(ring.max()) + 1)
        for weights in (value[used], None)
    ]
    return np.asarray((sums[0] / np.maximum(sums[1], 1))[ring])


@dataclass(frozen=True)
class Drawn:
    """Converted draws of all samples, (draws, n) each.

    Attributes
    ----------
    gas, sfr : float64 array
        Sigma_gas [Msun/pc2] and Sigma_SFR [Msun/yr/kpc2].
    mol : float64 array or None
        Sigma_mol [Msun/pc2].
    var_gas, var_sfr, cov : float64 array
        Random variances and covariance.
    oh : float64 array
        12 + log10(O/H).
    """

    gas: Array
    sfr: Array
    mol: Array | None
    var_gas: Array
    var_sfr: Array
    cov: Array
    oh: Array

    def samples(self, draw: int) -> LinearSamples:
        """One draw as a fit takes it."""
        return LinearSamples(
            self.gas[draw], self.sfr[draw], self.var_gas[draw], self.var_sfr[draw], self.cov[draw]
        )


def convert_draws(
    inputs: SampleInputs, priors: Sequence[Prior], normal: Array, choices: Choices | None = None
) -> Iterator[tuple[slice, Drawn]]:
    """Convert all samples under each draw of the assumptions, block by block.

    Parameters
    ----------
    inputs : SampleInputs
    priors : sequence of Prior
    normal : (draws, priors) float64 array
        Standard normal numbers; zeros are what the recipe assumes.
    choices : Choices, optional
        Other records than the recipe's.

    Yields
    ------
    rows : slice
        Draws in this block.
    drawn : Drawn
    """
    step = max(1, BLOCK // max(1, inputs.oh.size))
    for start in range(0, normal.shape[0], step):
        rows = slice(start, min(start + step, normal.shape[0]))
        yield rows, _convert_block(inputs, priors, normal[rows], choices or inputs.choices)


def _convert_block(
    inputs: SampleInputs, priors: Sequence[Prior], normal: Array, choices: Choices
) -> Drawn:
    amounts = [(prior, prior.amount(normal[:, i])[:, None]) for i, prior in enumerate(priors)]
    intensity: dict[str, Array] = {t: value[None, :] for t, value in inputs.intensity.items()}
    scale: dict[str, Array] = {t: np.ones((normal.shape[0], 1)) for t in intensity}
    numbers: dict[str, Array] = {}
    sfr_factor = np.ones((normal.shape[0], 1))
    for prior, amount in amounts:
        on = prior.target
        if prior.effect == "factor":
            scale[on] = scale[on] * 10.0**amount
        elif prior.effect == "fraction":
            scale[on] = scale[on] * (1.0 + amount)
        elif prior.effect == "offset":
            intensity[on] = intensity[on] + amount
        elif prior.effect == "spread":
            intensity[on] = intensity[on] + amount * inputs.level[on][None, :]
        elif prior.effect == "parameter":
            now = numbers.get(on, np.asarray(getattr(inputs.parameters, on), dtype=float))
            numbers[on] = now + amount
        elif prior.effect == "gas":
            scale |= {t: scale[t] * (1.0 + amount) for t in ("HI", *CO_LINES) if t in scale}
        elif prior.effect == "sfr":
            sfr_factor = sfr_factor * 10.0**amount
    cos_i, oh = _geometry(inputs, amounts, normal.shape[0])
    parameters = replace(inputs.parameters, cos_i=cos_i, oh=oh)
    for name, number in numbers.items():
        parameters = parameters.changed(name, number)
    scaled = {tracer: value * scale[tracer] for tracer, value in intensity.items()}
    converted = convert(scaled, choices, parameters)
    return _with_errors(inputs, converted, scale, sfr_factor, oh)


def _geometry(
    inputs: SampleInputs, amounts: Sequence[tuple[Prior, Array]], n_draws: int
) -> tuple[Array, Array]:
    """Cosine of the inclination and 12 + log10(O/H) under each draw."""
    galaxy = inputs.recipe.galaxy
    total: dict[str, Array] = {}
    for prior, amount in amounts:
        if prior.effect in ("distance", "inclination", "position_angle", "oh"):
            total[prior.effect] = total.get(prior.effect, np.zeros((n_draws, 1))) + amount
    # Beyond these a disc is no disc; the counts of such draws are far below one in a million
    # for errors that a recipe can hold.
    inclination = np.clip(galaxy.inclination.value + total.get("inclination", 0.0), 0.0, 89.0)
    cos_i = np.broadcast_to(np.cos(np.radians(inclination)), (n_draws, 1))
    oh = np.broadcast_to(inputs.oh[None, :], (n_draws, inputs.oh.size))
    slope, per = inputs.recipe.metallicity.slope
    moved = {"distance", "inclination", "position_angle"} & set(total)
    if slope and moved and inputs.recipe.metallicity.map is None:
        # Against r25 the gradient is angular, and the distance drops out.
        scale = 1.0 + total.get("distance", np.zeros((n_draws, 1))) if per == "kpc" else 1.0
        per_arcsec = _slope_per_arcsec(inputs.recipe)
        pa = galaxy.position_angle.value + total.get("position_angle", np.zeros((n_draws, 1)))
        new = scale * _radius(inputs, cos_i, pa)
        old = disc_radius(
            inputs.east_arcsec,
            inputs.north_arcsec,
            inclination_deg=galaxy.inclination.value,
            pa_deg=galaxy.position_angle.value,
        )
        oh = oh + per_arcsec * (new - old[None, :])
    if "oh" in total:
        oh = oh + total["oh"]
    return cos_i, oh


def _slope_per_arcsec(recipe: Recipe) -> float:
    """Gradient of 12 + log10(O/H) at the recipe's distance [dex/arcsec]."""
    slope, per = recipe.metallicity.slope
    if per == "r25" and recipe.galaxy.r25 is not None:
        return slope / recipe.galaxy.r25.value
    return slope * recipe.galaxy.pc_per_arcsec / 1e3


def _radius(inputs: SampleInputs, cos_i: Array, pa_deg: Array) -> Array:
    """Deprojected radius [arcsec] of each sample under each draw's tilt."""
    pa = np.radians(pa_deg)
    east, north = inputs.east_arcsec[None, :], inputs.north_arcsec[None, :]
    major = east * np.sin(pa) + north * np.cos(pa)
    minor = -east * np.cos(pa) + north * np.sin(pa)
    return np.asarray(np.hypot(major, minor / cos_i))


def _with_errors(
    inputs: SampleInputs,
    converted: Converted,
    scale: Mapping[str, Array],
    sfr_factor: Array,
    oh: Array,
) -> Drawn:
    """Random variances of gas and star formation, source by source."""
    slopes = converted.derivatives
    parts: dict[str, list[Array | float]] = {}
    for tracer, by_source in inputs.sigma.items():
        on_gas = slopes["sigma_gas"].get(tracer)
        on_sfr = slopes["sigma_sfr"].get(tracer)
        for source, sigma in by_source.items():
            error = scale[tracer] * sigma[None, :]
            sums = parts.setdefault(source, [0.0, 0.0])
            if on_gas is not None:
                sums[0] = sums[0] + on_gas * error
            if on_sfr is not None:
                sums[1] = sums[1] + on_sfr * sfr_factor * error
    shape = converted.values["sigma_gas"].shape
    var_gas, var_sfr, cov = (np.zeros(shape) for _ in range(3))
    for gas, sfr in parts.values():
        var_gas += np.square(gas)
        var_sfr += np.square(sfr)
        cov += gas * sfr
    return Drawn(
        gas=converted.values["sigma_gas"],
        sfr=converted.values["sigma_sfr"] * sfr_factor,
        mol=converted.values.get("sigma_mol"),
        var_gas=var_gas,
        var_sfr=var_sfr,
        cov=cov,
        oh=oh,
    )


def sums_of(drawn: Drawn, recipe: Recipe) -> dict[str, Array]:
    """Depletion times and the bias of each relation under each draw.

    Parameters
    ----------
    drawn : Drawn
    recipe : Recipe

    Returns
    -------
    dict of str to (draws,) float64 array
        ``t_dep`` and ``t_dep_gas``, log10 of Gyr, and ``bias NAME``, log10 of the sum observed
        over the sum predicted; NaN where a sum is not positive.
    """
    found = {"t_dep_gas": _log_ratio(drawn.gas, drawn.sfr) - 3.0}
    if drawn.mol is not None:
        found["t_dep"] = _log_ratio(drawn.mol, drawn.sfr) - 3.0
    for name, table in recipe.relations.items():
        law = LAWS.get(table.law)
        if not_carried(table.law):
            continue
        inputs = {"sigma_gas": drawn.gas, "oh": np.broadcast_to(drawn.oh, drawn.gas.shape)}
        predicted = law.predict(inputs, table.parameters, slopes=False).sigma_sfr
        has_value = np.isfinite(predicted)
        found[f"bias {name}"] = _log_ratio(
            np.where(has_value, drawn.sfr, 0.0), np.where(has_value, predicted, 0.0)
        )
    return found


def not_carried(law: str) -> list[str]:
    """Inputs of a relation that samples and painted skies do not carry; empty for most."""
    return sorted(set(LAWS.get(law).needs) - {"sigma_gas", "oh"})


def _log_ratio(top: Array, bottom: Array) -> Array:
    """log10 of the ratio of sums over the samples; NaN where one is not positive."""
    sums = [np.nansum(values, axis=1) for values in (top, bottom)]
    positive = [np.where(total > 0, total, math.nan) for total in sums]
    return np.asarray(np.log10(positive[0] / positive[1]))
