"""The table of pixels: one row for each pixel that all needed maps cover."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
from astropy.table import Column, Table
from numpy.typing import NDArray

from kspipe.comparison import Residuals
from kspipe.conversions import z_prime
from kspipe.maps.skymap import Flag
from kspipe.matching import Grid
from kspipe.stages.surface import Disc

__all__ = ["pixel_table", "write_pixels"]

Array = NDArray[np.float64]

_DENSITIES = {
    "sigma_star": ("solMass / pc2", "stars, face-on"),
    "sigma_atom": ("solMass / pc2", "atomic gas with helium, face-on"),
    "sigma_mol": ("solMass / pc2", "molecular gas with helium, face-on"),
    "sigma_gas": ("solMass / pc2", "atomic and molecular gas with helium, face-on"),
    "sigma_sfr": ("solMass / (yr kpc2)", "star-formation rate, face-on"),
}


def pixel_table(
    disc: Disc,
    residuals: Mapping[str, Residuals],
    used: NDArray[np.bool_],
    independent: NDArray[np.bool_],
    grid: Grid,
    meta: Mapping[str, Any],
) -> Table:
    """Make the table.

    Parameters
    ----------
    disc : Disc
    residuals : mapping of str to Residuals
        By the recipe's name of the relation.
    used : (ny, nx) bool array
        Rows.
    independent : (ny, nx) bool array
    grid : Grid
    meta : mapping
        Goes into the header.

    Returns
    -------
    astropy.table.Table
    """
    y, x = np.nonzero(used)
    ra, dec = grid.sky()
    table = Table(meta=dict(meta))

    def add(name: str, values: Any, unit: str | None, description: str) -> None:
        table.add_column(Column(values, name=name, unit=unit, description=description))

    add("x", x, None, "pixel column, zero-based")
    add("y", y, None, "pixel row, zero-based")
    add("ra", ra[used], "deg", "right ascension, ICRS")
    add("dec", dec[used], "deg", "declination, ICRS")
    add("radius_kpc", disc.radius_kpc[used], "kpc", "deprojected distance from the centre")
    for name, (unit, what) in _DENSITIES.items():
        if name in disc.surfaces:
            surface = disc.surfaces[name]
            imf = f", {meta['imf']} IMF" if name == "sigma_sfr" else ""
            add(name, surface.value[used], unit, what + imf)
            add(f"{name}_err", surface.error[used], unit, f"random 1-sigma error of {name}")
    add("z_prime", z_prime(disc.oh)[used], None, "metallicity, 10^(12+log10(O/H) - 8.69)")
    flags = np.bitwise_or.reduce([disc.flags, *(r.flags for r in residuals.values())])
    bits = ", ".join(f"{bit} {name}" for name, bit in Flag.meanings().items())
    add("flags", flags[used], None, f"sum of: {bits}")
    add("independent", independent[used], None, "on the lattice of independent samples")
    for name, r in residuals.items():
        sfr_unit = _DENSITIES["sigma_sfr"][0]
        add(f"predicted_{name}", r.predicted[used], sfr_unit, f"sigma_sfr predicted by {name}")
        add(f"residual_{name}", r.ratio_dex[used], "dex", f"log10(observed / predicted), {name}")
        if r.predicted_f_mol is not None:
            what = f"molecular fraction predicted by {name}"
            add(f"predicted_f_mol_{name}", r.predicted_f_mol[used], None, what)
    return table


def write_pixels(table: Table, path: Path) -> None:
    """Write the table as ECSV, every number in full."""
    table.write(path, format="ascii.ecsv", overwrite=False)
