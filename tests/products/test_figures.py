"""The figures of a product folder: which there are, that they repeat, and what they survive."""

import shutil
from dataclasses import replace
from pathlib import Path

import matplotlib as mpl
import numpy as np
import pytest
from PIL import Image

from kspipe.core.errors import OutputError
from kspipe.core.progress import no_progress
from kspipe.products import draw_figures
from kspipe.products.figures import _draw_all
from kspipe.products.map_figures import draw_surface_densities
from kspipe.products.read import read_products, read_recipe
from kspipe.products.relation_figure import draw_star_formation_law
from kspipe.products.residual_figure import draw_residual
from kspipe.products.style import figure_style, new_figure
from kspipe.recipe import load_recipe
from kspipe.recipe.quantity import Measured
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps

DEMO = Path(__file__).parents[2] / "recipes" / "orrinda_short.toml"
FILES = {
    f"{name}.{suffix}"
    for name in ("star_formation_law", "surface_densities", "residual_shielding_kpc")
    for suffix in ("pdf", "png")
}


@pytest.fixture(scope="module")
def compared(tmp_path_factory):
    """A small product folder, compared; tests work on copies."""
    folder = tmp_path_factory.mktemp("compared") / "out"
    recipe = load_recipe(DEMO)
    size = Measured(300.0, 0.0, "5 arcmin")
    reduce_maps(
        recipe.model_copy(update={"grid": recipe.grid.model_copy(update={"size": size})}), folder
    )
    compare_relations(folder)
    return folder


@pytest.fixture(scope="module")
def drawn(compared, tmp_path_factory):
    folder = tmp_path_factory.mktemp("drawn") / "out"
    shutil.copytree(compared, folder)
    assert draw_figures(folder)
    return folder


@pytest.fixture
def copied(compared, tmp_path):
    return shutil.copytree(compared, tmp_path / "out")


@pytest.fixture(scope="module")
def products(compared):
    return read_products(compared, read_recipe(compared))


def test_files(drawn):
    assert {path.name for path in (drawn / "figures").iterdir()} == FILES
    assert all(path.stat().st_size < 2e6 for path in (drawn / "figures").iterdir())


def test_no_dates_or_versions(drawn):
    for path in (drawn / "figures").iterdir():
        if path.suffix == ".pdf":
            content = path.read_bytes()
            assert b"Date" not in content
            assert b"atplotlib" not in content
        else:
            assert set(Image.open(path).info) <= {"dpi"}


def test_second_call_reuses(drawn):
    before = {path: path.stat().st_mtime_ns for path in (drawn / "figures").iterdir()}
    assert not draw_figures(drawn)
    assert before == {path: path.stat().st_mtime_ns for path in (drawn / "figures").iterdir()}


@pytest.mark.slow
def test_same_bytes_without_input_maps_and_under_other_settings(drawn, copied):
    recipe = copied / "recipe.toml"
    recipe.write_text(recipe.read_text().replace("demo_maps", "nowhere"))
    with mpl.rc_context({"font.size": 20, "axes.grid": True, "image.origin": "upper"}):
        draw_figures(copied)
        assert mpl.rcParams["font.size"] == 20
    for name in FILES:
        assert (drawn / "figures" / name).read_bytes() == (copied / "figures" / name).read_bytes()


def test_refuses_a_folder_without_comparison(tmp_path):
    with pytest.raises(OutputError, match="holds no comparison"):
        draw_figures(tmp_path)


def test_refuses_a_stale_comparison(copied):
    recipe = copied / "recipe.toml"
    recipe.write_text(recipe.read_text().replace("clumping = 5", "clumping = 6"))
    with pytest.raises(OutputError, match="stale"):
        draw_figures(copied)


def test_needs_overwrite_to_replace_touched_figures(drawn, tmp_path):
    folder = shutil.copytree(drawn, tmp_path / "out")
    (folder / "figures" / "surface_densities.png").write_bytes(b"")
    with pytest.raises(OutputError, match="figures"):
        draw_figures(folder)


def _changed(products, **changes):
    galaxy = products.recipe.galaxy.model_copy(update=changes.pop("galaxy", {}))
    recipe = products.recipe.model_copy(update={"galaxy": galaxy, **changes.pop("recipe", {})})
    return replace(products, recipe=recipe, **changes)


def _negative(products, name):
    density = products.densities[name]
    return {**products.densities, name: replace(density, value=-np.abs(density.value))}


@pytest.mark.parametrize(
    ("draw", "change"),
    [
        (
            draw_surface_densities,
            lambda p: {"densities": {k: v for k, v in p.densities.items() if k != "sigma_mol"}},
        ),
        (draw_surface_densities, lambda _: {"galaxy": {"r25": None}}),
        (draw_surface_densities, lambda p: {"densities": _negative(p, "sigma_gas")}),
        (draw_star_formation_law, lambda p: {"densities": _negative(p, "sigma_gas")}),
        (draw_star_formation_law, lambda p: {"densities": _negative(p, "sigma_sfr")}),
        (draw_star_formation_law, lambda _: {"recipe": {"relations": {}}}),
        (draw_star_formation_law, lambda _: {"galaxy": {"name": "$with dollars$ and long " * 3}}),
    ],
    ids=[
        "maps, atomic only",
        "maps, no r25",
        "maps, no gas",
        "law, no gas",
        "law, no star formation",
        "law, no relations",
        "law, odd name",
    ],
)
def test_poor_folders_are_drawn(products, draw, change):
    with figure_style():
        draw(_changed(products, **change(products))).draw_without_rendering()


def test_residuals_without_a_logarithm_are_drawn(products):
    residual = products.residuals["shielding_kpc"]
    none = replace(residual, ratio_dex=np.full_like(residual.ratio_dex, np.nan))
    with figure_style():
        figure = draw_residual(
            replace(products, residuals={"shielding_kpc": none}), "shielding_kpc"
        )
        figure.draw_without_rendering()
        n = products.summary["n_pixels"]
        words = "\n".join(text.get_text() for text in figure.texts)
    assert f"hatched: {n} of {n} covered pixels" in words


def test_law_figure_counts_what_it_cannot_draw(products):
    with figure_style():
        words = "\n".join(text.get_text() for text in draw_star_formation_law(products).texts)
    flags = products.summary["flags"]
    assert f"{flags['nonpositive_sfr']} of {products.summary['n_pixels']} pixels" in words
    assert f"{flags['nonpositive_gas']} have" in words
    assert f"= {products.summary['n_independent']:.0f}" in words


def test_a_figure_that_fails_beside_fails_here(tmp_path, capfd) -> None:
    """Every second figure is drawn in a process of its own: its fault is told all the same."""

    def fine():
        return new_figure(2.0, 2.0)

    def faulty():
        raise RuntimeError("no ink")

    _draw_all({"one": fine, "two": fine, "three": fine}, tmp_path, no_progress)
    assert {file.name for file in tmp_path.iterdir()} == {
        f"{name}.{suffix}" for name in ("one", "two", "three") for suffix in ("pdf", "png")
    }
    with pytest.raises(RuntimeError, match="no ink"):
        _draw_all({"four": fine, "five": faulty}, tmp_path, no_progress)
    capfd.readouterr()  # the other process told it, too
