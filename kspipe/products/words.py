"""The sentences that stand on figures."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Any

from kspipe.products.read import Products
from kspipe.products.style import SIGMA
from kspipe.relations import LAWS

__all__ = ["headline_lines", "map_lines", "measured", "parameter_text", "relation_title"]


def parameter_text(parameters: Mapping[str, float]) -> str:
    """Write parameters as ``clumping = 5, anchor_oh = 8.69``."""
    return ", ".join(f"{name} = {value:g}" for name, value in parameters.items())


def measured(
    value: float | None, error: float | None, unit: str = "", *, sign: bool = False
) -> str:
    """Write a number with its error to the error's first two digits.

    Parameters
    ----------
    value, error : float or None
        None, as the summary has it, where the number does not exist.
    unit : str
        Written behind.
    sign : bool
        Whether a plus sign is written.

    Examples
    --------
    >>> measured(0.86974, 0.00778)
    '0.8697 ± 0.0078'
    >>> measured(0.171, None, "dex", sign=True)
    '+0.171 dex'
    >>> measured(None, None, "dex")
    'not defined'
    """
    if value is None:
        return "not defined"
    plus = "+" if sign else ""
    if not error:
        text = f"{value:{plus}.3g}"
    else:
        digits = max(0, 1 - math.floor(math.log10(error)))
        text = f"{value:{plus}.{digits}f} ± {error:.{digits}f}"
    return f"{text} {unit}".rstrip().replace("-", "−")


def relation_title(products: Products, name: str) -> str:
    """Say which law it is, with its parameters, and what it predicts."""
    table = products.recipe.relations[name]
    law = LAWS.get(table.law)
    numbers = f", {parameter_text(table.parameters)}" if table.parameters else ""
    return f"{name}: {law.label}{numbers}; predicts a {law.statistic}"


def headline_lines(products: Products, name: str) -> list[str]:
    """Write the numbers that sum up one relation, as the summary has them."""
    numbers: dict[str, Any] = products.summary["relations"][name]
    ratio = measured(numbers["sum_ratio"], numbers["sum_ratio_error"])
    median = measured(numbers["median_dex"], numbers["median_dex_error"], "dex", sign=True)
    return [
        f"sum(observed) / sum(predicted) = {ratio}",
        *_zero_point_lines(numbers["zero_point"]),
        f"median {median}; {_left_out(numbers)}",
        f"{products.size_text}; random errors",
    ]


def _zero_point_lines(zero: dict[str, Any] | None) -> list[str]:
    if zero is None:
        return ["zero point not fitted: too few independent samples"]
    offset = measured(zero["offset_dex"], zero["offset_error_dex"], "dex", sign=True)
    scatter = measured(zero["scatter_dex"], zero["scatter_error_dex"], "dex")
    return [
        f"zero point {offset}, scatter {scatter}",
        f"(fitted to {zero['n']} independent samples of any sign)",
    ]


def _left_out(numbers: Mapping[str, Any]) -> str:
    """Which part of the pixels is not in the median."""
    if numbers["fraction_without_log"] is None:
        return "no pixel has a prediction"
    return f"{percent(numbers['fraction_without_log'])} of pixels not in it"


def map_lines(
    products: Products,
    *,
    n_without_log: int,
    n_faint: int,
    clipped_good: float,
    clipped_faint: float,
    contour_sigma: float,
) -> list[str]:
    """Say what the marks on a map of residuals mean, and how many pixels each concerns.

    Parameters
    ----------
    products : Products
    n_without_log, n_faint : int
        Covered pixels without a logarithm; with one, but low S/N.
    clipped_good, clipped_faint : float
        Share of the pixels beyond the colour scale.
    contour_sigma : float
        Significance of the thin lines.
    """
    snr, n = f"{products.recipe.comparison.low_snr:g}", products.summary["n_pixels"]
    clipped = f"{percent(clipped_good)} of full, {percent(clipped_faint)} of pale pixels"
    ends = "" if products.recipe.galaxy.r25 is None else "thick dashes: r$_{25}$;  "
    return [
        f"hatched: {n_without_log} of {n} covered pixels have no logarithm",
        f"pale: S/N < {snr} in {SIGMA['sigma_gas']} or {SIGMA['sigma_sfr']}, {n_faint} pixels",
        f"beyond the scale: {clipped}",
        f"thin lines: difference of +{contour_sigma:g}σ (solid), −{contour_sigma:g}σ (dashed)",
        f"{ends}ellipse: beam, {products.beam_text}",
    ]


def percent(share: float) -> str:
    """Write a share as a percentage to one decimal."""
    return f"{100 * share:.1f} %"
