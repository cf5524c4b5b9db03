"""Star formation against gas: the galaxy's pixels under the tracks of its relations."""

from __future__ import annotations

import math
import textwrap
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from kspipe.conversions import z_prime
from kspipe.core.constants import OH_SOLAR
from kspipe.products.read import Density, Products
from kspipe.products.running import running_quantiles
from kspipe.products.style import (
    GAS_UNIT,
    HALO,
    SFR_UNIT,
    SIGMA,
    angle_on_page,
    new_figure,
    relation_look,
)
from kspipe.products.words import parameter_text
from kspipe.relations import LAWS, track

__all__ = ["draw_star_formation_law"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

TRACK_Z_PRIME: Final = (0.1, 0.3, 1.0, 3.0)
DEPLETION_GYR: Final = (0.1, 1.0, 10.0, 100.0)
BIN_DEX: Final = 0.2
# The frame begins at this fraction of the random error: what lies below is noise.
FRAME_LOW: Final = 0.6
FRAME_HIGH: Final = 2.5
FAINT: Final = "0.78"


def draw_star_formation_law(products: Products) -> Figure:
    """Draw Sigma_SFR against Sigma_gas with the tracks of every relation.

    Parameters
    ----------
    products : Products

    Returns
    -------
    Figure
        Pixels of non-positive value have no place on logarithmic axes: they are counted in words,
        and those without star formation enter the running median.
    """
    figure = new_figure(4.6)
    axes = figure.add_axes((0.085, 0.105, 0.56, 0.875))
    _set_frame(axes, products)
    _draw_depletion_times(axes)
    _draw_pixels(axes, products)
    for index, name in enumerate(products.recipe.relations):
        _draw_tracks(axes, products, name, index)
    _draw_samples(axes, products)
    _draw_median(axes, products)
    figure.legend(
        handles=_legend(products),
        loc="upper left",
        bbox_to_anchor=(0.66, 0.985),
        alignment="left",
        title=products.recipe.galaxy.name,
        title_fontproperties={"size": 11, "weight": "bold"},
        handlelength=2.4,
        labelspacing=0.6,
    )
    figure.text(0.672, 0.105, _notes(products), va="bottom", fontsize=8, linespacing=1.35)
    return figure


def _pair(products: Products) -> tuple[Density, Density]:
    return products.densities["sigma_gas"], products.densities["sigma_sfr"]


def _set_frame(axes: Axes, products: Products) -> None:
    gas, sfr = _pair(products)
    axes.set_xscale("log")
    axes.set_yscale("log")
    axes.set_xlim(_limits(gas, products.covered))
    axes.set_ylim(_limits(sfr, products.covered))
    axes.set_xlabel(f"{SIGMA['sigma_gas']} ({GAS_UNIT})", labelpad=2)
    axes.set_ylabel(f"{SIGMA['sigma_sfr']} ({SFR_UNIT})", labelpad=2)


def _limits(density: Density, covered: Mask) -> tuple[float, float]:
    """From a little below the noise to a little above the brightest pixel."""
    low = FRAME_LOW * float(np.median(density.error[covered]))
    high = FRAME_HIGH * float(np.max(density.value[covered]))
    return low, max(high, 100.0 * low)


def _draw_depletion_times(axes: Axes) -> None:
    """Thin lines along which the gas lasts as long at the present rate."""
    (x0, x1), (y0, y1) = axes.get_xlim(), axes.get_ylim()
    for gyr in DEPLETION_GYR:
        # 1 Msun/pc2 per Gyr is 1e-3 Msun/yr/kpc2.
        rate = 1e-3 / gyr
        axes.plot([x0, x1], [rate * x0, rate * x1], color="0.6", lw=0.5, ls=(0, (6, 3)), zorder=1)
        # Inside the right and the upper edge, with room for the letters.
        x = min(_inside(x0, x1, 0.96), _inside(y0, y1, 0.95) / rate)
        if rate * x < y0 or x < x0:
            continue
        axes.annotate(
            f"{gyr:g} Gyr",
            (x, rate * x),
            xytext=(-1, 1.5),
            textcoords="offset points",
            rotation=angle_on_page(axes, (x / 2, rate * x / 2), (x, rate * x)),
            rotation_mode="anchor",
            ha="right",
            va="bottom",
            fontsize=7.5,
            color="0.35",
            zorder=1.5,
        )


def _inside(low: float, high: float, share: float) -> float:
    """Position on a logarithmic axis by its share of the length."""
    return low * math.pow(high / low, share)


def _draw_pixels(axes: Axes, products: Products) -> None:
    """All covered positive pixels as a light density."""
    gas, sfr = _pair(products)
    (x0, x1), (y0, y1) = axes.get_xlim(), axes.get_ylim()
    shown = products.covered & (gas.value > 0) & (sfr.value > 0)
    if not shown.any():
        return
    axes.hexbin(
        gas.value[shown],
        sfr.value[shown],
        gridsize=(78, 45),
        extent=tuple(math.log10(edge) for edge in (x0, x1, y0, y1)),  # type: ignore[arg-type]
        xscale="log",
        yscale="log",
        bins="log",
        mincnt=1,
        vmax=80,
        cmap="Greys",
        alpha=0.55,
        linewidths=0.1,
        rasterized=True,
        zorder=2,
    )
    axes.set(xlim=(x0, x1), ylim=(y0, y1))


def _significant_z_prime(products: Products) -> Array:
    """Z' where gas and star formation are both significant; everywhere if that is nowhere."""
    good = products.covered & ~products.is_faint & np.isfinite(products.oh)
    if not good.any():
        good = products.covered & np.isfinite(products.oh)
    return z_prime(products.oh[good])


def _draw_tracks(axes: Axes, products: Products, name: str, index: int) -> None:
    """A band over the galaxy's metallicities, their median, and labelled round metallicities."""
    look = relation_look(index)
    x = np.geomspace(*axes.get_xlim(), 300)

    def curve(z: float) -> Array:
        table = products.recipe.relations[name]
        return track(table.law, x, OH_SOLAR + math.log10(z), table.parameters)

    z = _significant_z_prime(products)
    low, middle, high = (float(value) for value in np.quantile(z, [0.0, 0.5, 1.0]))
    axes.fill_between(x, curve(low), curve(high), color=look["color"], alpha=0.22, lw=0, zorder=3)
    axes.plot(x, curve(middle), **look, lw=1.8, zorder=5)
    for round_z in TRACK_Z_PRIME:
        y = curve(round_z)
        axes.plot(x, y, **look, lw=0.7, zorder=4)
        _label_curve(axes, x, y, f"Z′ = {round_z:g}", look["color"], index)


def _label_curve(axes: Axes, x: Array, y: Array, text: str, colour: str, index: int) -> None:
    """Write along a curve, low in the frame where the metallicities lie apart."""
    y0, y1 = axes.get_ylim()
    height = _inside(y0, y1, 0.05 + 0.09 * index)
    above = np.flatnonzero(y > height)
    if not above.size or above[0] == 0 or above[0] + 6 >= x.size:
        return
    i = int(above[0])
    axes.annotate(
        text,
        (x[i], y[i]),
        xytext=(0, 1.5),
        textcoords="offset points",
        rotation=angle_on_page(axes, (x[i], y[i]), (x[i + 6], y[i + 6])),
        rotation_mode="anchor",
        fontsize=7.5,
        color=colour,
        path_effects=HALO,
        zorder=8,
    )


def _draw_samples(axes: Axes, products: Products) -> None:
    """Independent samples with both errors; a bar that reaches zero leaves the frame."""
    gas, sfr = _pair(products)
    shown = products.covered & products.independent & (gas.value > 0) & (sfr.value > 0)
    floor = (axes.get_xlim()[0] / 100, axes.get_ylim()[0] / 100)
    # Faint samples, with bars across half the frame, stay below the tracks.
    for chosen, shade, width, layer in (
        (shown & products.is_faint, FAINT, 0.35, 2.5),
        (shown & ~products.is_faint, "black", 0.6, 6.0),
    ):
        bars = [
            np.array([np.minimum(d.error[chosen], d.value[chosen] - low), d.error[chosen]])
            for d, low in zip((gas, sfr), floor, strict=True)
        ]
        axes.errorbar(
            gas.value[chosen],
            sfr.value[chosen],
            xerr=np.maximum(bars[0], 0.0),
            yerr=np.maximum(bars[1], 0.0),
            fmt="o",
            ms=2.0,
            mew=0,
            color=shade,
            ecolor=shade,
            elinewidth=width,
            zorder=layer,
        )


def _draw_median(axes: Axes, products: Products) -> None:
    """Running median of the observed star formation, its non-positive values counted."""
    gas, sfr = _pair(products)
    used = products.covered & (gas.value > 0)
    low, high = np.log10(axes.get_xlim())
    running = running_quantiles(
        np.log10(gas.value[used]),
        sfr.value[used],
        np.arange(low, high + BIN_DEX, BIN_DEX),
        [0.5],
        least=products.least_pixels,
    )
    above = running.y[0] > 0
    x, y = 10 ** running.x[above], running.y[0][above]
    axes.plot(x, y, **_MEDIAN, zorder=7)
    # Bins chosen on noisy gas mix with their neighbours: told apart by a grey filling.
    noisy = x < products.recipe.comparison.low_snr * np.median(gas.error[products.covered])
    axes.plot(x[noisy], y[noisy], **{**_MEDIAN, "lw": 0, "mfc": FAINT}, zorder=7)


_MEDIAN: Final[dict[str, Any]] = {
    "color": "black",
    "lw": 1.0,
    "marker": "s",
    "ms": 4.5,
    "mfc": "white",
    "mew": 1.0,
}


def _legend(products: Products) -> list[Any]:
    snr = f"{products.recipe.comparison.low_snr:g}"
    handles: list[Any] = [
        Patch(color="0.75", label="all covered pixels"),
        Line2D([], [], marker="o", ms=3, color="black", lw=0.6, label="independent samples"),
        Line2D([], [], marker="o", ms=3, color=FAINT, lw=0.6, label=f"the same, S/N < {snr}"),
        Line2D(
            [],
            [],
            **_MEDIAN,
            label=f"running median of all pixels,\nnon-positive {SIGMA['sigma_sfr']} included\n"
            f"(grey: {SIGMA['sigma_gas']} below S/N = {snr})",
        ),
        Line2D([], [], color="0.6", lw=0.5, ls=(0, (6, 3)), label="constant gas depletion time"),
    ]
    for index, (name, table) in enumerate(products.recipe.relations.items()):
        lines = textwrap.wrap(f"{name}: {LAWS.get(table.law).label}", 36)
        lines += textwrap.wrap(parameter_text(table.parameters), 36)
        handles.append(Line2D([], [], **relation_look(index), lw=1.8, label="\n".join(lines)))
    return handles


def _notes(products: Products) -> str:
    flags, n = products.summary["flags"], products.summary["n_pixels"]
    gas, sfr = SIGMA["sigma_gas"], SIGMA["sigma_sfr"]
    snr = f"{products.recipe.comparison.low_snr:g}"
    lines = []
    if products.recipe.relations:
        z = _significant_z_prime(products)
        lines += [
            f"Band: Z′ = {z.min():.2f} to {z.max():.2f}, the galaxy’s own",
            f"where S/N ≥ {snr}; thick line: its median, {np.median(z):.2f}",
            f"(Z′ = 1 is 12 + log(O/H) = {OH_SOLAR:g}).",
        ]
    lines += [
        f"{flags['nonpositive_sfr']} of {n} pixels have {sfr} ≤ 0,",
        f"{flags['nonpositive_gas']} have {gas} ≤ 0: not drawn.",
        f"{_outside(products)} positive ones lie outside the frame.",
        f"{products.size_text}",
        f"Beam {products.beam_text}",
    ]
    return "\n".join(lines)


def _outside(products: Products) -> int:
    """Positive pixels beyond the limits of the axes."""
    positive = products.covered.copy()
    inside = products.covered.copy()
    for density in _pair(products):
        low, high = _limits(density, products.covered)
        positive &= density.value > 0
        inside &= (density.value >= low) & (density.value <= high)
    return int(np.sum(positive & ~inside))
