"""The summary of a comparison: totals, flags, headline numbers, sources."""

from __future__ import annotations

import json
import math
from dataclasses import asdict
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe import __version__
from kspipe.comparison import Headline, Residuals, independent_beams
from kspipe.conversions import Surface
from kspipe.core.citations import CITATIONS
from kspipe.kernels.geometry import beam_axes
from kspipe.kernels.noise import sum_covariance
from kspipe.kernels.region_sums import upper_limit
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.relations import LAWS
from kspipe.stages.plan import Plan, records_of
from kspipe.stages.surface import Disc

__all__ = ["common_errors", "left_out", "make_summary", "summary_text"]

# A sum fainter than this many of its errors comes with an upper limit (common practice).
DETECTED_SIGMA: Final = 3.0
# Ratios of totals: top, bottom, unit.
_RATIOS: Final = {
    "f_mol": ("mass_mol", "mass_gas", ""),
    "t_dep": ("mass_mol", "sfr", "Gyr"),
    "t_dep_gas": ("mass_gas", "sfr", "Gyr"),
}


def make_summary(
    plan: Plan,
    disc: Disc,
    headlines: dict[str, Headline],
    residuals: dict[str, Residuals],
    used: NDArray[np.bool_],
    independent: NDArray[np.bool_],
    matched: dict[str, SkyMap],
    findings: dict[str, dict[str, Any]],
) -> dict[str, Any]:
    """Sum up a comparison as nested plain values.

    Parameters
    ----------
    plan : Plan
    disc : Disc
    headlines, residuals : dict
        By the recipe's name of the relation.
    used, independent : (ny, nx) bool array
        Covered pixels, and the lattice of independent samples.
    matched : dict of str to SkyMap
    findings : dict of str to dict
        By map, what was found about it.
    """
    recipe, grid = plan.recipe, plan.grid
    beam = next(iter(matched.values())).beam_arcsec2
    pixel_area = grid.pixel_arcsec**2
    flags = np.bitwise_or.reduce([disc.flags, *(r.flags for r in residuals.values())])
    laws = [LAWS.get(table.law) for table in recipe.relations.values()]
    cited = sorted({record.cite for record in [*records_of(recipe), *laws]})
    return {
        "kspipe": __version__,
        "galaxy": recipe.galaxy.name,
        "beam_arcsec": beam_axes(beam)[0],
        "beam_pc": beam_axes(beam)[0] * recipe.galaxy.pc_per_arcsec,
        "pixel_arcsec": grid.pixel_arcsec,
        "n_pixels": int(used.sum()),
        "n_independent": independent_beams(int(used.sum()), pixel_area, beam),
        "n_samples": int((used & independent).sum()),
        "n_left_out": left_out(disc, used),
        "gas": "atomic and molecular" if recipe.has_molecular else recipe.gas,
        "totals": _totals(recipe, disc, used, grid),
        "flags": {
            name: int(np.sum((flags[used] & bit) != 0)) for name, bit in Flag.meanings().items()
        },
        "relations": {
            name: {
                "law": recipe.relations[name].law,
                "parameters": recipe.relations[name].parameters,
                "predicts": LAWS.get(recipe.relations[name].law).statistic,
                **asdict(result),
            }
            for name, result in headlines.items()
        },
        "maps": {
            name: {"history": list(sky.history), **findings.get(name, {})}
            for name, sky in matched.items()
        },
        "records": {
            record.key: {"formula": record.formula, "certainty": record.certainty}
            for record in [*records_of(recipe), *laws]
        },
        "sources": {key: str(CITATIONS.get(key, key)) for key in cited},
    }


def left_out(disc: Disc, used: NDArray[np.bool_]) -> int:
    """Count covered pixels with gas but, at or below zero, no star formation by a power law."""
    unsolved = (disc.flags & int(Flag.NO_SOLUTION)) != 0
    return int(np.sum(np.isfinite(disc.surfaces["sigma_gas"].value) & ~used & unsolved))


def _totals(
    recipe: Recipe, disc: Disc, used: NDArray[np.bool_], grid: Grid
) -> dict[str, dict[str, float | str]]:
    """Sums over the covered sky, with random errors and those that all pixels share."""
    areas = grid.areas_arcsec2()
    pc2 = recipe.galaxy.pc_per_arcsec**2 / recipe.galaxy.cos_i
    # Face-on surface densities times the area in the plane of the disc.
    weights = {
        "sigma_atom": pc2,
        "sigma_mol": pc2,
        "sigma_star": pc2,
        "sigma_gas": pc2,
        "sigma_sfr": pc2 * 1e-6,
    }
    names = {
        "sigma_atom": ("mass_atom", "Msun"),
        "sigma_mol": ("mass_mol", "Msun"),
        "sigma_star": ("mass_star", "Msun"),
        "sigma_gas": ("mass_gas", "Msun"),
        "sigma_sfr": ("sfr", "Msun/yr"),
    }
    totals: dict[str, dict[str, float | str]] = {}
    jacobian = grid.jacobian_arcsec()
    for product, (name, unit) in names.items():
        if product not in disc.surfaces:
            continue
        surface = disc.surfaces[product]
        pixel = float(np.mean(areas)) * weights[product]
        random = math.sqrt(max(sum_covariance(surface.noise, surface.noise, used, jacobian), 0.0))
        face_on = areas * weights[product]
        errors = common_errors(disc, product, used, face_on)
        factor = _shift_error(disc, product, used, face_on)
        errors["calibration_error"] = math.hypot(errors["calibration_error"], factor)
        totals[name] = {
            "value": float(np.sum((surface.value * areas)[used])) * weights[product],
            "random_error": random * pixel,
            **errors,
            "unit": unit,
        }
    total = {name: float(entry["value"]) for name, entry in totals.items()}
    for entry in totals.values():
        value, error = float(entry["value"]), float(entry["random_error"])
        if error > 0 and value < DETECTED_SIGMA * error:
            entry["upper_limit"] = float(upper_limit(value, error, DETECTED_SIGMA))
    for name, (top, bottom, unit) in _RATIOS.items():
        if top in total and bottom in total:
            per = 1e9 if unit == "Gyr" else 1.0
            ratio = _over(total[top], total[bottom])
            above, below = (
                disc.surfaces[next(p for p, (n, _) in names.items() if n == mass)]
                for mass in (top, bottom)
            )
            error = _ratio_error(above, below, used, jacobian)
            totals[name] = {"value": ratio / per, "random_error": error * ratio / per, "unit": unit}
    return totals


def _ratio_error(
    top: Surface, bottom: Surface, used: NDArray[np.bool_], jacobian_arcsec: NDArray[np.float64]
) -> float:
    """Relative random error of the ratio of two sums; what they share cancels."""
    sums = [float(np.sum(surface.value[used])) for surface in (top, bottom)]
    if min(sums) <= 0:
        return math.nan
    variance = sum(
        factor * sum_covariance(a.noise, b.noise, used, jacobian_arcsec)
        for a, b, factor in (
            (top, top, 1.0 / sums[0] ** 2),
            (bottom, bottom, 1.0 / sums[1] ** 2),
            (top, bottom, -2.0 / (sums[0] * sums[1])),
        )
    )
    return math.sqrt(max(variance, 0.0))


def _over(top: float, bottom: float) -> float:
    return top / bottom if bottom > 0 else math.nan


def common_errors(
    disc: Disc, product: str, used: NDArray[np.bool_], areas: NDArray[np.float64]
) -> dict[str, float]:
    """Errors of a sum that all pixels of a map share: flux scale and zero level, and matching."""
    calibration, matching = 0.0, 0.0
    for tracer, slope in disc.surfaces[product].slopes.items():
        sky = disc.intensity.get(tracer)
        if sky is None:
            continue  # a parameter, which is no map and has no flux scale
        per_scale = float(np.sum((slope * sky.value * areas)[used]))
        per_level = float(np.sum((slope * areas)[used]))
        calibration += (sky.common.calibration * per_scale) ** 2
        calibration += (sky.common.pedestal * per_level) ** 2
        matching += (sky.common.matching * per_scale) ** 2
    return {"calibration_error": math.sqrt(calibration), "matching_error": math.sqrt(matching)}


def _shift_error(
    disc: Disc, product: str, used: NDArray[np.bool_], areas: NDArray[np.float64]
) -> float:
    """Error of a sum from typed numbers that pixels share, each independent of the others."""
    sums = [float(np.sum((shift * areas)[used])) for shift in disc.shifts.get(product, [])]
    return math.hypot(*sums)


def summary_text(summary: dict[str, Any]) -> str:
    """Write a summary as JSON; what is not a number becomes null."""
    return json.dumps(_plain(summary), indent=1) + "\n"


def _plain(value: Any) -> Any:
    """Make a structure fit for JSON: no NaN, no numpy numbers."""
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(v) for v in value]
    if isinstance(value, float | np.floating):
        return float(value) if math.isfinite(value) else None
    return value
