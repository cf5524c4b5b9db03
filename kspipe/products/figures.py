"""Figures: the last stage, from a compared product folder to pictures in it."""

from __future__ import annotations

import logging
import os
from collections.abc import Callable
from functools import partial
from multiprocessing import get_all_start_methods, get_context
from pathlib import Path

from matplotlib.figure import Figure

from kspipe import __version__
from kspipe.core.errors import Fault, OutputError
from kspipe.core.progress import Progress, no_progress
from kspipe.products.map_figures import draw_surface_densities
from kspipe.products.read import Products, read_products, read_recipe
from kspipe.products.relation_figure import draw_star_formation_law
from kspipe.products.residual_figure import draw_residual
from kspipe.products.state_figure import draw_gas_state
from kspipe.products.style import figure_style, save_figure
from kspipe.recipe import Recipe
from kspipe.stages.folder import ProductFolder, fingerprint
from kspipe.stages.plan import compare_print

__all__ = ["draw_figures"]

log = logging.getLogger(__name__)


def draw_figures(
    folder: Path, *, overwrite: bool = False, progress: Progress = no_progress
) -> bool:
    """Draw a compared product folder into its ``figures/``.

    Parameters
    ----------
    folder : Path
        Holds a reduction and a comparison; nothing outside it is read.
    overwrite : bool
        Whether older figures may be replaced.
    progress : Progress

    Returns
    -------
    bool
        False where everything was there already and was reused.

    Raises
    ------
    OutputError
        If the folder holds no comparison, or one made from something else.
    """
    products_folder = ProductFolder.open(folder)
    recipe = _compared_recipe(products_folder)
    print_ = fingerprint(
        {"compare": products_folder.stages["compare"]["fingerprint"], "kspipe": __version__}
    )
    if not products_folder.check({"figures": print_}, overwrite=overwrite):
        log.info("figures: nothing changed, %s is reused", folder)
        return False
    products = read_products(folder, recipe)
    drawings = _drawings(products, folder)
    with products_folder.publish({"figures": print_}) as staging, figure_style():
        (staging / "figures").mkdir()
        _draw_all(drawings, staging / "figures", progress)
        progress(len(drawings), len(drawings), "drawn")
    return True


def _draw_all(drawings: dict[str, Callable[[], Figure]], folder: Path, progress: Progress) -> None:
    """Draw figures, every second one in a process of its own where there is a second core.

    A figure that the other process did not write, for whatever reason, is drawn here again, so
    that its fault is told as always.
    """
    names = list(drawings)

    def draw(name: str) -> None:
        save_figure(drawings[name](), folder / name)

    def draw_each(some: list[str]) -> None:
        for name in some:
            draw(name)

    beside: list[str] = []
    if len(names) > 1 and (os.cpu_count() or 1) > 1 and "fork" in get_all_start_methods():
        beside = names[1::2]
        other = get_context("fork").Process(target=draw_each, args=(beside,))
        other.start()
    here = [name for name in names if name not in beside]
    for done, name in enumerate(here):
        progress(2 * done if beside else done, len(names), f"drawing {name}")
        draw(name)
    if beside:
        other.join()
        if other.exitcode:
            draw_each(beside)


def _drawings(products: Products, folder: Path) -> dict[str, Callable[[], Figure]]:
    """What to draw, by file name."""
    return {
        "star_formation_law": partial(draw_star_formation_law, products),
        "surface_densities": partial(draw_surface_densities, products),
        **(
            {"gas_state": partial(draw_gas_state, products, folder)}
            if products.recipe.gas_state
            else {}
        ),
        **{
            f"residual_{name}": partial(draw_residual, products, name)
            for name in products.residuals
        },
    }


def _compared_recipe(folder: ProductFolder) -> Recipe:
    """Read the recipe and refuse a comparison that is absent, stale or touched."""
    out = folder.path
    if not {"convert", "compare"} <= set(folder.stages) or not (out / "recipe.toml").is_file():
        raise OutputError(Fault(str(out), "holds no comparison", f"run: kspipe compare {out}"))
    recipe = read_recipe(out)
    current = compare_print(recipe, folder.stages["convert"]["fingerprint"])
    if not folder.is_current("compare", current):
        raise OutputError(
            Fault(
                str(out),
                "the comparison is stale: recipe.toml or its files changed since",
                f"run again: kspipe compare {out} --overwrite",
            )
        )
    return recipe
