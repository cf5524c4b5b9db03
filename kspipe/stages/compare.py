"""Compare: from surface densities to residual maps, the pixel table and the summary."""

from __future__ import annotations

import logging
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Table
from numpy.typing import NDArray

from kspipe import __version__
from kspipe.comparison import (
    Headline,
    Known,
    Residuals,
    headline,
    independent_samples,
    predict_residuals,
)
from kspipe.core.errors import Fault, OutputError
from kspipe.core.progress import Progress, no_progress
from kspipe.core.seeds import generator
from kspipe.kernels.geometry import beam_axes
from kspipe.kernels.noise import total_error
from kspipe.maps.product import read_matched, write_product
from kspipe.maps.skymap import Flag, SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe, load_recipe
from kspipe.relations import LAWS
from kspipe.stages.atomic_only import FromAtomic, from_atomic, summaries
from kspipe.stages.environments import environment_areas
from kspipe.stages.fits import fit_all, write_fits_table
from kspipe.stages.folder import TRIAL_STAGES, ProductFolder
from kspipe.stages.inside_beam import add_inside_beam
from kspipe.stages.law_inputs import law_inputs
from kspipe.stages.pixels import pixel_table, write_pixels
from kspipe.stages.plan import InMemory, Plan, compare_print, make_plan
from kspipe.stages.profiles import profile_table, write_profiles
from kspipe.stages.relation_notes import history_lines, relation_notes
from kspipe.stages.state import GasState, gas_state_of
from kspipe.stages.steps import Findings, read_findings
from kspipe.stages.summary import make_summary, summary_text
from kspipe.stages.surface import Disc, surfaces_of

__all__ = ["compare_relations", "reduced_plan"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

log = logging.getLogger(__name__)

SFR_UNIT = "solMass yr-1 kpc-2"
INVERTED_LINES = (
    "without CO: the primary image takes the atomic gas for all gas",
    "INVERTED: for the smallest gas whose atomic part, by the relation, is the HI that is seen",
    "INVERTED_ROOTS: 0 where no amount of gas leaves so much HI atomic",
)


def compare_relations(
    out: Path,
    *,
    overwrite: bool = False,
    memory: InMemory | None = None,
    progress: Progress = no_progress,
) -> bool:
    """Hold every relation of a reduced recipe against the galaxy.

    Parameters
    ----------
    out : Path
        Folder of a reduction; ``residuals/``, ``pixels.ecsv`` and ``summary.json`` are written.
    overwrite : bool
        Whether an older comparison may be replaced.
    memory : mapping, optional
        As given to the reduction.
    progress : Progress

    Returns
    -------
    bool
        False where everything was there already and was reused.

    Raises
    ------
    OutputError
        If the folder holds no reduction, or one made from other inputs.
    """
    folder = ProductFolder.open(out)
    plan = reduced_plan(folder, memory)
    recipe, grid = plan.recipe, plan.grid
    print_ = compare_print(recipe, folder.stages["convert"]["fingerprint"])
    if not folder.check({"compare": print_}, overwrite=overwrite):
        log.info("compare: nothing changed, %s is reused", out)
        return False
    compared = _compare(plan, out, progress)
    drop = tuple(stage for stage in folder.stages if stage in ("figures", *TRIAL_STAGES))
    with folder.publish({"compare": print_}, drop=drop) as staging:
        _write_all_residuals(compared, staging / "residuals")
        pixels, biases = _pixels(compared)
        write_pixels(pixels, staging / "pixels.ecsv")
        if compared.state:
            compared.state.write(staging)
        write_profiles(_profiles(compared), staging)
        summary = _summary(compared, read_findings(out), biases)
        if recipe.comparison.fits:
            sections = fit_all(
                recipe, compared.disc, grid, compared.used, compared.residuals, compared.beam
            )
            write_fits_table(sections["fits"], staging / "fits.ecsv")
            summary.update(sections)
        (staging / "summary.json").write_text(summary_text(summary), encoding="utf-8")
    return True


@dataclass(frozen=True)
class _Compared:
    """A galaxy with everything that it was held against, before any file is written."""

    plan: Plan
    matched: dict[str, SkyMap]
    disc: Disc
    used: Mask
    independent: Mask
    inputs: dict[str, Known]
    residuals: dict[str, Residuals]
    headlines: dict[str, Headline]
    notes: dict[str, dict[str, Any]]
    inverted: dict[str, FromAtomic]
    state: GasState | None

    @property
    def beam(self) -> Array:
        """Covariance of the common beam [arcsec2]."""
        return next(iter(self.matched.values())).beam_arcsec2


def _compare(plan: Plan, out: Path, progress: Progress) -> _Compared:
    """Evaluate every relation on every pixel.

    Raises
    ------
    OutputError
        If no pixel is covered by all maps.
    """
    recipe, grid = plan.recipe, plan.grid
    matched = {name: read_matched(out / "matched" / f"{name}.fits") for name in recipe.maps}
    disc = surfaces_of(recipe, matched, grid)
    gas, sfr = disc.surfaces["sigma_gas"], disc.surfaces["sigma_sfr"]
    used = np.isfinite(gas.value) & np.isfinite(sfr.value)
    if not used.any():
        raise OutputError(
            Fault(str(out), "no pixel is covered by all maps", "check coverage in DIR/matched")
        )
    beam = next(iter(matched.values())).beam_arcsec2
    independent = independent_samples(
        grid.shape, grid.centre_pixel, beam_axes(beam)[0] / grid.pixel_arcsec
    )
    inputs = law_inputs(recipe, disc)
    residuals, headlines, notes = {}, {}, {}
    for done, (name, table) in enumerate(recipe.relations.items()):
        progress(done, len(recipe.relations), f"comparing with {name}")
        residuals[name] = predict_residuals(inputs, sfr, disc.flags, table.law, table.parameters)
        notes[name] = relation_notes(recipe, name, inputs, disc, residuals[name], used)
        rng = generator(recipe.seed, "compare", name)
        headlines[name] = headline(
            residuals[name], sfr, used, independent, grid.jacobian_arcsec(), rng
        )
    inverted = from_atomic(recipe, inputs, disc)
    progress(len(recipe.relations), len(recipe.relations), "compared")
    state = gas_state_of(plan, disc)
    return _Compared(
        plan, matched, disc, used, independent, inputs, residuals, headlines, notes, inverted, state
    )


def _write_all_residuals(compared: _Compared, folder: Path) -> None:
    folder.mkdir()
    for name in compared.residuals:
        inverted = compared.inverted.get(name)
        _write_residuals(
            folder / f"{name}.fits",
            compared.plan.recipe,
            name,
            compared.residuals,
            compared.beam,
            compared.plan.grid,
            inverted.extensions if inverted else {},
            history_lines(compared.notes[name]),
        )


def _pixels(compared: _Compared) -> tuple[Table, dict[str, Any] | None]:
    """The table of pixels, and a summary of the biases inside the beam where they are asked for."""
    recipe, used = compared.plan.recipe, compared.used
    meta = {
        "galaxy": recipe.galaxy.name,
        "kspipe": __version__,
        "imf": recipe.star_formation.imf,
        "flags": Flag.meanings(),
    }
    pixels = pixel_table(
        compared.disc, compared.residuals, used, compared.independent, compared.plan.grid, meta
    )
    for name, one in compared.inverted.items():
        one.add_columns(pixels, name, used)
    biases = add_inside_beam(
        recipe,
        {key: known.value for key, known in compared.inputs.items()},
        {key: total_error(known.noise) for key, known in compared.inputs.items() if known.noise},
        used,
        pixels,
    )
    if compared.state:
        compared.state.add_columns(pixels, used)
    return pixels, biases


def _profiles(compared: _Compared) -> Table:
    recipe, disc, grid = compared.plan.recipe, compared.disc, compared.plan.grid
    regions = environment_areas(recipe, disc.radius_kpc, grid)
    return profile_table(recipe, disc, compared.used, grid, compared.beam, regions)


def _summary(
    compared: _Compared, findings: Findings, biases: dict[str, Any] | None
) -> dict[str, Any]:
    """Everything but the fits."""
    plan, disc, used = compared.plan, compared.disc, compared.used
    summary = make_summary(
        plan,
        disc,
        compared.headlines,
        compared.residuals,
        used,
        compared.independent,
        compared.matched,
        findings,
    )
    for name, note in compared.notes.items():
        summary["relations"][name] |= note
    for name, sums in summaries(
        plan.recipe,
        compared.inverted,
        disc,
        used,
        compared.independent,
        plan.grid.jacobian_arcsec(),
    ).items():
        summary["relations"][name]["from_atomic"] = sums
    summary |= {"inside_beam": biases} if biases else {}
    summary |= {"gas_state": compared.state.summary(used)} if compared.state else {}
    return summary


def reduced_plan(folder: ProductFolder, memory: InMemory | None) -> Plan:
    """Plan DIR/recipe.toml again and refuse a reduction that was made from something else.

    Raises
    ------
    OutputError
        If there is no reduction, it is stale, or its files were changed.
    """
    out = folder.path
    if "convert" not in folder.stages or not (out / "recipe.toml").is_file():
        raise OutputError(
            Fault(str(out), "holds no reduction", "run: kspipe reduce RECIPE --out DIR")
        )
    recipe = load_recipe(out / "recipe.toml", in_memory=frozenset(memory or ()))
    plan = make_plan(recipe, memory)
    stale = [
        stage
        for stage, print_ in plan.prints.items()
        if folder.stages.get(stage, {}).get("fingerprint") != print_
    ]
    touched = [
        stage
        for stage in plan.prints
        if stage not in stale and not _untouched(folder, stage, plan.prints[stage])
    ]
    if stale or touched:
        what = (
            f"the reduction is stale: inputs, recipe or version changed since ({', '.join(stale)})"
            if stale
            else f"files of the reduction were changed by hand ({', '.join(touched)})"
        )
        raise OutputError(
            Fault(str(out), what, "run again: kspipe reduce RECIPE --out DIR --overwrite")
        )
    return plan


def _untouched(folder: ProductFolder, stage: str, print_: str) -> bool:
    """Whether the products of a stage are as written; the recipe's relations may be edited."""
    record = folder.stages[stage]
    without_recipe = {k: v for k, v in record["outputs"].items() if k != "recipe.toml"}
    probe = ProductFolder(folder.path, {stage: {**record, "outputs": without_recipe}})
    return probe.is_current(stage, print_)


def _write_residuals(
    path: Path,
    recipe: Recipe,
    name: str,
    residuals: dict[str, Residuals],
    beam: NDArray[np.float64],
    grid: Grid,
    more: Mapping[str, tuple[NDArray[Any], str]],
    lines: list[str],
) -> None:
    r, table = residuals[name], recipe.relations[name]
    law = LAWS.get(table.law)
    write_product(
        path,
        r.ratio_dex,
        "",
        grid.wcs,
        beam,
        extensions={
            "PREDICTED": (r.predicted, SFR_UNIT),
            "PREDICTED_ERROR": (r.predicted_error, SFR_UNIT),
            "DIFFERENCE": (r.difference, SFR_UNIT),
            "NORMALISED": (r.normalised, ""),
            "FLAGS": (r.flags, ""),
            **more,
        },
        history=[
            f"{law.key} ({law.cite}, {law.where}): {law.formula}",
            f"parameters: {', '.join(f'{k} = {v:g}' for k, v in table.parameters.items())}",
            f"primary image: log10(observed / predicted) in dex; a {law.statistic} is predicted",
            f"predicted error: random; integrated over the noise in {r.n_integrated} pixels",
            *lines,
            *(INVERTED_LINES if more else ()),
        ],
    )
