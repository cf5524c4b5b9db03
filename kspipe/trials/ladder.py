"""The resolution ladder: the same galaxy at wider and wider beams, and where sampling ends it."""

from __future__ import annotations

import math
import os
from dataclasses import asdict, dataclass, replace
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison import Headline, headline, independent_beams, predict_residuals
from kspipe.comparison.line import LineFit, fit_line
from kspipe.conversions import STAR_FORMATION
from kspipe.conversions.tracer_ages import MASSIVE_MSUN, TRACER_AGES, massive_stars_per_msun
from kspipe.core.progress import Progress, no_progress
from kspipe.core.seeds import generator
from kspipe.kernels.geometry import beam_area, beam_axes
from kspipe.matching import match_map
from kspipe.stages.law_inputs import law_inputs
from kspipe.stages.summary import DETECTED_SIGMA
from kspipe.trials.reduced import Reduced, line_samples

__all__ = ["FACTORS", "Rung", "climb", "plain_ladder", "widened"]

Array = NDArray[np.float64]

FACTORS: Final = (1, 2, 4, 8)
# Below this a beam holds too few clouds, caught at different ages, for gas and young stars to
# follow one law (Schruba et al. 2010; value from memory).
LEAST_PC: Final = 500.0
# Fewer expected massive stars than this scatter by more than a third of their number: Poisson.
LEAST_STARS: Final = 10.0


@dataclass(frozen=True)
class Rung:
    """The comparison at one beam.

    Attributes
    ----------
    factor : float
        Times the beam of the reduction.
    beam_arcsec, beam_pc : float
        FWHM; pc along the major axis of the disc.
    n_pixels : int
        Covered pixels.
    n_independent : float
        Effective number for a mean.
    ages_myr : dict of str to str
        Youngest, mean and 90-percent age of the stars behind each tracer.
    stars_per_beam : float
        Massive stars (8 Msun and more) that a sample is expected to hold, born within the
        shortest of the 90-percent ages: median over the samples of positive star formation,
        weighted by it.
    share_of_few : float
        Share of the samples with star formation above 3 sigma that are expected to hold fewer
        than 10; NaN where there are none.
    limits : list of str
        Why the fit is limited by sampling; empty where it is not.
    line : LineFit
    relations : dict of str to Headline
    """

    factor: float
    beam_arcsec: float
    beam_pc: float
    n_pixels: int
    n_independent: float
    ages_myr: dict[str, str]
    stars_per_beam: float
    share_of_few: float
    limits: list[str]
    line: LineFit
    relations: dict[str, Headline]

    @property
    def is_sampling_limited(self) -> bool:
        """Whether clouds and stars per beam, not the law, may set slope and scatter."""
        return bool(self.limits)


def widened(reduced: Reduced, factor: float) -> Reduced:
    """Smooth the matched maps further, with the matching of the reduction.

    Parameters
    ----------
    reduced : Reduced
    factor : float
        1 or more, times the common beam; the grid stays.
    """
    if factor == 1:
        return reduced
    target = factor**2 * reduced.beam_arcsec2
    matched = {
        name: match_map(
            sky,
            target,
            reduced.grid,
            minimum_coverage=reduced.recipe.grid.minimum_coverage,
            workers=os.cpu_count() or 1,
        )
        for name, sky in reduced.matched.items()
    }
    return reduced.with_maps(matched)


def climb(
    reduced: Reduced,
    factors: tuple[float, ...] = FACTORS,
    *,
    progress: Progress = no_progress,
) -> list[Rung]:
    """Fit the line and hold every relation against the galaxy at each beam.

    Parameters
    ----------
    reduced : Reduced
    factors : tuple of float
        Times the beam of the reduction, 1 or more.
    progress : Progress
    """
    rungs = []
    for done, factor in enumerate(factors):
        progress(done, len(factors), f"{factor:g} times the beam")
        rungs.append(_rung(widened(reduced, factor), factor))
    progress(len(factors), len(factors), "climbed")
    return rungs


def _rung(at: Reduced, factor: float) -> Rung:
    fwhm = beam_axes(at.beam_arcsec2)[0]
    beam_pc = fwhm * at.recipe.galaxy.pc_per_arcsec
    chosen = at.lattice()
    expected, ages = _massive_stars(at, chosen)
    sfr = at.disc.surfaces["sigma_sfr"]
    detected = (sfr.value > DETECTED_SIGMA * sfr.error)[chosen] if expected.size else expected > 0
    few = float(np.mean(expected[detected] < LEAST_STARS)) if detected.any() else math.nan
    n_pixels = int(at.used.sum())
    return Rung(
        factor=factor,
        beam_arcsec=fwhm,
        beam_pc=beam_pc,
        n_pixels=n_pixels,
        n_independent=independent_beams(n_pixels, at.grid.pixel_arcsec**2, at.beam_arcsec2),
        ages_myr=ages,
        stars_per_beam=_weighted_median(expected),
        share_of_few=few,
        limits=_limits(beam_pc, few),
        line=fit_line(line_samples(at.disc, chosen)),
        relations=_relations(at),
    )


def _massive_stars(at: Reduced, chosen: NDArray[np.bool_]) -> tuple[Array, dict[str, str]]:
    """Massive stars expected in the beam of each sample, and the ages behind the tracers."""
    recipe = at.recipe
    record = STAR_FORMATION.get(recipe.star_formation.calibration)
    ages = {tracer: TRACER_AGES[tracer] for tracer in record.tracers if tracer in TRACER_AGES}
    if not ages:
        return np.zeros(0), {}
    beam_kpc2 = beam_area(at.beam_arcsec2) * (recipe.galaxy.pc_per_arcsec / 1e3) ** 2
    years = 1e6 * min(age.oldest_myr for age in ages.values())
    per_sigma = beam_kpc2 / recipe.galaxy.cos_i * years
    per_sigma *= massive_stars_per_msun(recipe.star_formation.imf)
    expected = per_sigma * at.disc.surfaces["sigma_sfr"].value[chosen]
    return expected, {tracer: str(age) for tracer, age in ages.items()}


def _weighted_median(expected: Array) -> float:
    """Number per beam above which half of all the stars lie; NaN where there are none."""
    positive = np.sort(expected[expected > 0])
    if not positive.size:
        return math.nan
    total = np.cumsum(positive)
    return float(positive[np.searchsorted(total, 0.5 * total[-1])])


def _limits(beam_pc: float, share_of_few: float) -> list[str]:
    limits = []
    if beam_pc < LEAST_PC:
        limits.append(f"beam of {beam_pc:.0f} pc, below {LEAST_PC:g} pc")
    if share_of_few > 0.5:
        limits.append(
            f"fewer than {LEAST_STARS:g} stars of {MASSIVE_MSUN:g} Msun expected in "
            f"{share_of_few:.0%} of the samples that show any"
        )
    return limits


def _relations(at: Reduced) -> dict[str, Headline]:
    inputs, sfr = law_inputs(at.recipe, at.disc), at.disc.surfaces["sigma_sfr"]
    found = {}
    for name, table in at.recipe.relations.items():
        residuals = predict_residuals(inputs, sfr, at.disc.flags, table.law, table.parameters)
        rng = generator(at.recipe.seed, "ladder", f"{name} {beam_axes(at.beam_arcsec2)[0]:.6g}")
        found[name] = headline(
            residuals, sfr, at.used, at.lattice(), at.grid.jacobian_arcsec(), rng
        )
    return found


def plain_ladder(rungs: list[Rung]) -> list[dict[str, Any]]:
    """Rungs as nested plain values, for the file."""
    plain = []
    for rung in rungs:
        line = replace(rung.line, covariance=np.zeros((0, 0)))
        row = {**asdict(replace(rung, line=line)), "is_sampling_limited": rung.is_sampling_limited}
        row["line"].pop("covariance")
        plain.append(row)
    return plain
