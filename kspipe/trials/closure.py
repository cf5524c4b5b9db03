"""Closure: what was painted is found again, as often as the errors say, and told from the rest."""

from __future__ import annotations

import itertools
import math
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.line import LineFit, fit_line_phases
from kspipe.comparison.phases import Phase, beam_correlation_length
from kspipe.comparison.ranking import BLOCK_LENGTHS, rank_relations
from kspipe.comparison.relation_fit import ZERO_POINT, FreeParameter, RelationUse, fit_relation
from kspipe.comparison.samples import lattice_phases
from kspipe.conversions import Surface
from kspipe.core.errors import Fault, InputError
from kspipe.core.progress import Progress, no_progress
from kspipe.core.seeds import generator
from kspipe.kernels.blocks import square_blocks
from kspipe.kernels.noise import sum_covariance
from kspipe.recipe import Recipe
from kspipe.stages.plan import InMemory
from kspipe.stages.surface import Disc
from kspipe.trials.closure_result import Closure, WrongRun, power_of, summed_up
from kspipe.trials.draws import not_carried
from kspipe.trials.painted import Paint, Painter, Sky
from kspipe.trials.reduced import covered_by_all, line_samples

__all__ = ["run_closure"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# log10 Sigma_gas at which the level of the line is compared: 10 Msun/pc2.
AT_LOG_GAS: Final = 1.0
# Rounds in which weights, slope and scatter of the truth settle.
TRUTH_ROUNDS: Final = 10
LAW_STEP_DEX: Final = 1e-3
PRODUCTS: Final[tuple[str, ...]] = ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr")


@dataclass
class _Mocks:
    """What each mock gave: found, its error, the truth of its own sky."""

    found: dict[str, list[tuple[float, float, float]]] = field(default_factory=dict)
    rankings: dict[tuple[str, str], list[tuple[bool, bool, bool]]] = field(default_factory=dict)
    zero_points: list[float] = field(default_factory=list)
    n_samples: list[int] = field(default_factory=list)
    failures: dict[str, int] = field(default_factory=dict)

    def add(self, name: str, found: float, error: float, truth: float) -> None:
        self.found.setdefault(name, []).append((found, error, truth))

    def fail(self, message: str) -> None:
        self.failures[message] = self.failures.get(message, 0) + 1


def run_closure(
    recipe: Recipe,
    paint: Paint,
    *,
    n_mocks: int = 20,
    zero_point_width_dex: float = 0.2,
    wrong: tuple[float, float] = (5.0, 1.5),
    memory: InMemory | None = None,
    progress: Progress = no_progress,
) -> Closure:
    """Paint skies through a recipe's instruments, send them through the chain, and compare.

    Parameters
    ----------
    recipe : Recipe
    paint : Paint
    n_mocks : int
        Skies, each with clumps, scatter and noise of its own.
    zero_point_width_dex : float
        Prior width of zero points in the second ranking, for what all pixels share.
    wrong : (float, float)
        In one more run: true inclination less the recipe's [deg], true alpha_CO over it.
    memory : mapping, optional
        Maps in memory instead of files, as the stages take them; only their headers, coverage
        and noise count.
    progress : Progress

    Raises
    ------
    InputError
        If there are fewer than 2 mocks, a name is not known, or a map cannot be painted.
    """
    _check(recipe, paint, n_mocks)
    painter = Painter.of(recipe, memory)
    mocks = _Mocks()
    for number in range(n_mocks):
        progress(number, n_mocks + 1, f"sky {number + 1} of {n_mocks}")
        sky = painter.sky(paint, number)
        disc = painter.reduce(sky, paint, number)
        _compare(painter, paint, sky, disc, number, zero_point_width_dex, mocks)
    progress(n_mocks, n_mocks + 1, "inclination and alpha_CO wrong")
    wrong_run = _run_wrong(painter, paint, *wrong, number=n_mocks)
    progress(n_mocks + 1, n_mocks + 1, "closed")
    return Closure(
        paint=paint,
        n_mocks=n_mocks,
        n_samples=float(np.mean(mocks.n_samples)),
        found=[summed_up(name, np.array(rows)) for name, rows in mocks.found.items()],
        law_shift=_law_shift(paint, mocks),
        power=[power_of(key, rows) for key, rows in mocks.rankings.items()],
        wrong=wrong_run,
        failures=mocks.failures,
        finer=painter.plan.grid.pixel_arcsec / painter.plane.pixel_arcsec,
    )


def _check(recipe: Recipe, paint: Paint, n_mocks: int) -> None:
    faults = []
    if n_mocks < 2:
        faults.append(Fault("--mocks", f"{n_mocks}: a scatter needs 2 or more"))
    if paint.relation and paint.relation not in recipe.relations:
        known = ", ".join(recipe.relations) or "none"
        faults.append(
            Fault("--paint", f'"{paint.relation}" is no relation of the recipe ({known})')
        )
    elif paint.relation and (absent := not_carried(recipe.relations[paint.relation].law)):
        what = f'"{paint.relation}" needs {", ".join(absent)}, which a painted sky does not carry'
        faults.append(Fault("--paint", what, "paint another relation, or a line"))
    for name, factor in paint.noise.items():
        if name not in recipe.maps:
            known = ", ".join(recipe.maps)
            faults.append(Fault("--noise", f'"{name}" is no map of the recipe ({known})'))
        elif not 0 < factor < math.inf:
            faults.append(Fault("--noise", f"{name} = {factor:g}: expected a positive factor"))
    if faults:
        raise InputError(*faults)


def _lattices(painter: Painter, disc: Disc) -> list[Mask]:
    """Samples of each phase of the lattice, as the comparison takes them."""
    grid, table = painter.plan.grid, painter.recipe.comparison
    used = covered_by_all(disc, Path("closure"))
    fwhm_pix = painter.plan.fwhm_arcsec / grid.pixel_arcsec
    masks = lattice_phases(grid.shape, grid.centre_pixel, fwhm_pix, table.lattice_phases)
    return [np.asarray(mask & used) for mask in masks]


def _fit_line(painter: Painter, disc: Disc, lattices: list[Mask]) -> LineFit:
    """The line of the comparison: all phases averaged, their correlation in its error."""
    phases = [
        Phase(line_samples(disc, mask), np.argwhere(mask)[:, ::-1].astype(float))
        for mask in lattices
    ]
    length = beam_correlation_length(painter.plan.fwhm_arcsec / painter.plan.grid.pixel_arcsec)
    components = painter.recipe.comparison.population_components
    return fit_line_phases(phases, length, components=components).mean


def _compare(
    painter: Painter,
    paint: Paint,
    sky: Sky,
    disc: Disc,
    number: int,
    zero_point_width_dex: float,
    mocks: _Mocks,
) -> None:
    """Hold one reduced mock against the truth of its sky."""
    lattices = _lattices(painter, disc)
    chosen = lattices[0]
    mocks.n_samples.append(int(chosen.sum()))
    used = covered_by_all(disc, Path("closure"))
    for name in PRODUCTS:
        if name in disc.surfaces:
            mocks.add(f"sum of {name}", *_sum_ratio(painter, disc, sky, name, used), 1.0)
    if paint.is_line:
        _line(painter, sky, disc, lattices, mocks)
    else:
        _relation(painter, paint, sky, disc, chosen, mocks)
        _rank(painter, paint, disc, chosen, number, zero_point_width_dex, mocks)


def _line(painter: Painter, sky: Sky, disc: Disc, lattices: list[Mask], mocks: _Mocks) -> None:
    """The painted line, found and true; of a law that is no line a line has no true slope."""
    true = np.mean([_true_line(sky.truth, disc, mask) for mask in lattices], axis=0)
    slope, level, scatter = (float(value) for value in true)
    fit = _fit_line(painter, disc, lattices)
    if not fit.is_fitted:
        mocks.fail(f"line: {fit.message}")
        return
    mocks.add("slope", fit.slope, fit.slope_error, slope)
    mocks.add("level at 10 Msun/pc2", *fit.at(AT_LOG_GAS), level)
    if fit.is_limit:
        mocks.fail("line: its scatter is an upper limit")
    else:
        mocks.add("scatter", fit.scatter_dex, fit.scatter_error, scatter)


def _sum_ratio(
    painter: Painter, disc: Disc, sky: Sky, name: str, used: Mask
) -> tuple[float, float]:
    """Sum found over sum true of a product, with the stated error."""
    surface: Surface = disc.surfaces[name]
    truth = float(sky.truth.surfaces[name].value[used].sum())
    jacobian = painter.plan.grid.jacobian_arcsec()
    variance = sum_covariance(surface.noise, surface.noise, used, jacobian)
    return float(surface.value[used].sum()) / truth, math.sqrt(max(variance, 0.0)) / truth


def _true_line(truth: Disc, disc: Disc, chosen: Mask) -> tuple[float, float, float]:
    """Slope, level and scatter of the noise-free truth at the final beam.

    Averaged in a beam, a law is no straight line any more: what slope it has depends on where it
    is looked at. Samples therefore count by the errors that the maps have there, taken at the
    true values, beside the scatter: weighted least squares, which needs no model of the fit.
    """
    _, x, y, e_x, e_y = _true_logarithms(truth, disc, chosen)
    slope, intercept, scatter = 1.0, 0.0, 0.2
    for _ in range(TRUTH_ROUNDS):
        weight = 1.0 / (scatter**2 + e_y**2 + (slope * e_x) ** 2)
        slope, intercept = np.polyfit(x, y, 1, w=np.sqrt(weight))
        scatter = math.sqrt(float(np.average((y - slope * x - intercept) ** 2, weights=weight)))
    return float(slope), float(intercept + slope * AT_LOG_GAS), scatter


def _true_zero_point(
    painter: Painter, paint: Paint, truth: Disc, disc: Disc, chosen: Mask
) -> float:
    """Mean of log10(true / law) over the samples, weighed as in `_true_line`."""
    positive, x, y, e_x, e_y = _true_logarithms(truth, disc, chosen)
    law, oh = paint.law(painter.recipe), truth.oh[chosen][positive]
    with np.errstate(invalid="ignore", divide="ignore"):
        at, above = (np.log10(law(10.0 ** (x + step), oh)) for step in (0.0, LAW_STEP_DEX))
    offset, slope = y - at + paint.shift_dex, (above - at) / LAW_STEP_DEX
    known = np.isfinite(offset) & np.isfinite(slope)
    zero, scatter = 0.0, 0.2
    for _ in range(TRUTH_ROUNDS):
        weight = 1.0 / (scatter**2 + e_y**2 + (slope * e_x) ** 2)[known]
        zero = float(np.average(offset[known], weights=weight))
        scatter = math.sqrt(float(np.average((offset[known] - zero) ** 2, weights=weight)))
    return zero


def _true_logarithms(
    truth: Disc, disc: Disc, chosen: Mask
) -> tuple[Mask, Array, Array, Array, Array]:
    """Which samples have logarithms, those of gas and star formation, and the errors of both [dex].

    The errors are those of the maps, at the true values.
    """
    names = ("sigma_gas", "sigma_sfr")
    gas, sfr = (truth.surfaces[name].value[chosen] for name in names)
    gas_error, sfr_error = (disc.surfaces[name].error[chosen] for name in names)
    positive = (gas > 0) & (sfr > 0)
    e_x = (gas_error[positive] / gas[positive]) / math.log(10.0)
    e_y = (sfr_error[positive] / sfr[positive]) / math.log(10.0)
    return positive, np.log10(gas[positive]), np.log10(sfr[positive]), e_x, e_y


def _use(painter: Painter, name: str, free: tuple[FreeParameter, ...] = ()) -> RelationUse:
    table = painter.recipe.relations[name]
    return RelationUse(name, table.law, table.parameters, free)


def _relation(
    painter: Painter, paint: Paint, sky: Sky, disc: Disc, chosen: Mask, mocks: _Mocks
) -> None:
    """The painted relation's zero point, found and true."""
    use = _use(painter, paint.relation, (FreeParameter(ZERO_POINT),))
    fit, _, _ = fit_relation(line_samples(disc, chosen), {"oh": disc.oh[chosen]}, use)
    true = _true_zero_point(painter, paint, sky.truth, disc, chosen)
    mocks.zero_points.append(true)
    if fit.is_fitted:
        name = f"zero point of {paint.relation}"
        mocks.add(name, fit.offsets_dex[ZERO_POINT], fit.errors_dex[ZERO_POINT], true)
    else:
        mocks.fail(f"{paint.relation}: {fit.message}")


def _rank(
    painter: Painter,
    paint: Paint,
    disc: Disc,
    chosen: Mask,
    number: int,
    zero_point_width_dex: float,
    mocks: _Mocks,
) -> None:
    """Rank all relations of the recipe, zero points fixed and then free within a prior."""
    relations = painter.recipe.relations
    names = [name for name, table in relations.items() if not not_carried(table.law)]
    if len(names) < 2:
        return
    fwhm_pix = painter.plan.fwhm_arcsec / painter.plan.grid.pixel_arcsec
    rows, columns = np.nonzero(chosen)
    side = BLOCK_LENGTHS * beam_correlation_length(fwhm_pix)
    centre = painter.plan.grid.centre_pixel
    blocks = square_blocks(np.stack([columns, rows], axis=1).astype(float), side, centre)
    rivals = [name for name in names if name != paint.relation]
    for width, rival in itertools.product((0.0, zero_point_width_dex), rivals):
        rng = generator(painter.recipe.seed, "closure", f"ranking {width:g} {rival}", number)
        ranking = rank_relations(
            line_samples(disc, chosen),
            {"oh": disc.oh[chosen]},
            [_use(painter, name) for name in (paint.relation, rival)],
            blocks,
            rng,
            zero_point_width_dex=width,
        )
        if not ranking.differences:
            for name, why in ranking.left_out.items():
                mocks.fail(f"{name}: {why}")
            continue
        difference = ranking.differences[0]
        right = difference.better == paint.relation
        mocks.rankings.setdefault((ranking.footing, rival), []).append(
            (right, right and difference.is_separated, not right and difference.is_separated)
        )


def _run_wrong(
    painter: Painter, paint: Paint, tilt_deg: float, alpha: float, *, number: int
) -> WrongRun:
    """Let the chain believe a wrong inclination and a wrong alpha_CO."""
    untrue = replace(paint, inclination_off_deg=tilt_deg, alpha_co_off=alpha)
    sky = painter.sky(untrue, number)
    disc = painter.reduce(sky, untrue, number)
    lattices, used = _lattices(painter, disc), covered_by_all(disc, Path("closure"))
    believed = painter.recipe.galaxy.inclination.value
    tilt = math.cos(math.radians(believed)) / math.cos(math.radians(believed + tilt_deg))
    ratios: dict[str, tuple[float, float]] = {}
    true_sums: dict[str, float] = {
        name: float(sky.truth.surfaces[name].value[used].sum())
        for name in PRODUCTS
        if name in disc.surfaces
    }
    expected = dict.fromkeys(true_sums, tilt)
    if "sigma_mol" in true_sums:
        expected["sigma_mol"] = tilt / alpha
        gas = tilt * true_sums["sigma_atom"] + tilt / alpha * true_sums["sigma_mol"]
        expected["sigma_gas"] = gas / true_sums["sigma_gas"]
    for name, total in true_sums.items():
        ratios[name] = (expected[name], float(disc.surfaces[name].value[used].sum()) / total)
    fit = _fit_line(painter, disc, lattices)
    return WrongRun(
        inclination_off_deg=tilt_deg,
        alpha_co_off=alpha,
        ratios=ratios,
        slope_true=float(np.mean([_true_line(sky.truth, disc, mask)[0] for mask in lattices])),
        slope_found=fit.slope,
        slope_error=fit.slope_error,
    )


def _law_shift(paint: Paint, mocks: _Mocks) -> dict[str, float]:
    if paint.is_line:
        true = [own for _, _, own in mocks.found.get("slope", [])]
        return {"slope": float(np.mean(true)) - paint.slope} if true else {}
    return {"zero_point_dex": float(np.mean(mocks.zero_points)) - paint.shift_dex}
