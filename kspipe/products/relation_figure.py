"""Star formation against gas: the galaxy's pixels, and what its relations predict."""

from __future__ import annotations

import textwrap
from typing import Any, Final

import numpy as np
from matplotlib.axes import Axes
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch
from numpy.typing import NDArray

from kspipe.core.constants import OH_SOLAR
from kspipe.products.read import Density, Products
from kspipe.products.relation_curves import (
    DEPLETION_LINE,
    draw_depletion_times,
    draw_tracks,
    galaxy_z_prime,
    other_inputs,
)
from kspipe.products.running import running_quantiles
from kspipe.products.style import (
    GAS_UNIT,
    SFR_UNIT,
    SIGMA,
    draw_density,
    in_figure,
    new_figure,
    relation_look,
)
from kspipe.products.words import parameter_text
from kspipe.relations import LAW_INPUTS, LAWS

__all__ = ["draw_star_formation_law"]

Mask = NDArray[np.bool_]

BIN_DEX: Final = 0.2
# The frame begins at this fraction of the random error: what lies below is noise.
FRAME_LOW: Final = 0.6
FRAME_HIGH: Final = 2.5
FAINT: Final = "0.72"
MEDIAN: Final[dict[str, Any]] = {
    "color": "black",
    "lw": 1.0,
    "marker": "s",
    "ms": 4.5,
    "mfc": "white",
    "mew": 1.0,
}

# The layout in inches; the key stands beside the frame, so that it covers no data.
LEFT: Final = 0.6
BOTTOM: Final = 0.48
WIDTH: Final = 4.0
HEIGHT: Final = 4.02
KEY_LEFT: Final = 4.72
KEY_LINE: Final = 0.163
KEY_GAP: Final = 0.08
KEY_CHARACTERS: Final = 36


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
    key, notes = _key(products), _notes(products)
    height = max(HEIGHT, _key_inches(key, notes))
    figure = new_figure(BOTTOM + height + 0.1)
    axes = figure.add_axes(in_figure(figure, LEFT, BOTTOM, WIDTH, height))
    _set_frame(axes, products)
    draw_depletion_times(axes)
    gas, sfr = _pair(products)
    positive = products.covered & (gas.value > 0) & (sfr.value > 0)
    draw_density(axes, gas.value[positive], sfr.value[positive], "log")
    for name in products.recipe.relations:
        draw_tracks(axes, products, name)
    # Faint samples, with bars across half the frame, stay below the tracks.
    samples = positive & products.independent
    _draw_samples(axes, products, samples & products.is_faint, FAINT, width=0.3, layer=2.5)
    _draw_samples(axes, products, samples & ~products.is_faint, "black", width=0.6, layer=6.0)
    _draw_median(axes, products)
    _write_key(figure, products, key, notes)
    return figure


def _pair(products: Products) -> tuple[Density, Density]:
    return products.densities["sigma_gas"], products.densities["sigma_sfr"]


def _set_frame(axes: Axes, products: Products) -> None:
    gas, sfr = _pair(products)
    axes.set(xscale="log", yscale="log")
    axes.set(xlim=_limits(gas, products.covered), ylim=_limits(sfr, products.covered))
    axes.set_xlabel(f"{SIGMA['sigma_gas']} ({GAS_UNIT})", labelpad=2)
    axes.set_ylabel(f"{SIGMA['sigma_sfr']} ({SFR_UNIT})", labelpad=2)


def _limits(density: Density, covered: Mask) -> tuple[float, float]:
    """From a little below the noise to a little above the brightest pixel."""
    low = FRAME_LOW * float(np.median(density.error[covered]))
    high = FRAME_HIGH * float(np.max(density.value[covered]))
    return low, max(high, 100.0 * low)


def _draw_samples(
    axes: Axes, products: Products, chosen: Mask, shade: str, *, width: float, layer: float
) -> None:
    """Draw samples with the errors of both axes; a bar that reaches zero leaves the frame."""
    bars = []
    for density, (start, _) in zip(
        _pair(products), (axes.get_xlim(), axes.get_ylim()), strict=True
    ):
        value, error = density.value[chosen], density.error[chosen]
        # On a logarithmic axis a bar cannot end at zero: it ends out of sight.
        out_of_sight = np.maximum(value - 0.01 * start, 0.0)
        bars.append(np.array([np.minimum(error, out_of_sight), error]))
    gas, sfr = _pair(products)
    axes.errorbar(
        gas.value[chosen],
        sfr.value[chosen],
        xerr=bars[0],
        yerr=bars[1],
        fmt="o",
        ms=2.0,
        mew=0,
        color=shade,
        elinewidth=width,
        zorder=layer,
    )


def _draw_median(axes: Axes, products: Products) -> None:
    """Draw the running median of the observed star formation, non-positive values counted."""
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
    axes.plot(x, y, **MEDIAN, zorder=7)
    # Bins chosen on noisy gas mix with their neighbours: told apart by a grey filling.
    noisy = x < products.recipe.comparison.low_snr * np.median(gas.error[products.covered])
    axes.plot(x[noisy], y[noisy], **{**MEDIAN, "lw": 0, "mfc": FAINT}, zorder=7)


def _key(products: Products) -> list[Any]:
    """What each mark is."""
    snr = f"{products.recipe.comparison.low_snr:g}"
    gas, sfr = SIGMA["sigma_gas"], SIGMA["sigma_sfr"]
    words = ("running median of all pixels,", f"non-positive {sfr} included")
    median = "\n".join([*words, f"(grey: {gas} below S/N = {snr})"])
    key: list[Any] = [
        Patch(color="0.82", label="all covered pixels"),
        Line2D([], [], marker="o", ms=3, color="black", lw=0.6, label="independent samples"),
        Line2D([], [], marker="o", ms=3, color=FAINT, lw=0.6, label=f"the same, S/N < {snr}"),
        Line2D([], [], **MEDIAN, label=median),
        Line2D([], [], color="0.6", lw=0.5, ls=DEPLETION_LINE, label="constant gas depletion time"),
    ]
    for index, (name, table) in enumerate(products.recipe.relations.items()):
        lines = [
            *textwrap.wrap(f"{name}: {LAWS.get(table.law).label}", KEY_CHARACTERS),
            *textwrap.wrap(parameter_text(table.parameters), KEY_CHARACTERS),
        ]
        key.append(Line2D([], [], **relation_look(index), lw=1.8, label="\n".join(lines)))
    return key


def _notes(products: Products) -> list[str]:
    """What the figure cannot show, in words."""
    flags, n = products.summary["flags"], products.summary["n_pixels"]
    lines = []
    if products.recipe.relations:
        z, snr = galaxy_z_prime(products), f"{products.recipe.comparison.low_snr:g}"
        lines += [
            f"Band: Z′ = {z.min():.3g} to {z.max():.3g}, the galaxy’s own",
            f"where S/N ≥ {snr}; thick line: its median, {np.median(z):.3g}",
            f"(Z′ = 1 is 12 + log(O/H) = {OH_SOLAR:g}).",
        ]
    lines += _input_notes(products)
    return [
        *lines,
        f"{flags['nonpositive_sfr']} of {n} pixels have {SIGMA['sigma_sfr']} ≤ 0,",
        f"{flags['nonpositive_gas']} have {SIGMA['sigma_gas']} ≤ 0: not drawn.",
        f"{_outside(products)} positive ones lie outside the frame.",
        products.size_text,
        f"Beam {products.beam_text}",
    ]


def _input_notes(products: Products) -> list[str]:
    """At what the curves of relations with further inputs are drawn."""
    lines = []
    for name, table in products.recipe.relations.items():
        others = other_inputs(products, name)
        text = ", ".join(f"{LAW_INPUTS[n].symbol} = {v:.3g}" for n, v in others.items())
        if text:
            lines += textwrap.wrap(f"{name}: medians {text}", KEY_CHARACTERS + 6)
        if LAWS.get(table.law).gas == "sigma_mol":
            lines += textwrap.wrap(f"{name}: as if all gas were molecular", KEY_CHARACTERS + 6)
    return lines


def _outside(products: Products) -> int:
    """Count positive pixels beyond the limits of the axes."""
    positive, inside = products.covered.copy(), products.covered.copy()
    for density in _pair(products):
        low, high = _limits(density, products.covered)
        positive &= density.value > 0
        inside &= (density.value >= low) & (density.value <= high)
    return int(np.sum(positive & ~inside))


def _key_inches(key: list[Any], notes: list[str]) -> float:
    """Height that the words beside the frame need."""
    lines = sum(str(handle.get_label()).count("\n") + 1 for handle in key) + len(notes) + 2
    return KEY_LINE * lines + KEY_GAP * len(key)


def _write_key(figure: Figure, products: Products, key: list[Any], notes: list[str]) -> None:
    x, y, _, top = in_figure(figure, KEY_LEFT, BOTTOM, 0, 0.04)
    figure.legend(
        handles=key,
        loc="upper left",
        bbox_to_anchor=(x, 1 - top),
        borderaxespad=0,
        alignment="left",
        title=products.galaxy_text,
        title_fontproperties={"size": 11, "weight": "bold"},
        handlelength=2.4,
        labelspacing=0.6,
    )
    figure.text(x + 0.006, y, "\n".join(notes), va="bottom", size=8, linespacing=1.35)
