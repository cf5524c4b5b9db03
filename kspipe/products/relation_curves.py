"""Curves under the galaxy's pixels: relations at several metallicities, and depletion times."""

from __future__ import annotations

import math
from typing import Final

import numpy as np
from matplotlib.axes import Axes
from numpy.typing import NDArray

from kspipe.conversions import z_prime
from kspipe.core.constants import OH_SOLAR
from kspipe.products.read import Products
from kspipe.products.style import HALO, relation_look
from kspipe.products.tracks import OUTSIDE_LINE, in_and_out
from kspipe.relations import LAWS, Prediction

__all__ = ["draw_depletion_times", "draw_tracks", "galaxy_z_prime", "other_inputs"]

Array = NDArray[np.float64]

# Round metallicities that a single relation is drawn at besides the galaxy's own.
ROUND_Z_PRIME: Final = (0.1, 0.3, 1.0, 3.0)
DEPLETION_GYR: Final = (0.1, 1.0, 10.0, 100.0)
DEPLETION_LINE: Final = (0, (6, 3))
# Curves are labelled this high in the frame, and higher by a step for each further relation.
LABEL_HEIGHT: Final = 0.05
LABEL_STEP: Final = 0.09


def draw_depletion_times(axes: Axes) -> None:
    """Draw thin lines along which the gas lasts equally long at the present rate."""
    (x0, x1), (y0, y1) = axes.get_xlim(), axes.get_ylim()
    for gyr in DEPLETION_GYR:
        # 1 Msun/pc2 per Gyr is 1e-3 Msun/yr/kpc2.
        rate = 1e-3 / gyr
        line = {"color": "0.6", "lw": 0.5, "ls": DEPLETION_LINE}
        axes.plot([x0, x1], [rate * x0, rate * x1], **line, zorder=1)  # type: ignore[arg-type]
        # Inside the right and the upper edge, with room for the letters.
        x = min(_inside(x0, x1, 0.96), _inside(y0, y1, 0.95) / rate)
        if x > x0 and rate * x > y0:
            _write_along(
                axes,
                f"{gyr:g} Gyr",
                (x, rate * x),
                (x / 2, rate * x / 2),
                colour="0.35",
                at_end=True,
            )


def galaxy_z_prime(products: Products) -> Array:
    """Z' where gas and star formation are both significant; everywhere if that is nowhere."""
    known = np.isfinite(products.oh)
    covered = known & products.covered
    good = covered & ~products.is_faint
    return z_prime(products.oh[next(where for where in (good, covered, known) if where.any())])


def other_inputs(products: Products, name: str) -> dict[str, float]:
    """Medians of what a relation takes besides gas and metallicity, where S/N is sufficient."""
    inputs = products.summary["relations"][name].get("inputs", {})
    law = LAWS.get(products.recipe.relations[name].law)
    return {
        need: float("nan") if entry["median"] is None else float(entry["median"])
        for need, entry in inputs.items()
        if need not in ("oh", law.gas)
    }


def draw_tracks(axes: Axes, products: Products, name: str) -> None:
    """Draw a band over the galaxy's own metallicities, their median, and labelled thin lines.

    A single relation has its thin lines at round metallicities; of several only the edges of the
    bands are drawn, or the frame would be full. Further inputs are at their medians over the
    galaxy, and a relation of molecular gas is drawn as if all gas were molecular. Short dashes:
    outside the range of the relation.

    Parameters
    ----------
    axes : Axes
        Logarithmic, limits set.
    products : Products
    name : str
        The recipe's name of the relation.
    """
    names = list(products.recipe.relations)
    index, table = names.index(name), products.recipe.relations[name]
    look = relation_look(index)
    x = np.geomspace(*axes.get_xlim(), 300)

    law = LAWS.get(table.law)
    others = other_inputs(products, name)

    def predict(z: float) -> Prediction:
        fixed = {**others, "oh": OH_SOLAR + math.log10(z), law.gas: x}
        inputs = {key: np.asarray(value) for key, value in fixed.items()}
        return law.predict(inputs, table.parameters, slopes=False)

    def curve(z: float) -> Array:
        return predict(z).sigma_sfr

    own = np.quantile(galaxy_z_prime(products), [0.0, 0.5, 1.0])
    low, middle, high = (float(z) for z in own)
    axes.fill_between(x, curve(low), curve(high), color=look["color"], alpha=0.22, lw=0, zorder=3)
    at_median = predict(middle)
    inside, outside = in_and_out(at_median.sigma_sfr, at_median.outside_range)
    axes.plot(x, inside, **look, lw=1.8, zorder=5)
    axes.plot(x, outside, color=look["color"], ls=OUTSIDE_LINE, lw=1.0, zorder=5)
    if "oh" not in law.needs:
        return
    height = LABEL_HEIGHT + LABEL_STEP * index
    for z in ROUND_Z_PRIME if len(names) == 1 else (low, high):
        prediction = predict(z)
        y = prediction.sigma_sfr
        inside, outside = in_and_out(y, prediction.outside_range)
        axes.plot(x, inside, **look, lw=0.7, zorder=4)
        axes.plot(x, outside, color=look["color"], ls=OUTSIDE_LINE, lw=0.7, zorder=4)
        _label_curve(axes, x, y, f"Z′ = {z:.3g}", look["color"], height)


def _label_curve(axes: Axes, x: Array, y: Array, text: str, colour: str, height: float) -> None:
    """Write along a curve, low in the frame where the metallicities lie apart."""
    above = np.flatnonzero(y > _inside(*axes.get_ylim(), height))
    ahead = 6
    if above.size and 0 < above[0] < x.size - ahead:
        i, j = int(above[0]), int(above[0]) + ahead
        _write_along(axes, text, (x[i], y[i]), (x[j], y[j]), colour=colour)


def _write_along(
    axes: Axes,
    text: str,
    point: tuple[float, float],
    other: tuple[float, float],
    *,
    colour: str,
    at_end: bool = False,
) -> None:
    """Write from a point, or up to it, along the step between two points of the data."""
    start, end = (other, point) if at_end else (point, other)
    (x0, y0), (x1, y1) = axes.transData.transform(np.array([start, end]))
    axes.annotate(
        text,
        point,
        xytext=(0, 1.5),
        textcoords="offset points",
        rotation=math.degrees(math.atan2(y1 - y0, x1 - x0)),
        rotation_mode="anchor",
        ha="right" if at_end else "left",
        va="bottom",
        fontsize=7.5,
        color=colour,
        path_effects=HALO,
        zorder=5.5,
    )


def _inside(low: float, high: float, share: float) -> float:
    """Position on a logarithmic axis by its share of the length."""
    return low * math.pow(high / low, share)
