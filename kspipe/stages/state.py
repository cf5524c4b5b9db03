"""The state of the gas of a compared galaxy: maps, columns and a section of the summary."""

from __future__ import annotations

import warnings
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe.conversions import z_prime
from kspipe.core.citations import cite
from kspipe.core.errors import KspipeWarning
from kspipe.kernels.noise import NoiseTerm
from kspipe.maps.product import write_product
from kspipe.maps.skymap import Flag
from kspipe.recipe.gas_state import GasStateTable, LinewidthMap
from kspipe.relations.inside_beam import clumping_of_beam
from kspipe.relations.state import (
    LINEWIDTH_SIZE,
    MASSES,
    QUANTITIES,
    STATE,
    TURBULENCE,
    Traced,
    gas_state,
)
from kspipe.stages.plan import Plan
from kspipe.stages.state_choices import choices_in_words, conditions_of
from kspipe.stages.state_errors import state_errors
from kspipe.stages.state_files import finer_clumping, linewidth_map
from kspipe.stages.surface import Disc

__all__ = ["GasState", "gas_state_of"]

Array = NDArray[np.float64]

# From this beam on no single cloud is seen: everything is implied by a model.
CLOUD_BEAM_PC: Final = 100.0
DENSITY_STEP: Final = 3.0
MODEL_IMPLIED: Final = "model-implied"


@dataclass(frozen=True)
class GasState:
    """The state of the gas on the common grid.

    Attributes
    ----------
    plan : Plan
    quantities : dict of str to Traced
        By the names of `QUANTITIES`.
    errors : dict of str to (ny, nx) float64 array
        Random, half of a 68 % interval; zero where a quantity rests on choices only.
    thinner, denser : dict of str to Traced
        The same at a third and at three times the density.
    flags : dict of str to (ny, nx) int32 array
    choices : dict of str to str
        Every choice with its origin.
    story : list of str
        How the files were used.
    """

    plan: Plan
    quantities: dict[str, Traced]
    errors: dict[str, Array]
    thinner: dict[str, Traced]
    denser: dict[str, Traced]
    flags: dict[str, NDArray[np.int32]]
    choices: dict[str, str]
    story: list[str]

    @property
    def beam_pc(self) -> float:
        """Width of the final beam."""
        return self.plan.fwhm_arcsec * self.plan.recipe.galaxy.pc_per_arcsec

    def label(self, name: str) -> str:
        """``model-implied``, or nothing for what maps tell of single clouds."""
        if self.beam_pc > CLOUD_BEAM_PC or QUANTITIES[name].rests_on:
            return MODEL_IMPLIED
        return ""

    def write(self, folder: Path) -> None:
        """Write ``state/NAME.fits`` into a folder."""
        (folder / "state").mkdir()
        for name, traced in self.quantities.items():
            quantity = QUANTITIES[name]
            unit = quantity.unit
            extensions: dict[str, tuple[Array | NDArray[np.int32], str]] = {
                "ERROR": (self.errors[name], unit)
            }
            if quantity.follows_density:
                extensions["AT_N_OVER_3"] = (self._full(self.thinner[name].value), unit)
                extensions["AT_3N"] = (self._full(self.denser[name].value), unit)
            extensions["FLAGS"] = (self.flags[name], "")
            write_product(
                folder / "state" / f"{name}.fits",
                self._full(traced.value),
                unit,
                self.plan.grid.wcs,
                self.plan.target_arcsec2,
                extensions=extensions,
                history=self.history(name),
                cards={"BASIS": (self.label(name) or "maps", "what the value rests on")},
            )

    def history(self, name: str) -> list[str]:
        """What a reader of one map must know."""
        quantity = QUANTITIES[name]
        lines = [quantity.meaning]
        if self.label(name):
            lines.append(f"{MODEL_IMPLIED}: a beam of {self.beam_pc:.3g} pc; {self._rests(name)}")
        lines += [_record(key).sentence for key in quantity.records]
        lines += [line for word, line in self._definitions() if name.startswith(word)]
        lines += [f"{choice}: {origin}" for choice, origin in self.choices.items()]
        lines += self.story
        lines.append(
            "ERROR: random, half of the interval that holds 68 %, without what all pixels share"
        )
        if quantity.follows_density:
            lines.append("AT_N_OVER_3, AT_3N: the same at a third and at three times the density")
        return lines

    def _rests(self, name: str) -> str:
        rests = QUANTITIES[name].rests_on
        return f"rests on {', '.join(rests).replace('_', ' ')}" if rests else "rests on maps"

    def _definitions(self) -> list[tuple[str, str]]:
        """Which of several definitions was taken, by the beginning of a quantity's name."""
        table = _table(self.plan)
        mass, ball = f"jeans_{table.jeans}", f"bonnor_ebert_{table.bonnor_ebert}"
        radius = f"bonnor_ebert_radius_{table.bonnor_ebert}"
        others = ", ".join(
            f"{key} {coefficient / MASSES[mass]:.4f}"
            for key, coefficient in MASSES.items()
            if key != mass
        )
        return [
            ("jeans_mass", STATE.get(mass).sentence),
            ("jeans_mass", f"other definitions, over this one: {others}"),
            ("jeans_length", STATE.get("jeans_length").sentence),
            ("bonnor_ebert_mass", STATE.get(ball).sentence),
            ("bonnor_ebert_radius", STATE.get(radius).sentence),
        ]

    def _full(self, value: Array) -> Array:
        return np.broadcast_to(value, self.plan.grid.shape)

    def add_columns(self, table: Table, used: NDArray[np.bool_]) -> None:
        """Add values, errors and flags to the table of pixels."""
        flags = np.bitwise_or.reduce(list(self.flags.values()))
        for name, traced in self.quantities.items():
            quantity = QUANTITIES[name]
            unit = quantity.unit or None
            label = f" ({self.label(name)})" if self.label(name) else ""
            for column, value, what in (
                (name, self._full(traced.value), quantity.meaning + label),
                (f"{name}_err", self.errors[name], f"random 1-sigma error of {name}"),
            ):
                table.add_column(
                    Column(value[used], name=f"state_{column}", unit=unit, description=what)
                )
        bits = ", ".join(f"{bit} {name}" for name, bit in Flag.meanings().items())
        table.add_column(
            Column(
                flags[used], name="state_flags", description=f"of any state_ column, sum of: {bits}"
            )
        )

    def summary(self, used: NDArray[np.bool_]) -> dict[str, Any]:
        """Sum up as nested plain values."""
        keys = {key for name in self.quantities for key in QUANTITIES[name].records}
        records = [_record(key) for key in sorted(keys | self._choice_records())]
        return {
            "label": MODEL_IMPLIED if self.beam_pc > CLOUD_BEAM_PC else "see each quantity",
            "beam_pc": self.beam_pc,
            "choices": self.choices,
            "files": self.story,
            "definitions": sorted({line for _, line in self._definitions()}),
            "n_nonpositive_gas": self._count("depth_complex", used, Flag.NONPOSITIVE_GAS),
            "quantities": {name: self._sum_up(name, used) for name in self.quantities},
            "efficiencies": self._efficiencies(used),
            "records": {r.key: {"formula": r.formula, "certainty": r.certainty} for r in records},
            "sources": {r.cite: str(cite(r.cite)) for r in records},
        }

    def _choice_records(self) -> set[str]:
        """Keys of the records that choices name."""
        table = _table(self.plan)
        density = {"two-phase": ("two_phase",), "hydrostatic": ("hydrostatic",)}.get(
            str(table.density), ("two_phase", "hydrostatic") if table.density == "larger" else ()
        )
        keys = {f"krumholz2013_{name}" for name in density}
        keys |= {"krumholz2013_field"} if table.field == "star formation" else set()
        keys |= {table.linewidth} if isinstance(table.linewidth, str) else set()
        keys |= {f"jeans_{table.jeans}", f"bonnor_ebert_{table.bonnor_ebert}"}
        return keys

    def _count(self, name: str, used: NDArray[np.bool_], flag: Flag) -> int:
        return int(np.sum((self.flags[name][used] & int(flag)) != 0))

    def _sum_up(self, name: str, used: NDArray[np.bool_]) -> dict[str, Any]:
        bright = used & ((self.flags[name] & int(Flag.LOW_SNR)) == 0)

        def median(traced: Traced, where: NDArray[np.bool_] = used) -> float:
            seen = self._full(traced.value)[where]
            seen = seen[np.isfinite(seen)]
            return float(np.median(seen)) if seen.size else float("nan")

        value = self._full(self.quantities[name].value)[used]
        seen = value[np.isfinite(value)]
        low, high = np.percentile(seen, [16, 84]) if seen.size else (np.nan, np.nan)
        quantity = QUANTITIES[name]
        told: dict[str, Any] = {
            "unit": quantity.unit,
            "meaning": quantity.meaning,
            "label": self.label(name) or "maps",
            "median": median(self.quantities[name]),
            "p16": float(low),
            "p84": float(high),
            "median_without_low_snr": median(self.quantities[name], bright),
            "n_without_value": int(value.size - seen.size),
            "n_no_cold_solution": self._count(name, used, Flag.NO_COLD_SOLUTION),
            "n_outside_range": self._count(name, used, Flag.OUTSIDE_RANGE),
        }
        if quantity.follows_density:
            for key, other in (("n_over_3", self.thinner[name]), ("3n", self.denser[name])):
                there = self._full(other.value)[used]
                told[f"median_at_{key}"] = median(other)
                told[f"n_without_value_at_{key}"] = int(np.sum(~np.isfinite(there)))
        return told

    def _efficiencies(self, used: NDArray[np.bool_]) -> dict[str, Any] | None:
        """How far the turbulence-regulated models are from each other, in words for a page."""
        names = [name for name in self.quantities if name.startswith("eps_ff_")]
        medians = {name: self._sum_up(name, used)["median"] for name in names}
        seen = [value for value in medians.values() if value > 0]
        if not seen:
            return None
        span = max(seen) / min(seen)
        return {
            "smallest_median": min(seen),
            "largest_median": max(seen),
            "span": span,
            "note": f"{len(seen)} models of one cloud differ by a factor of {span:.3g}. They hold "
            "before feedback; about 0.01 is observed (common practice)",
        }


def gas_state_of(plan: Plan, disc: Disc) -> GasState | None:
    """Tell the state of the gas in each pixel; None without ``[gas_state]`` in the recipe.

    Parameters
    ----------
    plan : Plan
    disc : Disc
    """
    recipe = plan.recipe
    if recipe.gas_state is None:
        return None
    table, grid = recipe.gas_state, plan.grid
    names = ("sigma_gas", "sigma_atom", "sigma_mol", "sigma_sfr")
    inputs = {n: disc.surfaces[n].value for n in names if n in disc.surfaces}
    noise = {n: disc.surfaces[n].noise for n in inputs}
    inputs["z_prime"] = z_prime(disc.oh)
    story: list[str] = []
    if isinstance(table.linewidth, LinewidthMap):
        inputs["linewidth"], lines = linewidth_map(table.linewidth, grid)
        error = table.linewidth.error.value if table.linewidth.error else 0.0
        noise["linewidth"] = (
            NoiseTerm("linewidth", np.full(grid.shape, error), plan.target_arcsec2),
        )
        story += lines
    beam_pc = plan.fwhm_arcsec * recipe.galaxy.pc_per_arcsec
    clumping: Array | float
    if table.clumping == "finer map":
        clumping, lines = finer_clumping(recipe, plan.target_arcsec2, grid)
        story += lines
    elif table.clumping == "beam":
        clumping = float(clumping_of_beam(beam_pc))
    else:
        clumping = float(table.clumping)
    conditions = conditions_of(table, clumping, beam_pc)
    found, thinner, denser = (
        gas_state(inputs, replace(conditions, density_factor=factor))
        for factor in (1.0, 1.0 / DENSITY_STEP, DENSITY_STEP)
    )
    _warn_hot(found["temperature_unshielded"], inputs["sigma_gas"], table)
    smoother = np.asarray(clumping) < 1.0
    return GasState(
        plan=plan,
        quantities=found,
        errors=state_errors(
            lambda moved: gas_state(moved, conditions), inputs, noise, found, grid.shape
        ),
        thinner=thinner,
        denser=denser,
        flags={
            name: _flags(disc.flags, traced, smoother & ("clumping" in QUANTITIES[name].rests_on))
            for name, traced in found.items()
        },
        choices=choices_in_words(table, conditions, beam_pc, has_molecular="sigma_mol" in inputs),
        story=story,
    )


def _warn_hot(unshielded: Traced, gas: Array, table: GasStateTable) -> None:
    """Tell where most of the gas would be too hot to be the gas that this is about."""
    seen = np.isfinite(gas)
    n = int(np.sum(np.broadcast_to(unshielded.no_cold, gas.shape) & seen))
    if n > 0.5 * seen.sum():
        warnings.warn(
            f'gas_state.density "{table.density}": unshielded gas has no cold solution in {n} of '
            f"{int(seen.sum())} pixels, flagged no_cold_solution: C+ cannot carry off its heat "
            "below 500 K. Denser gas, or gas that is clumped below that density "
            f"(density_clumping, {table.density_clumping:g} now), has one",
            KspipeWarning,
            stacklevel=2,
        )


def _table(plan: Plan) -> GasStateTable:
    table = plan.recipe.gas_state
    if table is None:
        raise ValueError("the recipe has no [gas_state]")
    return table


def _record(key: str) -> Any:
    for shelf in (STATE, TURBULENCE):
        if key in shelf:
            return shelf.get(key)
    return LINEWIDTH_SIZE.get(key)


def _flags(
    flags: NDArray[np.int32], traced: Traced, smoother: NDArray[np.bool_]
) -> NDArray[np.int32]:
    lost = np.where(traced.no_cold, int(Flag.NO_COLD_SOLUTION), 0)
    outside = np.where(traced.outside | smoother, int(Flag.OUTSIDE_RANGE), 0)
    return np.asarray(flags | lost | outside, dtype=np.int32)
