"""A product folder opened in a script or notebook: maps as quantities, tables, a short view."""

from __future__ import annotations

import json
from collections.abc import Sequence
from html import escape
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
from astropy.table import Table
from astropy.wcs import WCS

from kspipe.core.errors import Fault, OutputError
from kspipe.core.report import relation_rows, total_rows
from kspipe.maps.product import read_image
from kspipe.stages.reduce import PRODUCT_UNITS

__all__ = ["Comparison", "Reduction"]


class Reduction:
    """Surface densities of one galaxy, read from a product folder when asked for.

    Parameters
    ----------
    folder : str or Path
        Written by `reduce` or `run`.

    Raises
    ------
    OutputError
        If there is no reduction in it.

    Examples
    --------
    >>> import kspipe
    >>> reduction = kspipe.reduce("galaxy.toml", "out")  # doctest: +SKIP
    >>> reduction["sigma_gas"].unit  # doctest: +SKIP
    Unit("solMass / pc2")
    """

    def __init__(self, folder: str | Path) -> None:
        self.folder = Path(folder)
        if not (self.folder / "maps" / "sigma_gas.fits").is_file():
            raise OutputError(Fault(str(folder), "holds no reduction", "call kspipe.reduce first"))

    @property
    def names(self) -> list[str]:
        """Products that there are."""
        return sorted(path.stem for path in (self.folder / "maps").glob("*.fits"))

    def __getitem__(self, name: str) -> u.Quantity:
        """Return the map of a product, NaN where not covered.

        Raises
        ------
        KeyError
            If there is no such product.
        """
        return self._image(name, 0)

    def error(self, name: str) -> u.Quantity:
        """Random 1-sigma error of a product.

        Raises
        ------
        KeyError
            If there is no such product or it has no random error.
        """
        if name not in PRODUCT_UNITS:
            raise KeyError(f"{name!r} has no random error; those that have: {list(PRODUCT_UNITS)}")
        return self._image(name, "ERROR")

    def _image(self, name: str, extension: str | int) -> u.Quantity:
        if name not in self.names:
            raise KeyError(f"{name!r} is not among the products: {self.names}")
        value, header = read_image(self.folder / "maps" / f"{name}.fits", extension)
        return u.Quantity(value, u.Unit(header.get("BUNIT", ""), format="fits"))

    @property
    def wcs(self) -> WCS:
        """Sky coordinates of every product."""
        return WCS(read_image(self.folder / "maps" / "sigma_gas.fits")[1])

    def __repr__(self) -> str:
        return f"<Reduction in {self.folder}: {', '.join(self.names)}>"

    def _repr_html_(self) -> str:
        rows = []
        for name in self.names:
            value = self[name]
            seen = value[np.isfinite(value)]
            low, middle, high = np.percentile(seen, [16, 50, 84]) if seen.size else [np.nan] * 3
            unit = value.unit.to_string("unicode")
            rows.append((name, unit, f"{seen.size}", f"{middle:.4g}", f"{low:.4g} to {high:.4g}"))
        head = ("product", "unit", "pixels", "median", "16 to 84 %")
        return f"<p>Reduction in {escape(str(self.folder))}</p>" + _html_table(head, rows)


class Comparison(Reduction):
    """A reduction with relations held against it.

    Parameters
    ----------
    folder : str or Path
        Written by `compare` or `run`.

    Raises
    ------
    OutputError
        If there is no comparison in it.
    """

    def __init__(self, folder: str | Path) -> None:
        super().__init__(folder)
        if not (self.folder / "summary.json").is_file():
            raise OutputError(
                Fault(str(folder), "holds no comparison", "call kspipe.compare first")
            )

    @property
    def summary(self) -> dict[str, Any]:
        """Totals and headline numbers."""
        text = (self.folder / "summary.json").read_text(encoding="utf-8")
        return dict(json.loads(text))

    @property
    def pixels(self) -> Table:
        """One row for each covered pixel, with units and descriptions."""
        return Table.read(self.folder / "pixels.ecsv")

    @property
    def relations(self) -> list[str]:
        """Names of the relations."""
        return list(self.summary["relations"])

    def residual(self, relation: str) -> u.Quantity:
        """Map of log10(observed / predicted) [dex].

        Raises
        ------
        KeyError
            If the recipe has no such relation.
        """
        if relation not in self.relations:
            raise KeyError(f"{relation!r} is not among the relations: {self.relations}")
        value, _ = read_image(self.folder / "residuals" / f"{relation}.fits")
        return u.Quantity(value, u.dex)

    def state(self, quantity: str, extension: str | int = 0) -> u.Quantity:
        """Map of one quantity of the state of the gas, NaN where it has no value.

        Parameters
        ----------
        quantity : str
            For example ``temperature_shielded`` or ``jeans_mass_shielded``.
        extension : str or int
            ``ERROR``, or ``AT_N_OVER_3`` and ``AT_3N`` for other densities.

        Raises
        ------
        KeyError
            If the recipe did not ask for it.
        """
        known = sorted(path.stem for path in (self.folder / "state").glob("*.fits"))
        if quantity not in known:
            raise KeyError(
                f"{quantity!r} is not among the state of the gas: "
                f"{known or 'the recipe has no [gas_state]'}"
            )
        value, header = read_image(self.folder / "state" / f"{quantity}.fits", extension)
        return u.Quantity(value, u.Unit(header.get("BUNIT", ""), format="fits"))

    def __repr__(self) -> str:
        return f"<Comparison in {self.folder}: {', '.join(self.relations)}>"

    def _repr_html_(self) -> str:
        summary = self.summary
        return (
            super()._repr_html_()
            + _html_table(("total", "value", "error"), total_rows(summary))
            + _html_table(
                ("relation", "observed / predicted", "zero point, scatter", "median"),
                relation_rows(summary),
            )
        )


def _html_table(head: tuple[str, ...], rows: Sequence[tuple[str, ...]]) -> str:
    def row(cells: tuple[str, ...], tag: str) -> str:
        return "<tr>" + "".join(f"<{tag}>{escape(cell)}</{tag}>" for cell in cells) + "</tr>"

    return "<table>" + row(head, "th") + "".join(row(cells, "td") for cells in rows) + "</table>"
