"""The summary as rows of text, for the terminal and for notebooks."""

from __future__ import annotations

import math
from typing import Any

__all__ = ["measured", "noted_lines", "relation_rows", "total_rows"]

_NAMES = {
    "mass_atom": "atomic gas",
    "mass_mol": "molecular gas",
    "mass_gas": "total gas",
    "mass_star": "stars",
    "sfr": "star formation",
    "f_mol": "molecular fraction",
    "t_dep": "depletion time, molecular",
    "t_dep_gas": "depletion time, total gas",
}


def measured(value: float | None, error: float | None, digits: int = 2) -> str:
    """Write a value with its error to the digits that the error allows."""
    if value is None or not math.isfinite(value):
        return "none"
    if error is None or not math.isfinite(error) or error <= 0:
        return f"{value:.4g}"
    if abs(value) >= 1e5 or 0 < abs(value) < 1e-3:
        power = math.floor(math.log10(abs(value)))
        return f"({measured(value / 10**power, error / 10**power, digits)})e{power}"
    decimals = max(0, digits - 1 - math.floor(math.log10(error)))
    return f"{value:.{decimals}f} +- {error:.{decimals}f}"


def noted_lines(summary: dict[str, Any]) -> list[str]:
    """What the reader should know of each map, one line for each thing; empty for nothing."""
    lines = []
    for name, entry in summary["maps"].items():
        registration, negative = entry.get("registration", {}), entry.get("negative") or {}
        spacings = entry.get("short_spacings", {})
        if registration.get("proposal"):
            text = f"{registration['text']}; {registration['proposal']} would undo it"
            lines.append(f"maps.{name}: {text}")
        if negative.get("count"):
            masked = "; taken as not observed" if negative["masked"] else ""
            lines.append(f"maps.{name}: {negative['text']}{masked}")
        if spacings.get("systematic"):
            lines.append(f"maps.{name}: {spacings['text']}")
    return lines


def total_rows(summary: dict[str, Any]) -> list[tuple[str, str, str]]:
    """Name, value with random error and unit, and the error of the flux scales."""
    rows = []
    for key, entry in summary["totals"].items():
        value = f"{measured(entry['value'], entry.get('random_error'))} {entry['unit']}".strip()
        if entry.get("upper_limit") is not None:
            value += f", below {entry['upper_limit']:.3g} (3 sigma)"
        calibration = entry.get("calibration_error")
        rows.append((_NAMES[key], value, f"{calibration:.2g}" if calibration else ""))
    return rows


def relation_rows(summary: dict[str, Any]) -> list[tuple[str, str, str, str]]:
    """Name, ratio of sums, zero point with scatter, median with what could not enter it."""
    rows = []
    for name, r in summary["relations"].items():
        zero = r["zero_point"]
        fitted = "fewer than 10 samples"
        if zero is not None:
            fitted = (
                f"{measured(zero['offset_dex'], zero['offset_error_dex'])} dex, scatter "
                f"{measured(zero['scatter_dex'], zero['scatter_error_dex'])}"
            )
        left_out = r["fraction_without_log"]
        share = "" if left_out is None else f" ({left_out:.0%} without a logarithm)"
        rows.append(
            (
                f"{name} ({r['law']})",
                measured(r["sum_ratio"], r["sum_ratio_error"]),
                fitted,
                f"{measured(r['median_dex'], r['median_dex_error'])} dex{share}",
            )
        )
    return rows
