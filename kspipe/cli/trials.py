"""Commands that run the stages again with other inputs."""

from __future__ import annotations

from typing import Annotated

import typer

from kspipe.cli.options import (
    DebugOption,
    FolderArgument,
    OutOption,
    OverwriteOption,
    QuietOption,
    RecipeArgument,
)

__all__ = ["add_trials"]


def add_trials(app: typer.Typer) -> None:
    """Add the commands to the application."""
    app.command("budget", epilog="Example: kspipe budget galaxy --draws 2000")(budget_command)
    app.command("ladder", epilog="Example: kspipe ladder galaxy")(ladder_command)
    app.command("closure", epilog="Example: kspipe closure galaxy.toml --out test --slope 1.4")(
        closure_command
    )


def budget_command(
    folder: FolderArgument,
    draws: Annotated[int, typer.Option("--draws", metavar="N", help="Of all assumptions.")] = 2000,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Rank what moves the result: draw every assumption; write budget.json, budget.ecsv."""
    from kspipe.cli.session import session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.products.trial_figures import draw_budget
        from kspipe.trials.write import write_budget

        write_budget(folder, n_draws=draws, overwrite=overwrite, progress=progress)
        draw_budget(folder)
        from kspipe.cli.trial_tables import print_budget
    print_budget(folder)


def ladder_command(
    folder: FolderArgument,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Compare at 1, 2, 4 and 8 times the beam; write ladder.json, ladder.ecsv."""
    from kspipe.cli.session import session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.products.trial_figures import draw_ladder
        from kspipe.trials.write import write_ladder

        write_ladder(folder, overwrite=overwrite, progress=progress)
        draw_ladder(folder)
        from kspipe.cli.trial_tables import print_ladder
    print_ladder(folder)


def closure_command(
    recipe: RecipeArgument,
    out: OutOption,
    paint: Annotated[
        str, typer.Option("--paint", metavar="NAME", help="Relation to paint; else a line.")
    ] = "",
    slope: Annotated[float, typer.Option("--slope", help="Of the line.")] = 1.4,
    scatter: Annotated[float, typer.Option("--scatter", help="About the law [dex].")] = 0.2,
    noise: Annotated[
        list[str] | None,
        typer.Option("--noise", metavar="MAP=F", help="Noise of a map, times F: plan a depth."),
    ] = None,
    mocks: Annotated[int, typer.Option("--mocks", metavar="N", help="Skies to paint.")] = 20,
    tilt: Annotated[float, typer.Option("--tilt", help="Wrong run: inclination off [deg].")] = 5.0,
    alpha: Annotated[float, typer.Option("--alpha", help="Wrong run: alpha_CO off, times.")] = 1.5,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Paint skies through a recipe's maps and find them again; write closure.json, .ecsv."""
    from kspipe.cli.session import session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.recipe import load_recipe
        from kspipe.trials.painted import Paint, noise_factors
        from kspipe.trials.write import write_closure

        law = Paint(
            relation=paint, slope=slope, scatter_dex=scatter, noise=noise_factors(noise or [])
        )
        write_closure(
            load_recipe(recipe),
            out,
            law,
            n_mocks=mocks,
            wrong=(tilt, alpha),
            overwrite=overwrite,
            progress=progress,
        )
        from kspipe.cli.trial_tables import print_closure
    print_closure(out)
