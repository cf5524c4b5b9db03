"""One look for all figures: sizes, type, colours, units, and files that repeat byte for byte."""

from __future__ import annotations

import math
import textwrap
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any, Final, Literal

import numpy as np
from matplotlib import patheffects, style
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from numpy.typing import NDArray

__all__ = [
    "GAS_UNIT",
    "HALO",
    "LINE_INCHES",
    "R25_LINE",
    "SFR_UNIT",
    "SIGMA",
    "WIDE_INCHES",
    "beside_name",
    "draw_density",
    "figure_style",
    "in_figure",
    "new_figure",
    "nice_below",
    "relation_look",
    "save_figure",
    "write_name",
]

Array = NDArray[np.float64]

# Width of a page with two columns in the journals of the field.
WIDE_INCHES: Final = 7.1
# From one line of small letters to the next.
LINE_INCHES: Final = 0.15
PNG_DPI: Final = 200
# Dense layers inside a PDF are pixels at this density.
RASTER_DPI: Final = 300

GAS_UNIT: Final = r"M$_\odot$ pc$^{-2}$"
SFR_UNIT: Final = r"M$_\odot$ yr$^{-1}$ kpc$^{-2}$"
SIGMA: Final = {
    "sigma_atom": r"$\Sigma_\mathrm{atom}$",
    "sigma_mol": r"$\Sigma_\mathrm{mol}$",
    "sigma_gas": r"$\Sigma_\mathrm{gas}$",
    "sigma_sfr": r"$\Sigma_\mathrm{SFR}$",
}

# Okabe & Ito 2008: told apart with any colour vision. Line styles tell them apart in grey.
_COLOURS: Final = ("#D55E00", "#0072B2", "#009E73", "#CC79A7")
_LINES: Final = ("-", "--", "-.", ":")

# A white rim keeps letters readable across lines and data.
HALO: Final = [patheffects.withStroke(linewidth=2.0, foreground="white")]

# The optical size of the disc is dashed wherever it is drawn.
R25_LINE: Final = (0, (5, 3))

_STYLE: Final[dict[str, Any]] = {
    # The second has the letters that the first lacks.
    "font.family": ["STIXGeneral", "DejaVu Sans"],
    "mathtext.fontset": "stix",
    "font.size": 9.0,
    "axes.titlesize": 9.0,
    "axes.labelsize": 9.0,
    "xtick.labelsize": 8.0,
    "ytick.labelsize": 8.0,
    "legend.fontsize": 8.0,
    "axes.linewidth": 0.6,
    "lines.linewidth": 1.0,
    "hatch.linewidth": 0.4,
    "xtick.direction": "in",
    "ytick.direction": "in",
    "xtick.top": True,
    "ytick.right": True,
    "legend.frameon": False,
    "pdf.fonttype": 42,
    "savefig.dpi": RASTER_DPI,
}


@contextmanager
def figure_style() -> Iterator[None]:
    """Draw with the project's settings, whatever the user's own are; they come back after."""
    with style.context(["default", _STYLE]):
        yield


def new_figure(height_inches: float, width_inches: float = WIDE_INCHES) -> Figure:
    """Return an empty figure that belongs to no window system."""
    figure = Figure(figsize=(width_inches, height_inches))
    FigureCanvasAgg(figure)
    return figure


def in_figure(
    figure: Figure, left: float, bottom: float, width: float, height: float
) -> tuple[float, float, float, float]:
    """Turn a box in inches into fractions of the figure."""
    across, up = figure.get_size_inches()
    return left / across, bottom / up, width / across, height / up


def save_figure(figure: Figure, path: Path) -> None:
    """Write `path` with the suffixes pdf and png, without dates or versions.

    Parameters
    ----------
    figure : Figure
    path : Path
        Without suffix.
    """
    figure.savefig(
        path.with_suffix(".pdf"), metadata={"CreationDate": None, "Creator": None, "Producer": None}
    )
    figure.savefig(path.with_suffix(".png"), dpi=PNG_DPI, metadata={"Software": None})


def relation_look(index: int) -> dict[str, Any]:
    """Colour and line style of the relation with this place in the recipe."""
    # The shift after each round keeps pairs of colour and line apart up to the sixteenth.
    line = index + index // len(_COLOURS)
    return {"color": _COLOURS[index % len(_COLOURS)], "linestyle": _LINES[line % len(_LINES)]}


def beside_name(name: str, text: str) -> str:
    """Break a text into lines that fit beside the galaxy's name."""
    # A line of small letters has about 108; one of the name's bold letters takes as much as 1.6.
    return "\n".join(textwrap.wrap(text, max(40, round(108 - 1.6 * len(name)))))


def write_name(figure: Figure, left_inches: float, name: str, beside: str) -> None:
    """Write the galaxy's name at the top left and what belongs beside it at the top right."""
    x, _, _, below = in_figure(figure, left_inches, 0, 0, 0.06)
    figure.text(x, 1 - below, name, va="top", size=11, weight="bold")
    figure.text(0.985, 1 - below, beside, va="top", ha="right", size=8.5)


def draw_density(axes: Axes, x: Array, y: Array, scale: Literal["linear", "log"]) -> None:
    """Draw many points as a light density inside the limits of two axes of the same scale."""
    (x0, x1), (y0, y1) = axes.get_xlim(), axes.get_ylim()
    corners = np.array([x0, x1, y0, y1])
    left, right, low, high = np.log10(corners) if scale == "log" else corners
    if x.size:
        axes.hexbin(
            x,
            y,
            gridsize=(78, 45),
            extent=(left, right, low, high),
            xscale=scale,
            yscale=scale,
            bins="log",
            mincnt=1,
            cmap=LinearSegmentedColormap.from_list("density", ["0.92", "0.66"]),
            linewidths=0.1,
            rasterized=True,
            zorder=1.5,
        )
    axes.set(xlim=(x0, x1), ylim=(y0, y1))


def nice_below(value: float) -> float:
    """Find the largest of 1, 2, 5, 10, ... that does not exceed a positive value."""
    decade = 10.0 ** math.floor(math.log10(value))
    return max(step for step in (1.0, 2.0, 5.0) if step * decade <= value * (1 + 1e-9)) * decade
