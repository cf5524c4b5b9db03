"""Tables of trials on stdout."""

from __future__ import annotations

import json
import sys
from pathlib import Path
from typing import Any

from rich.console import Console
from rich.markup import escape
from rich.table import Table

from kspipe.core.trial_report import (
    budget_notes,
    choice_rows,
    closure_lines,
    closure_rows,
    flip_lines,
    ladder_rows,
    quantity_rows,
    shift_rows,
)

__all__ = ["print_budget", "print_closure", "print_ladder"]


def _read(path: Path) -> dict[str, Any]:
    return dict(json.loads(path.read_text(encoding="utf-8")))


def _console() -> Console:
    return Console(highlight=False, width=None if sys.stdout.isatty() else 160)


def _table(head: tuple[str, ...], rows: list[tuple[str, ...]]) -> Table:
    table = Table(*head, box=None)
    for row in rows:
        table.add_row(*(escape(cell) for cell in row))
    return table


def print_budget(folder: Path) -> None:
    """Print the budget of a product folder."""
    budget, console = _read(folder / "budget.json"), _console()
    console.print(
        f"{budget['galaxy']}: {budget['n_draws']} draws of {len(budget['priors'])} assumptions on "
        f"{budget['n_samples']} independent samples",
        markup=False,
    )
    head = ("quantity", "value and random error", "systematic, 16 to 84 %", "moved most by")
    console.print(_table(head, quantity_rows(budget)))
    keys, rows = shift_rows(budget)
    console.print("shift for one sigma of each assumption:")
    console.print(_table(("assumption", *keys), rows))
    dimensions, rows = choice_rows(budget)
    console.print(
        f"choices: range over each alone, and over {budget['choices']['n_universes']} sets of "
        "them; share of sets on the same side (slope: of 1)"
    )
    console.print(_table(("quantity", *dimensions, "same side"), rows))
    console.print("the smallest change to one assumption that turns a conclusion around:")
    for line in flip_lines(budget):
        console.print(f"  {line}", markup=False)
    for line in budget_notes(budget):
        console.print(f"note: {line}", markup=False)
    console.print(f"products in {folder}", markup=False)


def print_ladder(folder: Path) -> None:
    """Print the resolution ladder of a product folder."""
    ladder, console = _read(folder / "ladder.json"), _console()
    head = (
        "beam [pc]",
        "independent / fitted",
        "ages [Myr]",
        "massive stars / few",
        "slope",
        "scatter",
        "observed / predicted",
        "",
    )
    console.print(_table(head, ladder_rows(ladder)))
    console.print(
        "ages: youngest, mean, 90 percent; massive stars: expected per beam (8 Msun and more, in "
        "the shortest 90-percent age), and share of detected samples with fewer than 10",
        markup=False,
    )
    console.print(f"products in {folder}", markup=False)


def print_closure(folder: Path) -> None:
    """Print the closure test of a product folder."""
    closure, console = _read(folder / "closure.json"), _console()
    noise = ", ".join(f"{name} x {factor:g}" for name, factor in closure["paint"]["noise"].items())
    console.print(
        f"{closure['galaxy']}: {closure['n_mocks']} painted skies, {closure['n_samples']:.0f} "
        f"independent samples each, {closure['finer']:.3g} times finer than the grid"
        + (f"; noise of {noise}" if noise else ""),
        markup=False,
    )
    head = ("parameter", "truth", "bias", "stated error", "in 68 %", "in 95 %", "mocks")
    console.print(_table(head, closure_rows(closure)))
    for line in closure_lines(closure):
        console.print(line, markup=False)
    console.print(f"products in {folder}", markup=False)
