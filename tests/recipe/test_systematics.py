"""The table of widths: read, kept, and refused where it makes no sense."""

from __future__ import annotations

import pytest
from helpers import demo_recipe

from kspipe.core.errors import RecipeError
from kspipe.recipe import load_recipe, parse_recipe
from kspipe.recipe.resolved import resolved_recipe


def test_widths_are_read_and_kept(tmp_path):
    table = {"alpha_co": "0.15 dex", "helium": "2 %", "diffuse": "30 %"}
    recipe = parse_recipe(demo_recipe(tmp_path, systematics=table), folder=tmp_path)
    assert recipe.systematics.alpha_co.value == 0.15
    assert recipe.systematics.helium.value == 0.02
    assert recipe.systematics.imf is None
    path = tmp_path / "resolved.toml"
    path.write_text(resolved_recipe(recipe, {}))
    assert load_recipe(path).systematics == recipe.systematics


def test_no_table_is_none(tmp_path):
    recipe = parse_recipe(demo_recipe(tmp_path), folder=tmp_path)
    assert recipe.systematics is None
    assert "systematics" not in resolved_recipe(recipe, {})


@pytest.mark.parametrize(
    ("key", "value", "words"),
    [
        ("alpha_co", "0.2", "has no unit"),
        ("alpha_co", "2 dex", "from 0"),
        ("alpha_co", "-0.1 dex", "from 0"),
        ("helium", "0.02", "not a percentage"),
        ("diffuse", "80 %", "50 %"),
        ("colour", "0.1 dex", "is not a key"),
    ],
)
def test_nonsense_is_refused(tmp_path, key, value, words):
    with pytest.raises(RecipeError, match=words) as caught:
        parse_recipe(demo_recipe(tmp_path, systematics={key: value}), folder=tmp_path)
    assert f"systematics.{key}" in str(caught.value)
