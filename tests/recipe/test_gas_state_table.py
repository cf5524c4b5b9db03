"""The tables on the state of the gas and on the inside of a beam: what they hold and refuse."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any

import pytest
from helpers import CHECKOUT, demo_recipe

from kspipe.core.errors import RecipeError
from kspipe.recipe import Recipe, load_recipe, parse_recipe
from kspipe.recipe.resolved import resolved_recipe

GIVEN = {"density": "100 cm-3", "field": 1, "cosmic_rays": 1.0, "clumping": 5}
FINER = {"tracer": "CO(2-1)", "file": "co.fits", "noise": "0.5 K km/s"}


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("gas state recipes")


def parse(folder: Path, state: dict[str, Any] | None = None, **more: Any) -> Recipe:
    tables = {} if state is None else {"gas_state": state}
    return parse_recipe(demo_recipe(folder, **tables, **more), folder=folder)


def faults(folder: Path, state: dict[str, Any], **more: Any) -> list[str]:
    with pytest.raises(RecipeError) as caught:
        parse(folder, state, **more)
    return [str(fault) for fault in caught.value.faults]


def test_without_the_tables_nothing_is_told(folder) -> None:
    recipe = parse(folder)
    assert recipe.gas_state is None
    assert recipe.inside_beam is None


def test_the_choices_that_rest_on_nothing_must_be_typed(folder) -> None:
    found = faults(folder, {})
    for key in ("density", "field", "cosmic_rays", "clumping"):
        assert any(f"[gas_state.{key}] the key is missing" in fault for fault in found), key


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"density": 100}, "has no unit (expected cm-3)"),
        ({"density": "-5 cm-3"}, "expected one positive density"),
        ({"density": "100 +- 10 cm-3"}, "without an error"),
        ({"density": "two phase"}, '"two-phase"'),
        ({"field": 0}, 'expected a positive number, or "star formation"'),
        ({"field": "sfr"}, '"star formation"'),
        ({"cosmic_rays": -1}, 'or "field"'),
        ({"cosmic_rays": True}, 'or "field"'),
        ({"clumping": 0.5}, 'a number from 1 up, or "beam" or "finer map"'),
        ({"density_clumping": 0.1}, "greater than or equal to 1"),
        ({"jeans": "box"}, "'cube', 'virial' or 'sphere'"),
        ({"turbulence": ["krumholz2006"]}, 'did you mean "krumholz2005"'),
        ({"linewidth": "solomon1978", "cloud_radius": "30 pc"}, 'did you mean "solomon1987"'),
        ({"shielded_depth": -2}, 'or "complex"'),
        ({"denisty": "100 cm-3"}, 'did you mean "density"'),
        ({"linewidth": {"map": "none.fits", "is": "sigma"}}, "does not exist"),
        ({"linewidth": {"map": "hi.fits"}}, "[gas_state.linewidth.is] the key is missing"),
        # What belongs together.
        ({"density": "hydrostatic"}, 'type midplane_density = "0.05 Msun/pc3"'),
        ({"density": "larger"}, "needs the density of stars"),
        ({"midplane_density": "0.05 Msun/pc3"}, "takes no density of stars"),
        ({"clumping": "finer map"}, "needs the finer map"),
        ({"finer_map": FINER}, 'but clumping = "5.0"'),
        ({"linewidth": "solomon1987"}, 'type cloud_radius = "30 pc"'),
        ({"cloud_radius": "30 pc"}, "a cloud radius without a linewidth"),
        (
            {"clumping": "finer map", "finer_map": FINER | {"noise": "measure"}},
            "[gas_state.finer_map.noise] noise looks clumpy",
        ),
        (
            {"clumping": "finer map", "finer_map": FINER | {"tracer": "24um"}},
            "24um is no gas",
        ),
        (
            {"clumping": "finer map", "finer_map": FINER | {"file": "nowhere.fits"}},
            "[gas_state.finer_map.file]",
        ),
    ],
    ids=lambda value: str(value)[:40],
)
def test_one_clear_message(folder, change: dict[str, Any], message: str) -> None:
    found = faults(folder, GIVEN | change)
    assert len(found) == 1
    assert message in found[0]
    assert found[0].startswith("[gas_state.")


@pytest.mark.parametrize(
    "scatter", ["0 dex", "2 dex", "-0.3 dex", "0.3 +- 0.1 dex", 0.3, "0.3 kpc"]
)
def test_the_scatter_inside_a_beam(folder, scatter: object) -> None:
    with pytest.raises(RecipeError, match=r"inside_beam\.scatter.*dex"):
        parse(folder, None, inside_beam={"scatter": scatter})


def variants() -> dict[str, dict[str, Any]]:
    return {
        "shortest": {},
        "hydrostatic": {
            "density": "hydrostatic",
            "midplane_density": "0.05 Msun/pc3",
            "field": "star formation",
            "cosmic_rays": "field",
            "clumping": "beam",
        },
        "motions": {
            "linewidth": "solomon1987",
            "cloud_radius": "30 pc",
            "turbulence": ["krumholz2005", "padoan2012"],
            "plasma_beta": 0.5,
            "shielded_depth": 5,
        },
        "maps": {
            "linewidth": {"map": "hi.fits", "is": "fwhm", "error": "0.5 km/s"},
            "clumping": "finer map",
            "finer_map": FINER | {"noise": {"file": "hi_noise.fits", "is": "sigma"}},
        },
    }


@pytest.mark.parametrize("name", variants())
def test_the_resolved_recipe_says_the_same(folder, tmp_path, name: str) -> None:
    recipe = parse(folder, GIVEN | variants()[name], inside_beam={"scatter": "0.35 dex"})
    text = resolved_recipe(recipe, {})
    path = tmp_path / "recipe.toml"
    path.write_text(text, encoding="utf-8")
    again = load_recipe(path)
    assert again.gas_state == recipe.gas_state
    assert again.inside_beam == recipe.inside_beam
    assert tomllib.loads(resolved_recipe(again, {})) == tomllib.loads(text)
    table = tomllib.loads(text)["gas_state"]
    assert table["jeans"] == "cube"
    assert 'jeans = "cube"  # default' in text


def test_the_clumping_of_the_beam_in_a_relation(folder, tmp_path) -> None:
    # 500 pc: 5^(log10 5), between 1 at 100 pc and 5 at 1 kpc.
    relations = {
        "beam": {"law": "krumholz2009", "clumping": "beam"},
        "typed": {"law": "krumholz2009", "clumping": 5},
    }
    recipe = parse(folder, relations=relations, grid={"beam": "500 pc"})
    assert recipe.relations["beam"].parameters["clumping"] == pytest.approx(3.0802, rel=1e-4)
    assert recipe.relations["typed"].parameters["clumping"] == 5.0
    assert "clumping" in recipe.relations["beam"].defaults
    path = tmp_path / "recipe.toml"
    path.write_text(resolved_recipe(recipe, {}), encoding="utf-8")
    again = load_recipe(path)
    assert again.relations["beam"].parameters == recipe.relations["beam"].parameters


def test_no_clumping_of_a_beam_that_is_not_known_yet(folder) -> None:
    relations = {"beam": {"law": "krumholz2009", "clumping": "beam"}}
    with pytest.raises(RecipeError, match=r"relations\.beam\.clumping.*type a number") as caught:
        parse(folder, relations=relations, grid={"beam": "common"})
    assert len(caught.value.faults) == 1


def test_the_long_recipe_shows_keys_that_there_are(folder) -> None:
    text = (CHECKOUT / "recipes" / "orrinda_full.toml").read_text(encoding="utf-8")
    block = text[text.index("# [gas_state]") :]
    shown = tomllib.loads(re.sub(r"^# (?=\[|[a-z_]+ = )", "", block, flags=re.MULTILINE))
    finer = shown["gas_state"].pop("finer_map") | {"file": "co.fits"}
    alternatives = {"density": "larger", "clumping": "finer map"}
    recipe = parse(
        folder,
        shown["gas_state"] | alternatives | {"finer_map": finer},
        inside_beam=shown["inside_beam"],
    )
    assert recipe.gas_state is not None
    assert recipe.inside_beam is not None
    assert shown["gas_state"]["density"] == "100 cm-3"
