"""The maps of the state of the gas: what is drawn, and what is said beside it."""

import warnings
from dataclasses import replace

import numpy as np
import pytest
from helpers import demo_recipe
from matplotlib.image import AxesImage
from matplotlib.patches import PathPatch

from kspipe.core.errors import KspipeWarning
from kspipe.products.figures import _drawings
from kspipe.products.read import read_products, read_recipe
from kspipe.products.state_figure import draw_gas_state
from kspipe.products.style import figure_style
from kspipe.recipe import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps


@pytest.fixture(scope="module")
def compared(tmp_path_factory):
    """A product folder of few pixels, in which unshielded gas has no cold solution."""
    folder = tmp_path_factory.mktemp("state figure")
    state = {"density": "40 cm-3", "field": 1.0, "cosmic_rays": 1.0, "clumping": 5}
    grid = {"beam": "40 arcsec", "size": "5 arcmin"}
    recipe = demo_recipe(folder, gas_state=state, grid=grid, relations=None)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", KspipeWarning)
        reduce_maps(parse_recipe(recipe, folder=folder), folder / "out")
        compare_relations(folder / "out")
    return folder / "out"


def test_two_quantities_of_two_states(compared) -> None:
    products = read_products(compared, read_recipe(compared))
    with figure_style():
        figure = draw_gas_state(products, compared)
        figure.canvas.draw()
    maps = [axes for axes in figure.axes if axes.get_title()]
    assert [axes.get_title().split(" (")[0] for axes in maps] == [
        "Unshielded gas, temperature",
        "Shielded gas, temperature",
        "Unshielded gas, Jeans mass",
        "Shielded gas, Jeans mass",
    ]
    images = [next(c for c in axes.get_children() if isinstance(c, AxesImage)) for axes in maps]
    # One range of colours for both maps of a quantity.
    assert images[0].norm is images[1].norm
    assert images[2].norm is images[3].norm
    # No pixel of unshielded gas is cold at 40 per cm3: hatched, not drawn as something.
    assert np.isnan(np.asarray(images[0].get_array().filled(np.nan), dtype=float)).all()
    assert any(isinstance(c, PathPatch) and c.get_hatch() for c in maps[0].get_children())
    said = " ".join(text.get_text() for text in figure.texts).replace("\n", " ")
    assert "model-implied" in said
    assert "40 cm$^{-3}$" in said
    assert "hatched: no cold solution" in said


def test_it_is_among_the_figures(compared) -> None:
    products = read_products(compared, read_recipe(compared))
    assert "gas_state" in _drawings(products, compared)
    without = products.recipe.model_copy(update={"gas_state": None})
    assert "gas_state" not in _drawings(replace(products, recipe=without), compared)
