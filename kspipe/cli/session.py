"""What surrounds a command: progress and log on stderr, errors as messages, the result table."""

from __future__ import annotations

import json
import logging
import sys
import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import typer
from rich.console import Console
from rich.markup import escape
from rich.progress import BarColumn, Progress, SpinnerColumn, TextColumn, TimeElapsedColumn
from rich.table import Table

from kspipe.core.errors import KspipeError, KspipeWarning
from kspipe.core.progress import Progress as ProgressCall
from kspipe.core.progress import no_progress
from kspipe.core.report import fit_lines, noted_lines, relation_rows, total_rows

__all__ = ["print_alternatives", "print_chain", "print_steps", "print_summary", "session"]


@contextmanager
def session(*, quiet: bool, debug: bool) -> Iterator[ProgressCall]:
    """Run a command's work; turn kspipe's errors into one message and an exit code.

    Parameters
    ----------
    quiet : bool
        No progress and no log; warnings and errors are still told.
    debug : bool
        Let errors through with their traceback.

    Yields
    ------
    Progress
        To be handed to a stage.
    """
    console = Console(stderr=True, highlight=False, soft_wrap=True)
    logging.basicConfig(
        stream=sys.stderr, format="%(message)s", level=logging.DEBUG if debug else logging.WARNING
    )
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("always", KspipeWarning)
            warnings.showwarning = lambda message, category, *_rest, **__: (
                console.print(f"warning: {message}", markup=False)
                if issubclass(category, KspipeWarning)
                else None
            )
            with _bar(console, quiet=quiet) as progress:
                yield progress
    except KspipeError as error:
        if debug:
            raise
        console.print(f"kspipe: {error}", markup=False)
        raise typer.Exit(error.exit_code) from None
    except KeyboardInterrupt:
        console.print("kspipe: interrupted; nothing unfinished has a final name", markup=False)
        raise typer.Exit(1) from None
    except Exception as error:
        if debug:
            raise
        console.print(
            f"kspipe: failed ({type(error).__name__}: {error}); --debug shows where", markup=False
        )
        raise typer.Exit(1) from None


@contextmanager
def _bar(console: Console, *, quiet: bool) -> Iterator[ProgressCall]:
    if quiet:
        yield no_progress
        return
    if not console.is_terminal:
        # In a log file a line for each piece of work reads better than a redrawn bar.
        def say(done: int, total: int, what: str) -> None:
            console.print(f"[{done}/{total}] {what}", markup=False)

        yield say
        return
    columns = (SpinnerColumn(), TextColumn("{task.description}"), BarColumn(), TimeElapsedColumn())
    with Progress(*columns, console=console, transient=True) as bar:
        task = bar.add_task("", total=None)

        def update(done: int, total: int, what: str) -> None:
            bar.update(task, completed=done, total=total, description=what)

        yield update


def print_steps(folder: Path) -> None:
    """Print what each step did to each map on stdout."""
    from kspipe.stages.steps import step_cells, step_table

    console = Console(highlight=False, width=None if sys.stdout.isatty() else 160)
    table = Table("map", "step", "what", "from", "flux [unit sr]", "noise", "pixels", box=None)
    for cells in step_cells(step_table(folder)):
        table.add_row(*(escape(cell) for cell in cells))
    console.print(table)


def print_alternatives(folder: Path) -> None:
    """Print what every record that fits would give, on stdout."""
    from kspipe.stages.alternatives import alternative_cells

    console = Console(highlight=False, width=None if sys.stdout.isatty() else 160)
    head = ("choice", "record", "total", "of used", "median", "median ratio", "tilt", "beware")
    table = Table(*head, box=None)
    for cells in alternative_cells(folder):
        table.add_row(*(escape(cell) for cell in cells))
    console.print(table)


def print_chain(table: Any) -> None:
    """Print the chain of one pixel on stdout."""
    from kspipe.stages.chain import chain_cells

    console = Console(highlight=False, width=None if sys.stdout.isatty() else 140)
    where = ", ".join(f"{key} {value}" for key, value in table.meta.items())
    console.print(where, markup=False)
    shown = Table("product", "map", "step", "factor", "value", "unit", box=None)
    for cells in chain_cells(table):
        shown.add_row(*(escape(cell) for cell in cells))
    console.print(shown)


def print_summary(folder: Path) -> None:
    """Print totals and headline numbers of a comparison on stdout."""
    summary: dict[str, Any] = json.loads((folder / "summary.json").read_text(encoding="utf-8"))
    console = Console(highlight=False, width=None if sys.stdout.isatty() else 110)
    console.print(
        f"{summary['galaxy']}: {summary['n_pixels']} pixels of {summary['pixel_arcsec']:.4g} "
        f"arcsec, {summary['n_independent']:.0f} independent (beam "
        f"{summary['beam_arcsec']:.4g} arcsec, {summary['beam_pc']:.0f} pc)",
        markup=False,
    )
    totals = Table("total", "value and random error", "flux-scale error", box=None)
    for row in total_rows(summary):
        totals.add_row(*row)
    console.print(totals)
    if summary["relations"]:
        relations = Table(
            "relation",
            "observed / predicted",
            "zero point and scatter",
            "median",
            box=None,
        )
        for cells in relation_rows(summary):
            relations.add_row(*cells)
        console.print(relations)
    counted = {name: n for name, n in summary["flags"].items() if n}
    console.print(
        "flagged: " + (", ".join(f"{n} {name}" for name, n in counted.items()) or "none"),
        markup=False,
    )
    for line in fit_lines(summary):
        console.print(line, markup=False)
    for line in noted_lines(summary):
        console.print(f"note: {line}", markup=False)
    console.print(f"products in {folder}", markup=False)
