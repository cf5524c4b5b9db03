"""The summary as rows of text, for the terminal and for notebooks."""

from __future__ import annotations

import math
from typing import Any

__all__ = ["fit_lines", "measured", "noted_lines", "relation_rows", "total_rows"]

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
    """What the reader should know of each map and relation, a line for each thing."""
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
    for name, entry in summary.get("relations", {}).items():
        lines += [f"relations.{name}: {text}" for text in _relation_notes(entry)]
    return lines


def _relation_notes(entry: dict[str, Any]) -> list[str]:
    """Where a relation has no prediction or is beyond its range, and what both sides share."""
    lines = []
    reasons = [
        f"{need} unusable in {known['n_unusable']}"
        for need, known in entry.get("inputs", {}).items()
        if known["n_unusable"]
    ]
    if entry.get("n_no_solution"):
        why = f" ({', '.join(reasons)})" if reasons else ""
        lines.append(f"{entry['n_no_solution']} pixels without prediction{why}")
    if entry.get("n_outside_range"):
        lines.append(f"{entry['n_outside_range']} pixels outside its range, predicted all the same")
    atomic = entry.get("from_atomic")
    if atomic:
        lines.append(
            f"by the HI that it leaves: {atomic['n_without_root']} pixels without root, "
            f"{atomic['n_one_root']} with one, {atomic['n_several_roots']} with several"
        )
    maps = [shared["what"] for shared in entry.get("shared", []) if shared["covariance_carried"]]
    if maps:
        lines.append(f"shares {', '.join(dict.fromkeys(maps))} with the observed star formation")
    return lines


def fit_lines(summary: dict[str, Any]) -> list[str]:
    """Fitted lines and what the ranking says, one line for each; empty where nothing was fitted."""
    lines = []
    for fit in summary.get("fits", {}).get("lines", []):
        name = f"{fit['sample']}, log sigma_sfr against log {fit['x']}"
        if fit["slope"] is None or not fit["is_fitted"]:
            lines.append(f"{name}: {fit['message']}")
            continue
        scatter = (
            f"below {fit['scatter_dex']:.2g} (95 %)"
            if fit["is_limit"]
            else measured(fit["scatter_dex"], fit["scatter_error"])
        )
        lines.append(
            f"{name}: slope {measured(fit['slope'], fit['slope_error'])}, scatter {scatter} dex, "
            f"{fit['n']} independent samples of {fit['n_pixels']} pixels"
        )
    for ranking in summary.get("ranking", []):
        lines += [f"{ranking['footing']}: {d['sentence']}" for d in ranking["differences"]]
        lines += [f"{name} is not ranked: {why}" for name, why in ranking["left_out"].items()]
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
