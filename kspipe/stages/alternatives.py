"""What each record that fits a recipe would give for its galaxy, side by side."""

from __future__ import annotations

import logging
import math
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe import __version__
from kspipe.conversions import convert
from kspipe.core.progress import Progress, no_progress
from kspipe.kernels.geometry import beam_axes
from kspipe.maps.product import read_matched
from kspipe.maps.skymap import SkyMap
from kspipe.matching import Grid
from kspipe.recipe import Recipe
from kspipe.recipe.alternatives import Alternative, alternatives_of
from kspipe.stages.compare import reduced_plan
from kspipe.stages.folder import ProductFolder, fingerprint
from kspipe.stages.place import Place
from kspipe.stages.plan import InMemory, choices_of
from kspipe.stages.surface import fields_of, parameters_of, used_maps

__all__ = ["ALTERNATIVES_FILE", "alternative_cells", "alternative_table", "weigh_alternatives"]

Array = NDArray[np.float64]

log = logging.getLogger(__name__)

ALTERNATIVES_FILE: Final = "alternatives.ecsv"

_TOTAL_UNITS: Final = {"sigma_sfr": "Msun/yr"}
_UNITS: Final = {"sigma_sfr": "Msun/yr/kpc2"}


@dataclass(frozen=True)
class _Galaxy:
    """What all alternatives share."""

    matched: dict[str, SkyMap]
    place: Place
    disc: NDArray[np.bool_]
    ring: NDArray[np.intp]
    ring_radius: Array
    area_pc2: Array


def weigh_alternatives(
    out: Path,
    *,
    overwrite: bool = False,
    memory: InMemory | None = None,
    progress: Progress = no_progress,
) -> bool:
    """Convert the matched maps of a reduction by every record that fits; nothing is smoothed again.

    Parameters
    ----------
    out : Path
        Folder of a reduction; ``alternatives.ecsv`` is written.
    overwrite : bool
        Whether an older table may be replaced.
    memory : mapping, optional
        As given to the reduction.
    progress : Progress

    Returns
    -------
    bool
        False where it was there already and was reused.

    Raises
    ------
    OutputError
        If the folder holds no reduction, or one made from other inputs.
    """
    folder = ProductFolder.open(out)
    plan = reduced_plan(folder, memory)
    found = list(alternatives_of(plan.recipe))
    print_ = fingerprint(
        {
            "reduction": folder.stages["convert"]["fingerprint"],
            "records": [[a.family, a.record.key, a.record.formula] for a in found],
            "kspipe": __version__,
        }
    )
    if not folder.check({"alternatives": print_}, overwrite=overwrite):
        log.info("alternatives: nothing changed, %s is reused", out)
        return False
    matched = {name: read_matched(out / "matched" / f"{name}.fits") for name in plan.sources}
    table = alternative_table(plan.recipe, matched, plan.grid, progress=progress)
    with folder.publish({"alternatives": print_}) as staging:
        table.write(staging / ALTERNATIVES_FILE, format="ascii.ecsv")
    return True


def alternative_table(
    recipe: Recipe,
    matched: dict[str, SkyMap],
    grid: Grid,
    *,
    progress: Progress = no_progress,
) -> Table:
    """Make the table: one row for each record that fits.

    Parameters
    ----------
    recipe : Recipe
    matched : dict of str to SkyMap
        By the recipe's names.
    grid : Grid
    progress : Progress

    Returns
    -------
    astropy.table.Table
        Totals are of the pixels where both the record and the one used give a value. The tilt is
        the slope of log10 of the ratio of both against the radius, from sums over rings one beam
        wide, so that negative pixels count. Medians and tilts are of the disc inside r25, where
        the recipe gives it.
    """
    galaxy = _galaxy(recipe, matched, grid)
    found = list(alternatives_of(recipe))
    base = _converted(recipe, galaxy)
    per = "r25" if recipe.galaxy.r25 is not None else "kpc"
    rows = []
    for done, alternative in enumerate(found):
        progress(done, len(found), f"converting by {alternative.record.key}")
        rows.append(_row(alternative, base[0], galaxy, recipe.galaxy.kpc_per(per)))
    progress(len(found), len(found), "weighed")
    table = Table(meta={"galaxy": recipe.galaxy.name, "kspipe": __version__, "tilt per": per})
    for name, unit, description in (
        ("family", None, "what is chosen"),
        ("record", None, "key"),
        ("used", None, "whether it is the recipe's"),
        ("product", None, "surface density that it changes"),
        ("total", None, "over pixels where both give a value, in total_unit"),
        ("total_unit", None, ""),
        ("total_ratio", None, "total over that of the record used"),
        ("median", None, "of the same pixels, in median_unit, face-on"),
        ("median_unit", None, ""),
        ("median_dex", "dex", "median of log10(this / used) where both are positive"),
        ("tilt_dex", "dex", f"change of log10(this / used) per {per}"),
        ("pixels", None, "where both give a value"),
        ("outside_range", None, "pixels outside the range of a record or quantity"),
        ("certainty", None, "of the record's coefficients"),
        ("paper", None, ""),
    ):
        column = [row[name] for row in rows]
        table.add_column(Column(column, name=name, unit=unit, description=description))
    return table


def _galaxy(recipe: Recipe, matched: dict[str, SkyMap], grid: Grid) -> _Galaxy:
    place = Place.of(recipe, grid)
    beam = next(iter(matched.values())).beam_arcsec2
    width = beam_axes(beam)[0] * recipe.galaxy.pc_per_arcsec / 1e3
    ring = np.floor(place.radius_kpc / width).astype(np.intp)
    n = int(ring.max()) + 1
    pixels = np.maximum(np.bincount(ring.ravel(), minlength=n), 1)
    radius = np.bincount(ring.ravel(), place.radius_kpc.ravel(), minlength=n) / pixels
    area = grid.areas_arcsec2() * recipe.galaxy.pc_per_arcsec**2 / recipe.galaxy.cos_i
    r25 = recipe.galaxy.r25
    edge_kpc = recipe.galaxy.kpc_per("r25") if r25 is not None else np.inf
    return _Galaxy(matched, place, place.radius_kpc <= edge_kpc, ring, radius, area)


def _converted(recipe: Recipe, galaxy: _Galaxy) -> tuple[dict[str, Array], int]:
    """Surface densities by a recipe, and how many covered pixels are outside a range."""
    fields = fields_of(recipe, galaxy.place)
    used = used_maps(recipe, galaxy.matched)
    converted = convert(
        {tracer: sky.value for tracer, sky in used.items()},
        choices_of(recipe),
        parameters_of(recipe, fields),
    )
    outside = converted.flags.get("outside_range", np.zeros((), dtype=bool))
    for field in fields.values():
        if field.outside is not None:
            outside = outside | field.outside
    covered = np.logical_and.reduce([np.isfinite(sky.value) for sky in used.values()])
    return converted.values, int(np.sum(outside & covered))


def _row(
    alternative: Alternative, base: dict[str, Array], galaxy: _Galaxy, kpc: float
) -> dict[str, Any]:
    values, n_outside = _converted(alternative.recipe, galaxy)
    product, record = alternative.product, alternative.record
    this, used = values[product], base[product]
    both = np.isfinite(this) & np.isfinite(used)
    to_total = galaxy.area_pc2 * (1e-6 if product == "sigma_sfr" else 1.0)
    total, reference = (float(np.sum((image * to_total)[both])) for image in (this, used))
    total_pixels = int(both.sum())
    both = both & galaxy.disc
    positive = both & (np.where(both, this, 0) > 0) & (np.where(both, used, 0) > 0)
    ratio = np.log10(this[positive] / used[positive])
    return {
        "family": alternative.family,
        "record": record.key,
        "used": alternative.is_used,
        "product": product,
        "total": total,
        "total_unit": _TOTAL_UNITS.get(product, "Msun"),
        "total_ratio": total / reference if reference else math.nan,
        "median": float(np.median(this[both])) if both.any() else math.nan,
        "median_unit": _UNITS.get(product, "Msun/pc2"),
        "median_dex": float(np.median(ratio)) if ratio.size else math.nan,
        "tilt_dex": _tilt(this, used, both, galaxy) * kpc,
        "pixels": total_pixels,
        "outside_range": n_outside,
        "certainty": record.certainty,
        "paper": record.paper,
    }


def _tilt(this: Array, used: Array, both: NDArray[np.bool_], galaxy: _Galaxy) -> float:
    """Slope of log10 of the ratio of sums over rings [dex/kpc]; each ring weighs as its pixels."""
    n = galaxy.ring_radius.size
    ring = galaxy.ring[both]
    pixels = np.bincount(ring, minlength=n)
    sums = [np.bincount(ring, image[both], minlength=n) for image in (this, used)]
    good = (sums[0] > 0) & (sums[1] > 0)
    if good.sum() < 2:
        return math.nan
    x, y, w = galaxy.ring_radius[good], np.log10(sums[0][good] / sums[1][good]), pixels[good]
    mean_x, mean_y = np.average(x, weights=w), np.average(y, weights=w)
    return float(np.sum(w * (x - mean_x) * (y - mean_y)) / np.sum(w * (x - mean_x) ** 2))


def alternative_cells(folder: Path) -> list[tuple[str, ...]]:
    """Read the table as rows of text: record, total, ratio, median, tilt, doubt."""
    table = Table.read(folder / ALTERNATIVES_FILE)
    per = table.meta["tilt per"]
    rows: list[tuple[str, ...]] = []
    for row in table:
        doubts = [str(row["certainty"])] if row["certainty"] != "verified" else []
        doubts += [f"{row['outside_range']} pixels outside range"] if row["outside_range"] else []
        rows.append(
            (
                str(row["family"]),
                f"{row['record']}{' (used)' if row['used'] else ''}",
                f"{row['total']:.4g} {row['total_unit']}",
                f"x {row['total_ratio']:.3f}",
                f"{row['median']:.4g} {row['median_unit']}",
                f"{row['median_dex']:+.3f} dex",
                f"{row['tilt_dex']:+.3f} dex/{per}",
                "; ".join(doubts),
            )
        )
    return rows
