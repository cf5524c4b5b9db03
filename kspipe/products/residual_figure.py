"""One relation held against the galaxy: where it fails on the sky, and at which radius."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, Final

import matplotlib as mpl
import numpy as np
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.cm import ScalarMappable
from matplotlib.colors import Normalize
from matplotlib.figure import Figure
from numpy.typing import NDArray

from kspipe.products.read import Products, Residual
from kspipe.products.running import running_quantiles
from kspipe.products.sky import add_hatching, add_landmarks, add_sky_axes, fitted_inches
from kspipe.products.style import (
    LINE_INCHES,
    R25_LINE,
    beside_name,
    draw_density,
    in_figure,
    new_figure,
    write_name,
)
from kspipe.products.words import headline_lines, map_lines, relation_title

__all__ = ["draw_residual"]

Array = NDArray[np.float64]
Mask = NDArray[np.bool_]

# Blue and red through white, told apart with any colour vision.
COLOUR_MAP: Final = "RdBu_r"
# The scale takes in this share of the significant pixels, within limits in dex.
SCALE_SHARE: Final = 0.98
SCALE_LIMITS_DEX: Final = (0.3, 2.0)
# How much of its colour a faint pixel keeps.
FAINT_OPACITY: Final = 0.3
CONTOUR_SIGMA: Final = 3.0
RADIUS_BINS: Final = 20
RUNNING: Final = "#0072B2"
NOISE: Final = "0.96"

# The layout in inches.
LEFT: Final = 0.78
PANEL: Final = 2.6
LEAST_HEIGHT: Final = 1.8
BOTTOM: Final = 1.38
TOP: Final = 0.5
PROFILE_LEFT: Final = 4.42
PROFILE_WIDTH: Final = 2.58


@dataclass(frozen=True)
class _Shown:
    """One relation's residuals, sorted by what can be shown of them; arrays are (ny, nx)."""

    residual: Residual
    has_log: Mask
    faint: Mask
    limit_dex: float

    def clipped(self, chosen: Mask) -> float:
        """Share of the chosen pixels beyond the colour scale."""
        ratio = self.residual.ratio_dex[chosen]
        return float(np.mean(np.abs(ratio) > self.limit_dex)) if ratio.size else 0.0


def draw_residual(products: Products, name: str) -> Figure:
    """Draw log10(observed / predicted) on the sky and against radius, with its headline numbers.

    Parameters
    ----------
    products : Products
    name : str
        The recipe's name of the relation.

    Returns
    -------
    Figure
    """
    shown = _sort(products, name)
    title = beside_name(products.galaxy_text, relation_title(products, name))
    shape = (products.covered.shape[0], products.covered.shape[1])
    width, height = fitted_inches(PANEL, 1.5 * PANEL, shape)
    tall = max(height, LEAST_HEIGHT)
    figure = new_figure(BOTTOM + tall + TOP + LINE_INCHES * title.count("\n"))
    axes = add_sky_axes(figure, in_figure(figure, LEFT, BOTTOM, width, height), products)
    bar = figure.add_axes(in_figure(figure, LEFT + width + 0.06, BOTTOM, 0.1, height))
    _draw_map(figure, axes, bar, products, shown)
    profile = figure.add_axes(in_figure(figure, PROFILE_LEFT, BOTTOM, PROFILE_WIDTH, tall))
    _draw_profile(profile, products, shown)
    write_name(figure, LEFT, products.galaxy_text, title)
    _write_below(figure, LEFT, _map_words(products, shown))
    _write_below(figure, PROFILE_LEFT - 0.4, _profile_words(products, name, shown))
    return figure


def _write_below(figure: Figure, left: float, lines: list[str]) -> None:
    x, y, _, _ = in_figure(figure, left, BOTTOM - 0.47, 0, 0)
    figure.text(x, y, "\n".join(lines), va="top", size=8, linespacing=1.3)


def _sort(products: Products, name: str) -> _Shown:
    residual = products.residuals[name]
    has_log = products.covered & np.isfinite(residual.ratio_dex)
    faint = has_log & products.is_faint
    good = has_log & ~faint
    judged = np.abs(residual.ratio_dex[good if good.any() else has_log])
    limit = float(np.quantile(judged, SCALE_SHARE)) if judged.size else 0.0
    low, high = SCALE_LIMITS_DEX
    # Rounded up to a tenth, so that the ends of the colour bar are round.
    return _Shown(residual, has_log, faint, min(max(math.ceil(10 * limit) / 10, low), high))


def _map_words(products: Products, shown: _Shown) -> list[str]:
    return map_lines(
        products,
        n_without_log=int(np.sum(products.covered & ~shown.has_log)),
        n_faint=int(shown.faint.sum()),
        clipped_good=shown.clipped(shown.has_log & ~shown.faint),
        clipped_faint=shown.clipped(shown.faint),
        contour_sigma=CONTOUR_SIGMA,
    )


def _profile_words(products: Products, name: str, shown: _Shown) -> list[str]:
    samples = np.abs(shown.residual.ratio_dex[shown.has_log & products.independent])
    beyond = int(np.sum(samples > _half_height(products, shown)))
    outside = (
        f"{beyond} of {samples.size} samples beyond the frame" if samples.size else "no samples"
    )
    return [*headline_lines(products, name), f"shaded: most pixels pale;  {outside}"]


def _draw_map(figure: Figure, axes: Any, bar: Any, products: Products, shown: _Shown) -> None:
    norm = Normalize(-shown.limit_dex, shown.limit_dex)
    colours = mpl.colormaps[COLOUR_MAP]
    pixels = colours(norm(np.where(shown.has_log, shown.residual.ratio_dex, 0.0)))
    # Faint pixels are mixed with white here, so that the PDF needs no transparency.
    opacity = np.where(shown.faint, FAINT_OPACITY, 1.0)[..., None]
    pixels[..., :3] = 1.0 - opacity * (1.0 - pixels[..., :3])
    pixels[..., 3] = shown.has_log
    axes.imshow(pixels, interpolation="nearest", zorder=1)
    add_hatching(axes, products.covered & ~shown.has_log)
    _draw_significance(axes, products, shown)
    add_landmarks(axes, products)
    axes.set_title(r"log$_{10}$(observed / predicted), dex", pad=3)
    extend = "both" if shown.clipped(shown.has_log) > 0 else "neither"
    scale = figure.colorbar(ScalarMappable(norm, colours), cax=bar, extend=extend)
    scale.outline.set_linewidth(0.6)
    bar.tick_params(length=2, pad=2)


def _draw_significance(axes: Any, products: Products, shown: _Shown) -> None:
    """Lines around significant excess (solid) and deficit (dashed): the sign in grey, too."""
    significance = np.where(products.covered, shown.residual.normalised, np.nan)
    if not np.isfinite(significance).any():
        return
    for level, line in ((CONTOUR_SIGMA, "-"), (-CONTOUR_SIGMA, (0, (2, 1)))):
        if np.nanmin(significance) < level < np.nanmax(significance):
            axes.contour(
                significance, levels=[level], colors="black", linewidths=0.5, linestyles=[line]
            )


def _draw_profile(axes: Axes, products: Products, shown: _Shown) -> None:
    """Residual against radius."""
    radius, ratio = products.radius_kpc, shown.residual.ratio_dex
    half, snr = _half_height(products, shown), f"{products.recipe.comparison.low_snr:g}"
    axes.axhline(0.0, color="black", lw=0.7, zorder=4)
    axes.set(xlim=(0.0, float(radius[products.covered].max())), ylim=(-half, half))
    draw_density(axes, radius[shown.has_log], ratio[shown.has_log], "linear")
    samples = shown.has_log & products.independent
    for chosen, fill, rim, label in (
        (samples & ~shown.faint, "black", "black", "independent"),
        (samples & shown.faint, "white", "0.4", f"S/N < {snr}"),
    ):
        marker: dict[str, Any] = {"ms": 2.4, "mfc": fill, "mec": rim, "mew": 0.5}
        axes.plot(radius[chosen], ratio[chosen], "o", **marker, label=label, zorder=3)
    curve = _draw_running(axes, products, shown)
    if products.recipe.galaxy.r25 is not None:
        axes.axvline(products.r25_kpc, color="black", lw=0.7, ls=R25_LINE, zorder=2)
    axes.set_xlabel("Radius in the disc (kpc)", labelpad=2)
    axes.set_ylabel(r"log$_{10}$(observed / predicted)", labelpad=1)
    handles, labels = axes.get_legend_handles_labels()
    axes.legend(
        [curve, *handles],
        ["median, 16–84 %", *labels],
        loc="lower right",
        bbox_to_anchor=(1.02, 0.985),
        ncols=3,
        columnspacing=1.0,
        handlelength=1.2,
        handletextpad=0.4,
        borderaxespad=0,
    )


def _half_height(products: Products, shown: _Shown) -> float:
    """Both ends of the axis: the significant samples lie inside."""
    good = shown.has_log & products.independent & ~shown.faint
    largest = float(np.max(np.abs(shown.residual.ratio_dex[good]), initial=0.0))
    return max(1.0, 1.15 * largest, 1.15 * shown.limit_dex)


def _draw_running(axes: Axes, products: Products, shown: _Shown) -> tuple[Artist, Artist]:
    """Running median and 68 % band of all pixels with a prediction, where they say something."""
    ratio, radius = shown.residual.ratio_dex, products.radius_kpc
    predicted = products.covered & (shown.residual.predicted > 0)
    edges = np.linspace(0.0, float(radius[products.covered].max()), RADIUS_BINS + 1)
    running = running_quantiles(
        radius[predicted],
        # Observed values that are not positive lie below every logarithm, and count there.
        np.where(np.isfinite(ratio), ratio, -np.inf)[predicted],
        edges,
        [0.16, 0.5, 0.84],
        least=products.least_pixels,
    )
    is_noise = _noise_bins(axes, products, edges)
    place = np.clip(np.searchsorted(edges, running.x, side="right") - 1, 0, RADIUS_BINS - 1)
    low, middle, high = np.where(is_noise[place], np.nan, np.clip(running.y, -10.0, 10.0))
    band = axes.fill_between(running.x, low, high, color=RUNNING, alpha=0.25, lw=0, zorder=2)
    (line,) = axes.plot(running.x, middle, color=RUNNING, lw=1.6, zorder=5)
    return band, line


def _noise_bins(axes: Axes, products: Products, edges: Array) -> Mask:
    """Shade radii at which most pixels are faint: logarithms of noise have no useful median."""
    radius = products.radius_kpc
    everything, _ = np.histogram(radius[products.covered], edges)
    faint, _ = np.histogram(radius[products.covered & products.is_faint], edges)
    is_noise = faint > 0.5 * everything
    for start, end, noise in zip(edges[:-1], edges[1:], is_noise, strict=True):
        if noise:
            axes.axvspan(start, end, color=NOISE, lw=0, zorder=0.5)
    return np.asarray(is_noise)
