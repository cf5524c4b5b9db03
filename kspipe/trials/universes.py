"""The same galaxy under every set of choices that has no width: records, samples, beam, estimator.

All records that the maps allow are combined with each other; phase of the lattice, beam and
estimator are changed on the recipe's own records.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Final

import numpy as np
from numpy.typing import NDArray

from kspipe.comparison.estimators import classical_fits
from kspipe.comparison.samples import LinearSamples, lattice_phases
from kspipe.conversions import ALPHA_CO, STAR_FORMATION, AlphaCO, Choices, StarFormation
from kspipe.core.progress import Progress, no_progress
from kspipe.kernels.geometry import beam_axes
from kspipe.trials.draws import SampleInputs, convert_draws, inputs_of, sums_of
from kspipe.trials.ladder import widened
from kspipe.trials.reduced import Reduced, line_samples
from kspipe.trials.response import LineResponse, refit

__all__ = ["DIMENSIONS", "Universe", "explore", "ranges_of", "share_holding"]

Array = NDArray[np.float64]

DIMENSIONS: Final = ("alpha_co", "star_formation", "estimator", "phase", "beam")
PHASES: Final = 4
BEAMS: Final = (1.0, 2.0)
GENERATIVE: Final = "generative"


@dataclass(frozen=True)
class Universe:
    """One set of choices and what comes out.

    Attributes
    ----------
    alpha_co : str
        Record; empty for atomic gas only.
    star_formation : str
        Record.
    estimator : str
        Of the line.
    phase : int
        Of the lattice.
    beam : float
        Times the reduction's.
    values : dict of str to float
        ``slope``, ``t_dep``, ``t_dep_gas``, ``bias NAME``.
    """

    alpha_co: str
    star_formation: str
    estimator: str
    phase: int
    beam: float
    values: dict[str, float]

    @property
    def choices(self) -> tuple[object, ...]:
        """The choices in the order of `DIMENSIONS`."""
        return tuple(getattr(self, name) for name in DIMENSIONS)


def explore(
    reduced: Reduced,
    inputs: SampleInputs,
    response: LineResponse | None,
    *,
    progress: Progress = no_progress,
) -> list[Universe]:
    """Go through all sets of choices; the recipe's own comes first.

    Parameters
    ----------
    reduced : Reduced
    inputs : SampleInputs
        Of the recipe's own samples.
    response : LineResponse or None
        Of the line fitted to them; without it no universe has a slope of the generative fit.
    progress : Progress
    """
    found = list(_records(inputs, response))
    for done, factor in enumerate(BEAMS):
        progress(done, len(BEAMS), f"choices at {factor:g} times the beam")
        found += _samples(reduced, inputs, response, factor)
    return found


def _records(inputs: SampleInputs, response: LineResponse | None) -> Iterator[Universe]:
    """Combine all records that can be evaluated, the recipe's own first."""
    own = inputs.choices
    for alpha, calibration in itertools.product(_alpha_records(inputs), _calibrations(inputs)):
        choices = replace(own, alpha_co=alpha or None, calibration=calibration)
        sums, line, samples = _evaluate(inputs, choices, response)
        where = (_key(alpha), _key(calibration))
        yield Universe(*where, GENERATIVE, 0, 1.0, sums | line)
        if response is not None:
            for estimator, slope in _classical(samples, response.fit.pivot).items():
                yield Universe(*where, estimator, 0, 1.0, {"slope": slope})


def _key(record: str | AlphaCO | StarFormation) -> str:
    """How a record is called: its key, also where it is the user's own."""
    return record if isinstance(record, str) else record.key


def _alpha_records(inputs: SampleInputs) -> list[str | AlphaCO]:
    own = inputs.choices.alpha_co
    if own is None:
        return [""]
    given = {"oh"} | ({"sigma_star", "sigma_total"} if inputs.choices.stars else set())
    for name in ("ms_offset_dex", "g0_over_n"):
        if getattr(inputs.parameters, name) is not None:
            given.add(name)
    others = [r.key for r in ALPHA_CO if set(r.needs) <= given and r.key != _key(own)]
    return [own, *others]


def _calibrations(inputs: SampleInputs) -> list[str | StarFormation]:
    """Records of the maps at hand; power laws, which lose the pixels below zero, are left out."""
    own = inputs.choices.calibration
    have = set(inputs.intensity) | ({"24um"} if "22um" in inputs.intensity else set())
    others = [
        r.key
        for r in STAR_FORMATION
        if set(r.tracers) <= have and r.is_linear and r.key != _key(own)
    ]
    return [own, *others]


def _evaluate(
    inputs: SampleInputs, choices: Choices, response: LineResponse | None
) -> tuple[dict[str, float], dict[str, float], LinearSamples]:
    _, drawn = next(convert_draws(inputs, [], np.zeros((1, 0)), choices))
    sums = {name: float(values[0]) for name, values in sums_of(drawn, inputs.recipe).items()}
    line = {}
    if response is not None:
        moved = response(drawn.gas, drawn.sfr, drawn.var_gas, drawn.var_sfr, drawn.cov)
        line["slope"] = float(moved.slope[0])
    return sums, line, drawn.samples(0)


def _classical(samples: LinearSamples, pivot: float) -> dict[str, float]:
    return {fit.method: fit.slope for fit in classical_fits(samples, pivot)}


def _samples(
    reduced: Reduced, inputs: SampleInputs, response: LineResponse | None, factor: float
) -> list[Universe]:
    """Other phases of the lattice, at one beam, by the recipe's own records."""
    at = widened(reduced, factor)
    own = inputs.choices
    fwhm_pix = beam_axes(at.beam_arcsec2)[0] / at.grid.pixel_arcsec
    lattices = lattice_phases(at.grid.shape, at.grid.centre_pixel, fwhm_pix, PHASES)
    found = []
    for phase, lattice in enumerate(lattices):
        if factor == 1.0 and phase == 0:
            continue
        chosen = np.asarray(lattice & at.used)
        moved_inputs = inputs_of(at, chosen)
        sums, _, _ = _evaluate(moved_inputs, own, None)
        where = (_key(own.alpha_co or ""), _key(own.calibration))
        line = {}
        samples = line_samples(at.disc, chosen)
        if response is not None:
            line["slope"] = float(refit(response, samples).slope[0])
        found.append(Universe(*where, GENERATIVE, phase, factor, sums | line))
        if response is not None:
            found += [
                Universe(*where, estimator, phase, factor, {"slope": slope})
                for estimator, slope in _classical(samples, response.fit.pivot).items()
            ]
    return found


def ranges_of(universes: list[Universe]) -> dict[str, dict[str, tuple[float, float]]]:
    """Least and largest value of each quantity: over one choice alone, and over all.

    Returns
    -------
    dict of str to dict of str to (float, float)
        By quantity and then by dimension, ``all`` among them.
    """
    base = universes[0]
    ranges: dict[str, dict[str, tuple[float, float]]] = {}
    for name in base.values:
        by_choice: dict[str, tuple[float, float]] = {}
        for k, dimension in enumerate(DIMENSIONS):
            alone = [
                u
                for u in universes
                if all(
                    one == other
                    for i, (one, other) in enumerate(zip(u.choices, base.choices, strict=True))
                    if i != k
                )
            ]
            by_choice[dimension] = _span(alone, name)
        by_choice["all"] = _span(universes, name)
        ranges[name] = by_choice
    return ranges


def _span(universes: list[Universe], name: str) -> tuple[float, float]:
    values = [u.values[name] for u in universes if math.isfinite(u.values.get(name, math.nan))]
    return (min(values), max(values)) if values else (math.nan, math.nan)


def share_holding(universes: list[Universe], holds: Mapping[str, float]) -> dict[str, float]:
    """Share of universes in which the sign of a quantity is that of the recipe's own.

    Parameters
    ----------
    universes : list of Universe
    holds : mapping of str to float
        By quantity, the value that its sign is counted from.
    """
    shares = {}
    for name, zero in holds.items():
        values = np.array([u.values[name] for u in universes if name in u.values])
        values = values[np.isfinite(values)]
        if values.size:
            own = universes[0].values[name] - zero
            shares[name] = float(np.mean(np.sign(values - zero) == np.sign(own)))
    return shares
