"""Commands that run the stages again with other inputs."""

from __future__ import annotations

from typing import Annotated

import typer

from kspipe.cli.options import DebugOption, FolderArgument, OverwriteOption, QuietOption

__all__ = ["add_trials"]


def add_trials(app: typer.Typer) -> None:
    """Add the commands to the application."""
    app.command("budget", epilog="Example: kspipe budget galaxy --draws 2000")(budget_command)
    app.command("ladder", epilog="Example: kspipe ladder galaxy")(ladder_command)


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
