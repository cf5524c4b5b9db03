"""The resolved recipe says everything, and says the same."""

from __future__ import annotations

import copy
import tomllib
from pathlib import Path
from typing import Any

import pytest
from helpers import CHECKOUT, demo_recipe

from kspipe.recipe import Recipe, load_recipe, parse_recipe
from kspipe.recipe.models import ComparisonTable
from kspipe.recipe.resolved import resolved_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("resolved recipes")


@pytest.fixture(scope="module")
def good(folder) -> dict[str, Any]:
    return demo_recipe(folder)


def variants() -> dict[str, dict[str, Any]]:
    """Changes of the short recipe that touch every way to write a value."""
    return {
        "short": {},
        "whole numbers": {"foreground": {"ebv": 0}, "metallicity": {"oh": 9}},
        "numbers as text": {"metallicity": {"oh": "8.750", "gradient": "-0.045dex/kpc"}},
        "per r25": {"metallicity": {"oh": "8.69 +- 0.05", "gradient": "-0.3 dex/r25"}},
        "quotes": {"galaxy_name": 'Orrinda, "the disc" \\ 3 %'},
        "letters": {"galaxy_name": "Orrindà ± 0.1"},
        "ratio of one": {"gas": {"alpha_co": "bolatto2013_galactic", "line_ratio": 1}},
        "beam in pc": {"grid": {"beam": "700 pc", "size": "4 arcmin", "minimum_coverage": 0.7}},
        "common beam": {"grid": {"beam": "common", "pixels_per_beam": 4}},
        "no relations": {"relations": None},
        "low_snr": {"comparison": {"low_snr": 5}},
    }


def with_variant(good: dict[str, Any], name: str) -> dict[str, Any]:
    changes = dict(variants()[name])
    called = changes.pop("galaxy_name", good["galaxy"]["name"])
    return {**good, "galaxy": {**good["galaxy"], "name": called}, **changes}


def meaning(recipe: Recipe) -> dict[str, Any]:
    """What a recipe makes kspipe do, free of how it was written."""

    def plain(value: Any) -> Any:
        if isinstance(value, dict):
            return {key: plain(entry) for key, entry in value.items() if key != "text"}
        return plain(vars(value)) if hasattr(value, "error") else value

    dump = recipe.model_dump(exclude={"path", "maps"})
    for relation in dump["relations"].values():
        relation.pop("defaults")  # a default that was written out is typed
    dump["grid"]["beam"] = recipe.grid.fwhm_arcsec(recipe.galaxy.pc_per_arcsec)
    maps = {
        name: (table.request(name), plain(table.nii_ratio), plain(table.as_24um))
        for name, table in recipe.maps.items()
    }
    return plain(dump) | {"maps": maps}


@pytest.mark.parametrize("name", variants())
def test_a_resolved_recipe_is_the_same_recipe(good, folder, tmp_path, name) -> None:
    raw = with_variant(good, name)
    recipe = parse_recipe({k: v for k, v in raw.items() if v is not None}, folder=folder)
    text = resolved_recipe(recipe, {"hi": {"unit": "'K km/s'", "beam": "13.4 arcsec"}})
    # In another folder, so that its paths have to be absolute.
    (tmp_path / "recipe.toml").write_text(text, encoding="utf-8")
    again = load_recipe(tmp_path / "recipe.toml")
    assert meaning(again) == meaning(recipe)
    # Once resolved it stays as it is.
    assert tomllib.loads(resolved_recipe(again, {})) == tomllib.loads(text)


SHIPPED = sorted((CHECKOUT / "recipes").glob("*.toml"))


@pytest.mark.parametrize("file", SHIPPED, ids=lambda file: file.stem)
def test_shipped_recipes_resolve_to_themselves(file, tmp_path) -> None:
    recipe = load_recipe(file)
    (tmp_path / "recipe.toml").write_text(resolved_recipe(recipe, {}), encoding="utf-8")
    assert meaning(load_recipe(tmp_path / "recipe.toml")) == meaning(recipe)


def test_every_default_is_written_and_marked(good, folder) -> None:
    recipe = parse_recipe(good, folder=folder)
    found = {"hi": {"beam": "13.4 x 10.6 arcsec from header BMAJ", "unit": "'JY/BEAM*M/S'"}}
    text = resolved_recipe(recipe, found)
    lines = text.splitlines()
    for line in (
        "pixels_per_beam = 3.0  # default",
        "minimum_coverage = 0.5  # default",
        'velocity_convention = "optical"  # default',
        'uv = "bianchi2017"  # default',
        f"low_snr = {ComparisonTable().low_snr!r}  # default",
        "anchor_oh = 8.69  # default",
        "# beam: 13.4 x 10.6 arcsec from header BMAJ",
        "# unit: 'JY/BEAM*M/S'",
    ):
        assert line in lines
    # What was typed bears no comment.
    assert 'distance = "8.6 +- 0.4 Mpc"' in lines
    assert "clumping = 5.0" in lines
    raw = tomllib.loads(text)
    for table in ("hi", "co", "fuv", "ir"):
        assert Path(raw["maps"][table]["file"]).is_absolute()
        assert "averages_pixels" in raw["maps"][table]


@pytest.mark.parametrize("name", ["whole numbers", "letters"])
def test_a_reduction_can_be_compared_however_its_numbers_were_typed(
    good, folder, tmp_path, name
) -> None:
    """The folder's own recipe must not look like another one to the next stage."""
    raw = copy.deepcopy(with_variant(good, name))
    raw["grid"] = {"beam": "40 arcsec"}
    reduce_maps(parse_recipe(raw, folder=folder), tmp_path / "out")
    assert compare_relations(tmp_path / "out")


@pytest.mark.parametrize("name", variants())
def test_the_resolved_recipe_asks_for_the_same_products(good, folder, tmp_path, name) -> None:
    """Fingerprints decide on reuse: those of the resolved recipe are those of the typed one."""
    raw = {k: v for k, v in with_variant(good, name).items() if v is not None}
    recipe = parse_recipe(raw, folder=folder)
    (tmp_path / "recipe.toml").write_text(resolved_recipe(recipe, {}), encoding="utf-8")
    again = load_recipe(tmp_path / "recipe.toml")
    assert make_plan(again).prints == make_plan(recipe).prints
