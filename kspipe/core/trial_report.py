"""Trials as rows of text, for the terminal and for notebooks."""

from __future__ import annotations

import math
from typing import Any

from kspipe.core.report import measured

__all__ = [
    "budget_notes",
    "choice_rows",
    "closure_lines",
    "closure_rows",
    "flip_lines",
    "ladder_rows",
    "quantity_rows",
    "shift_rows",
]

_NAMES = {
    "slope": "slope",
    "level": "log10 Sigma_SFR at pivot",
    "scatter": "scatter [dex]",
    "t_dep": "log10 t_dep,mol [Gyr]",
    "t_dep_gas": "log10 t_dep,gas [Gyr]",
}


def _name(key: str) -> str:
    bias = key.removeprefix("bias ")
    return _NAMES.get(key, f"log10 observed/predicted, {bias}")


def _number(value: float | None, digits: str = ".3g") -> str:
    return "none" if value is None or not math.isfinite(value) else format(value, digits)


def quantity_rows(budget: dict[str, Any]) -> list[tuple[str, ...]]:
    """Name, value with random error, systematic range, and what moves it most."""
    rows: list[tuple[str, ...]] = []
    for key, q in budget["quantities"].items():
        leading = [
            f"{entry['assumption']} {entry['shift']:+.3f}"
            for entry in budget["ranked"][key][:3]
            if entry["shift"] is not None
        ]
        rows.append(
            (
                _name(key),
                measured(q["value"], q["random"]),
                f"{_number(q['low'], '+.3f')} to {_number(q['high'], '+.3f')}",
                ", ".join(leading),
            )
        )
    return rows


def shift_rows(budget: dict[str, Any]) -> tuple[list[str], list[tuple[str, ...]]]:
    """Head and rows of the whole ranked table, by the share of variance an assumption has."""
    keys = list(budget["quantities"])
    shifts: dict[str, dict[str, float]] = {}
    for key in keys:
        for entry in budget["ranked"][key]:
            shifts.setdefault(entry["assumption"], {})[key] = entry["shift"] or 0.0
    totals = {k: math.hypot(*(s.get(k, 0.0) for s in shifts.values())) or 1.0 for k in keys}

    def share(name: str) -> float:
        return sum((shifts[name].get(key, 0.0) / totals[key]) ** 2 for key in keys)

    rows: list[tuple[str, ...]] = [
        (name, *(f"{shifts[name].get(key, 0.0):+.3f}" for key in keys))
        for name in sorted(shifts, key=share, reverse=True)
    ]
    return [key.removeprefix("bias ") for key in keys], rows


def choice_rows(budget: dict[str, Any]) -> tuple[list[str], list[tuple[str, ...]]]:
    """Head and rows: range of each quantity over one choice alone, and over all sets of them."""
    ranges = budget["choices"]["ranges"]
    dimensions = list(next(iter(ranges.values()))) if ranges else []
    rows: list[tuple[str, ...]] = []
    for key, by_choice in ranges.items():
        cells = (
            f"{_number(low)} to {_number(high)}" if low != high else "-"
            for low, high in by_choice.values()
        )
        share = budget["choices"]["share_of_same_sign"].get(key)
        rows.append((_name(key), *cells, "" if share is None else f"{share:.0%}"))
    return dimensions, rows


def flip_lines(budget: dict[str, Any]) -> list[str]:
    """One line for each conclusion: what would turn it around."""
    lines = []
    for flip in budget["flips"]:
        if flip["assumption"]:
            lines.append(
                f"{flip['conclusion']}: {flip['assumption']} {flip['change']} "
                f"({abs(flip['n_sigma']):.1f} sigma) and {flip['becomes']}"
            )
        else:
            lines.append(f"{flip['conclusion']}: no single assumption within 5 sigma changes it")
    return lines


def budget_notes(budget: dict[str, Any]) -> list[str]:
    """What the reader should know of how the numbers were made."""
    notes = []
    checks = budget["response_minus_full_fit"]
    if checks:
        worst = {
            key: max(abs(check[key] or 0.0) for check in checks)
            for key in ("slope", "level", "scatter")
        }
        notes.append(
            f"line moved by its derivatives; {len(checks)} draws fitted in full differ by at most "
            f"{worst['slope']:.3f} in slope, {worst['level']:.3f} in level, "
            f"{worst['scatter']:.3f} in scatter"
        )
    if budget["line"]["message"]:
        notes.append(f"line: {budget['line']['message']}")
    if budget["fixed"]:
        notes.append("not varied: " + "; ".join(budget["fixed"]))
    lost = {key: q["n_lost"] for key, q in budget["quantities"].items() if q["n_lost"]}
    if lost:
        listed = ", ".join(f"{n} of {_name(key)}" for key, n in lost.items())
        notes.append(f"draws without a value: {listed}")
    return notes


def ladder_rows(ladder: dict[str, Any]) -> list[tuple[str, ...]]:
    """Beam, samples, massive stars, slope, scatter, ratio of each relation, and the label."""
    rows: list[tuple[str, ...]] = []
    for rung in ladder["rungs"]:
        line = rung["line"]
        if line["is_fitted"]:
            slope = measured(line["slope"], line["slope_error"])
            scatter = (
                f"< {line['scatter_dex']:.2g}"
                if line["is_limit"]
                else measured(line["scatter_dex"], line["scatter_error"])
            )
        else:
            slope, scatter = "none", line["message"]
        ages = ", ".join(f"{tracer} {age}" for tracer, age in rung["ages_myr"].items())
        ratios = ", ".join(
            f"{name} {_number(r['sum_ratio'])}" for name, r in rung["relations"].items()
        )
        rows.append(
            (
                f"{rung['factor']:g} x = {rung['beam_pc']:.0f}",
                f"{rung['n_independent']:.0f} / {line['n']}",
                ages,
                f"{_number(rung['stars_per_beam'])} / {_number(rung['share_of_few'], '.0%')}",
                slope,
                scatter,
                ratios,
                "sampling-limited: " + "; ".join(rung["limits"]) if rung["limits"] else "",
            )
        )
    return rows


def closure_rows(closure: dict[str, Any]) -> list[tuple[str, ...]]:
    """Parameter, truth at the final beam, bias, stated error, coverage of both intervals."""
    return [
        (
            f["name"],
            measured(f["truth"], f["truth_error"]),
            measured(f["bias"], f["bias_error"]),
            _number(f["stated_error"], ".2g"),
            f"{100 * f['within_68']:.0f} +- {100 * f['coverage_error_68']:.0f} %",
            f"{100 * f['within_95']:.0f} +- {100 * f['coverage_error_95']:.0f} %",
            str(f["n"]),
        )
        for f in closure["found"]
    ]


def closure_lines(closure: dict[str, Any]) -> list[str]:
    """What was painted, what the beam does to it, power, the wrong run, and what failed."""
    paint, lines = closure["paint"], []
    painted = paint["relation"] or f"a line of slope {paint['slope']:g}"
    for key, shift in closure["law_shift"].items():
        unit = "dex in zero point" if key == "zero_point_dex" else "in slope"
        lines.append(f"averaging in the beam moves {painted} by {_number(shift, '+.3f')} {unit}")
    lines += [
        f"{painted} against {p['rival']}, {p['footing']}: preferred in {p['preferred']:.0%}, "
        f"called better in {p['separated']:.0%}, called worse in {p['wrongly_separated']:.0%} "
        f"of {p['n']} mocks"
        for p in closure["power"]
    ]
    wrong = closure["wrong"]
    ratios = ", ".join(
        f"{name.removeprefix('sigma_')} {found:.3f} ({expected:.3f} expected)"
        for name, (expected, found) in wrong["ratios"].items()
    )
    lines.append(
        f"with the true inclination {wrong['inclination_off_deg']:+g} deg and alpha_CO x "
        f"{wrong['alpha_co_off']:g} off the recipe, sums found over true: {ratios}"
    )
    if wrong["slope_found"] is not None:
        slope = measured(wrong["slope_found"], wrong["slope_error"])
        true = _number(wrong["slope_true"])
        lines.append(f"  and the line's slope {slope}, of the true sky {true}")
    lines += [f"{n} fits without a result: {why}" for why, n in closure["failures"].items()]
    return lines
