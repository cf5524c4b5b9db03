"""Maps of the temperature and the Jeans mass that the chosen conditions imply."""

from __future__ import annotations

from pathlib import Path
from typing import Any, Final

import matplotlib as mpl
import numpy as np
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator
from numpy.typing import NDArray

from kspipe.maps.product import read_image
from kspipe.maps.skymap import Flag
from kspipe.products.read import Products
from kspipe.products.sky import add_hatching, add_landmarks, add_sky_axes, fitted_inches
from kspipe.products.style import LINE_INCHES, beside_name, in_figure, new_figure, write_name

__all__ = ["draw_gas_state"]

Array = NDArray[np.float64]

COLOUR_MAP: Final = "cividis"
CONTOUR_SNR: Final = 3.0
# Least width of a range of colours: flat maps look flat.
LEAST_RANGE: Final = 3.0

# The layout in inches.
LEFT: Final = 0.78
PANEL: Final = 2.6
COLUMN: Final = 3.2
TITLE: Final = 0.24
BOTTOM: Final = 0.42
TOP: Final = 0.28

_ROWS: Final = (
    ("temperature", "K", "temperature"),
    ("jeans_mass", r"M$_\odot$", "Jeans mass"),
)
_STATES: Final = {"unshielded": "Unshielded gas", "shielded": "Shielded gas"}


def draw_gas_state(products: Products, folder: Path) -> Figure:
    """Draw temperature and Jeans mass of unshielded and of shielded gas.

    Parameters
    ----------
    products : Products
    folder : Path
        The product folder, with its ``state/``.

    Returns
    -------
    Figure
        Both maps of a quantity share one range of colours, that of pixels with gas above S/N 3.
    """
    shape = (products.covered.shape[0], products.covered.shape[1])
    width, height = fitted_inches(PANEL, 1.5 * PANEL, shape)
    marks = beside_name(products.galaxy_text, _marks(products))
    top = TOP + LINE_INCHES * marks.count("\n")
    figure = new_figure(BOTTOM + len(_ROWS) * (height + TITLE) + top)
    for row, (quantity, unit, what) in enumerate(_ROWS):
        files = {state: folder / "state" / f"{quantity}_{state}.fits" for state in _STATES}
        values = {state: read_image(file)[0] for state, file in files.items()}
        norm = _colours(products, list(values.values()))
        for column, (state, title) in enumerate(_STATES.items()):
            left = LEFT + COLUMN * column
            bottom = BOTTOM + (len(_ROWS) - 1 - row) * (height + TITLE)
            box = in_figure(figure, left, bottom, width, height)
            is_last = row == len(_ROWS) - 1
            axes = add_sky_axes(figure, box, products, ra=is_last, dec=column == 0)
            flags = read_image(files[state], "FLAGS")[0].astype(np.int32)
            _draw(axes, products, values[state], flags, norm)
            axes.set_title(f"{title}, {what} ({unit})", pad=3)
            bar = figure.add_axes(in_figure(figure, left + width + 0.06, bottom, 0.1, height))
            _add_bar(figure, bar, norm)
    write_name(figure, LEFT, products.galaxy_text, marks)
    return figure


def _marks(products: Products) -> str:
    """What is assumed, and what the lines and the hatching are."""
    table = products.recipe.gas_state
    if table is None:
        raise ValueError("the recipe has no [gas_state]")
    label = products.summary["gas_state"]["label"]
    density = {
        "two-phase": "of two phases",
        "hydrostatic": "of the hydrostatic midplane",
        "larger": "the larger of two phases and midplane",
    }.get(str(table.density), str(table.density).replace("cm-3", r"cm$^{-3}$"))
    numbers = [
        r"$\chi$ from star formation"
        if isinstance(table.field, str)
        else rf"$\chi$ = {table.field:g}",
        r"$\zeta'$ = $\chi$"
        if isinstance(table.cosmic_rays, str)
        else rf"$\zeta'$ = {table.cosmic_rays:g}",
    ]
    implied = "model-implied" if label == "model-implied" else "implied by the choices"
    marks = [
        f"{implied}: n {density}, {', '.join(numbers)}",
        f"contour gas S/N = {CONTOUR_SNR:g}",
        "hatched: no cold solution; white: no gas or not covered",
        f"ellipse: beam, {products.beam_text}",
    ]
    return ";  ".join(marks)


def _colours(products: Products, maps: list[Array]) -> LogNorm:
    """One logarithmic range for the maps of a quantity."""
    sure = products.densities["sigma_gas"].snr > CONTOUR_SNR
    seen = np.concatenate([value[sure & (value > 0)] for value in maps])
    if not seen.size:
        return LogNorm(1.0, 10.0)
    low, high = np.percentile(seen, [1, 99])
    wanted = max(1.0, LEAST_RANGE / (high / low)) ** 0.5
    return LogNorm(low / wanted, high * wanted)


def _draw(
    axes: Any, products: Products, value: Array, flags: NDArray[np.int32], norm: LogNorm
) -> None:
    cmap = mpl.colormaps[COLOUR_MAP]
    axes.imshow(value, norm=norm, cmap=cmap, interpolation="nearest", zorder=1)
    add_hatching(axes, products.covered & ((flags & int(Flag.NO_COLD_SOLUTION)) != 0))
    snr = products.densities["sigma_gas"].snr
    if np.nanmax(snr, initial=-np.inf) > CONTOUR_SNR > np.nanmin(snr, initial=np.inf):
        axes.contour(snr, levels=[CONTOUR_SNR], colors="black", linewidths=0.5)
    add_landmarks(axes, products)


def _add_bar(figure: Figure, axes: Any, norm: LogNorm) -> None:
    image = mpl.cm.ScalarMappable(norm, mpl.colormaps[COLOUR_MAP])
    bar = figure.colorbar(image, cax=axes, extend="both")
    few = norm.vmax is not None and norm.vmin is not None and norm.vmax / norm.vmin < 50
    bar.ax.yaxis.set_major_locator(LogLocator(subs=(1.0, 2.0, 3.0, 5.0) if few else (1.0, 3.0)))
    bar.ax.yaxis.set_minor_locator(NullLocator())
    bar.ax.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    bar.ax.tick_params(length=2, pad=2)
    bar.outline.set_linewidth(0.6)
