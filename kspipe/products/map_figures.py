"""Maps of the surface densities side by side."""

from __future__ import annotations

import math
from typing import Any, Final

import matplotlib as mpl
import numpy as np
from matplotlib.colorbar import Colorbar
from matplotlib.colors import AsinhNorm
from matplotlib.figure import Figure
from numpy.typing import NDArray

from kspipe.products.read import Products
from kspipe.products.sky import add_landmarks, add_sky_axes, fitted_inches
from kspipe.products.style import (
    GAS_UNIT,
    LINE_INCHES,
    SFR_UNIT,
    SIGMA,
    beside_name,
    in_figure,
    new_figure,
    write_name,
)

__all__ = ["draw_surface_densities"]

Array = NDArray[np.float64]

# Light where faint and evenly darker to the bright end, in colour and in grey.
COLOUR_MAP: Final = "magma_r"
CONTOUR_SNR: Final = 3.0
# Deeper holes than noise makes get a colour of their own.
BELOW: Final = "#56B4E9"
# Colours begin this many sigma below zero, are linear up to so many above, logarithmic beyond.
LOWEST_SIGMA: Final = -3.0
LINEAR_SIGMA: Final = 5.0
# Ticks of a colour bar are at least so far apart.
TICK_INCHES: Final = 0.21

# The layout in inches.
LEFT: Final = 0.78
PANEL: Final = 2.6
COLUMN: Final = 3.2
TITLE: Final = 0.24
BOTTOM: Final = 0.42
TOP: Final = 0.28

_TITLES: Final = {
    "sigma_atom": "Atomic gas",
    "sigma_mol": "Molecular gas",
    "sigma_gas": "Atomic + molecular gas",
    "sigma_sfr": "Star formation",
}


def draw_surface_densities(products: Products) -> Figure:
    """Draw one map of each surface density.

    Parameters
    ----------
    products : Products

    Returns
    -------
    Figure
        All gas maps share one range of colours. Without molecular gas the total is the atomic
        gas, and is drawn once.
    """
    titles = dict(_TITLES)
    if "sigma_mol" not in products.densities:
        del titles["sigma_mol"], titles["sigma_gas"]
        titles["sigma_atom"] = "Atomic gas (no CO map)"
    shape = (products.covered.shape[0], products.covered.shape[1])
    width, height = fitted_inches(PANEL, 1.5 * PANEL, shape)
    rows = math.ceil(len(titles) / 2)
    marks = beside_name(products.galaxy_text, _marks(products))
    top = TOP + LINE_INCHES * marks.count("\n")
    figure = new_figure(BOTTOM + rows * (height + TITLE) + top)
    for place, (name, title) in enumerate(titles.items()):
        row, column = divmod(place, 2)
        left, bottom = LEFT + COLUMN * column, BOTTOM + (rows - 1 - row) * (height + TITLE)
        axes = add_sky_axes(
            figure,
            in_figure(figure, left, bottom, width, height),
            products,
            ra=row == rows - 1,
            dec=column == 0,
        )
        bar = figure.add_axes(in_figure(figure, left + width + 0.06, bottom, 0.1, height))
        _draw_map(figure, axes, bar, products, name, title)
    write_name(figure, LEFT, products.galaxy_text, marks)
    return figure


def _marks(products: Products) -> str:
    """What the lines and the ellipse on every map are."""
    marks = [f"contour S/N = {CONTOUR_SNR:g}", f"ellipse: beam, {products.beam_text}"]
    if products.recipe.galaxy.r25 is not None:
        marks.insert(1, "dashed: r$_{25}$")
    if not products.covered.all():
        marks.append("white: not covered")
    return ";  ".join(marks)


def _draw_map(
    figure: Figure, axes: Any, bar: Any, products: Products, name: str, title: str
) -> None:
    density = products.densities[name]
    low, linear, high = _colour_range(products, name)
    # Units with a power of a thousand in front keep the ticks short.
    power = 3 * math.floor(math.log10(high) / 3) if name == "sigma_sfr" else 0
    scale = 10.0**power
    image = axes.imshow(
        density.value / scale,
        norm=AsinhNorm(linear / scale, low / scale, high / scale),
        cmap=mpl.colormaps[COLOUR_MAP].with_extremes(under=BELOW),
        interpolation="nearest",
        zorder=1,
    )
    _draw_contour(axes, density.snr)
    add_landmarks(axes, products)
    height_inches = bar.get_position().height * figure.get_figheight()
    _finish_bar(figure.colorbar(image, cax=bar, extend="min"), height_inches)
    unit = SFR_UNIT if name == "sigma_sfr" else GAS_UNIT
    factor = f"10$^{{{power}}}$ " if power else ""
    axes.set_title(f"{title}, {SIGMA[name]} ({factor}{unit})", pad=3)


def _colour_range(products: Products, name: str) -> tuple[float, float, float]:
    """Lower end, end of the linear part, upper end; the same for every phase of the gas."""
    shown = products.densities["sigma_sfr" if name == "sigma_sfr" else "sigma_gas"]
    sigma = float(np.median(shown.error[products.covered]))
    high = float(np.max(shown.value[products.covered]))
    return LOWEST_SIGMA * sigma, LINEAR_SIGMA * sigma, max(high, 2.0 * LINEAR_SIGMA * sigma)


def _draw_contour(axes: Any, snr: Array) -> None:
    if np.nanmax(snr, initial=-math.inf) > CONTOUR_SNR > np.nanmin(snr, initial=math.inf):
        axes.contour(snr, levels=[CONTOUR_SNR], colors="black", linewidths=0.5)


def _finish_bar(bar: Colorbar, height_inches: float) -> None:
    """Give a colour bar round ticks on both sides of zero."""
    bar.set_ticks(_round_ticks(bar.norm, TICK_INCHES / height_inches))
    bar.ax.minorticks_off()
    bar.ax.yaxis.set_major_formatter(lambda value, _: f"{value:g}".replace("-", "−"))
    bar.ax.tick_params(length=2, pad=2)
    bar.outline.set_linewidth(0.6)


def _round_ticks(norm: Any, spacing: float) -> list[float]:
    """Zero, then powers of ten, then 3, 5 and 2 times those, as long as none are crowded."""
    first, last = math.floor(math.log10(norm.linear_width)) - 1, math.ceil(math.log10(norm.vmax))
    powers = [10.0**power for power in range(last, first - 1, -1)]
    wanted = [sign * lead * power for lead in (1, 3, 5, 2) for power in powers for sign in (1, -1)]
    chosen = {0.0: float(norm(0.0))}
    for value in wanted:
        place = float(norm(value))
        if 0.0 <= place <= 1.0 and min(abs(place - p) for p in chosen.values()) >= spacing:
            chosen[value] = place
    return sorted(chosen)
