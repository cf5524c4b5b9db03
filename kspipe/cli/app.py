"""Commands of ``kspipe``."""

from __future__ import annotations

from typing import Annotated

import typer

from kspipe import __version__
from kspipe.cli.options import (
    DebugOption,
    FolderArgument,
    OutOption,
    OverwriteOption,
    QuietOption,
    RecipeArgument,
    StepsOption,
)
from kspipe.cli.tracks import tracks_command
from kspipe.cli.trials import add_trials

__all__ = ["app", "main"]

app = typer.Typer(
    name="kspipe",
    help="From maps of a nearby galaxy to surface densities, predictions and residual maps.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
    rich_markup_mode=None,
)


def _version(wanted: bool) -> None:
    if wanted:
        typer.echo(f"kspipe {__version__}")
        raise typer.Exit


@app.callback()
def _top(
    version: Annotated[
        bool, typer.Option("--version", callback=_version, is_eager=True, help="Print the version.")
    ] = False,
) -> None:
    """From maps of a nearby galaxy to surface densities, predictions and residual maps."""


@app.command("reduce", epilog="Example: kspipe reduce galaxy.toml --out galaxy")
def reduce_command(
    recipe: RecipeArgument,
    out: OutOption,
    overwrite: OverwriteOption = False,
    steps: StepsOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Bring all maps to one beam and grid; write matched/, maps/, steps.ecsv and recipe.toml."""
    from kspipe.cli.session import print_steps, session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.recipe import load_recipe
        from kspipe.stages.reduce import reduce_maps

        made = reduce_maps(load_recipe(recipe), out, overwrite=overwrite, progress=progress)
    if steps:
        print_steps(out)
    typer.echo(f"{'written' if made else 'unchanged, reused'}: {out / 'maps'}")


@app.command("compare", epilog="Example: kspipe compare galaxy")
def compare_command(
    folder: FolderArgument,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Hold relations against a reduction; write residuals/, pixels.ecsv, summary.json."""
    from kspipe.cli.session import print_summary, session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.stages.compare import compare_relations

        compare_relations(folder, overwrite=overwrite, progress=progress)
    print_summary(folder)


@app.command("figures", epilog="Example: kspipe figures galaxy")
def figures_command(
    folder: FolderArgument,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Draw the figures of a comparison; write figures/."""
    from kspipe.cli.session import session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.products import draw_figures

        made = draw_figures(folder, overwrite=overwrite, progress=progress)
    typer.echo(f"{'written' if made else 'unchanged, reused'}: {folder / 'figures'}")


@app.command("run", epilog="Example: kspipe run galaxy.toml --out galaxy")
def run_command(
    recipe: RecipeArgument,
    out: OutOption,
    overwrite: OverwriteOption = False,
    steps: StepsOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Reduce, compare and draw: the whole job."""
    from kspipe.cli.session import print_steps, print_summary, session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.products import draw_figures
        from kspipe.recipe import load_recipe
        from kspipe.stages.compare import compare_relations
        from kspipe.stages.reduce import reduce_maps

        reduce_maps(load_recipe(recipe), out, overwrite=overwrite, progress=progress)
        compare_relations(out, overwrite=overwrite, progress=progress)
        draw_figures(out, overwrite=overwrite, progress=progress)
    if steps:
        print_steps(out)
    print_summary(out)


@app.command("alternatives", epilog="Example: kspipe alternatives galaxy")
def alternatives_command(
    folder: FolderArgument,
    overwrite: OverwriteOption = False,
    quiet: QuietOption = False,
    debug: DebugOption = False,
) -> None:
    """Say what every other record that fits would give for this galaxy; write alternatives.ecsv."""
    from kspipe.cli.session import print_alternatives, session

    with session(quiet=quiet, debug=debug) as progress:
        from kspipe.stages.alternatives import weigh_alternatives

        weigh_alternatives(folder, overwrite=overwrite, progress=progress)
    print_alternatives(folder)


@app.command("chain", epilog='Example: kspipe chain galaxy "03h12m24.0s -27d18m36s"')
def chain_command(
    folder: FolderArgument,
    position: Annotated[str, typer.Argument(metavar="POSITION", help="On the sky, ICRS.")],
    debug: DebugOption = False,
) -> None:
    """Follow one position from the stored counts to Msun/pc2, every factor with its unit."""
    from kspipe.cli.session import print_chain, session

    with session(quiet=True, debug=debug):
        from kspipe.stages.chain import pixel_chain

        table = pixel_chain(folder, position)
    print_chain(table)


@app.command("fit-alpha", epilog="Example: kspipe fit-alpha galaxy --region arm")
def fit_alpha_command(
    folder: FolderArgument,
    region: Annotated[
        str | None, typer.Option("--region", metavar="NAME", help="Of the recipe's regions.")
    ] = None,
    debug: DebugOption = False,
) -> None:
    """Fit alpha_CO and the gas-to-dust ratio that scatters least, from HI, CO and dust."""
    from kspipe.cli.session import session

    with session(quiet=True, debug=debug):
        from kspipe.stages.joint_fit import fit_cells, fit_joint

        rows = fit_cells(fit_joint(folder, region))
    for name, text in rows:
        typer.echo(f"{name}: {text}")


@app.command("list", epilog="Example: kspipe list alpha_co")
def list_command(
    family: Annotated[
        str | None, typer.Argument(metavar="FAMILY", help="Of records; all families without it.")
    ] = None,
    debug: DebugOption = False,
) -> None:
    """List the published conversions of a family, the relations, or the families."""
    from kspipe.cli.session import session

    with session(quiet=True, debug=debug):
        from kspipe.recipe.shelf import list_family

        rows = list_family(family)
    for key, *rest in rows:
        typer.echo(f"{key}: {'; '.join(rest)}")


@app.command("explain", epilog="Example: kspipe explain bolatto2013_eq31")
def explain_command(
    key: Annotated[str, typer.Argument(metavar="KEY", help="Of a record.")],
    debug: DebugOption = False,
) -> None:
    """Explain a record: formula, inputs, range, conventions, paper, and a worked number."""
    from kspipe.cli.session import session

    with session(quiet=True, debug=debug):
        from kspipe.recipe.shelf import explain

        rows = explain(key)
    width = max(len(name) for name, _ in rows)
    for name, text in rows:
        typer.echo(f"{name:<{width}}  {text}")


app.command(
    "tracks",
    epilog="Example: kspipe tracks krumholz2009 --metallicity 8.7 --parameter clumping=5 --out out",
)(tracks_command)
add_trials(app)


def main() -> None:
    """Entry point of the command."""
    app(prog_name="kspipe")
