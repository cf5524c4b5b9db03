"""What relations ask of a recipe is said with the key to type, before any map is opened."""

from __future__ import annotations

import copy
from pathlib import Path
from typing import Any

import pytest
from helpers import demo_recipe

from kspipe.core.errors import InputError, RecipeError
from kspipe.recipe import load_recipe, parse_recipe
from kspipe.recipe.resolved import resolved_recipe
from kspipe.recipe.shelf import explain, list_family
from kspipe.relations import LAWS

MIDPLANE = {"density": "0.05 +- 0.02 Msun/pc3"}
LAYER = {"scale_height": "300 pc", "definition": "sech2(z/z0)", "dark_matter": "0 Msun/pc3"}
FIELD = {"field": 1.0, "unit": "Draine"}
CURVE = {"radius_kpc": [0.5, 2.0, 8.0], "velocity_km_s": [60.0, 150.0, 180.0]}
K13 = {"k": {"law": "krumholz2013", "clumping": 5}}


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("needs")


@pytest.fixture(scope="module")
def good(folder) -> dict[str, Any]:
    return demo_recipe(folder)


def parse(good: dict[str, Any], folder: Path, **tables: Any) -> Any:
    raw = copy.deepcopy(good) | tables
    return parse_recipe({k: v for k, v in raw.items() if v is not None}, folder=folder)


def faults_of(good: dict[str, Any], folder: Path, **tables: Any) -> dict[str, str]:
    with pytest.raises(RecipeError) as caught:
        parse(good, folder, **tables)
    assert caught.value.exit_code == 2
    return {fault.where: str(fault) for fault in caught.value.faults}


def test_a_whole_recipe_reads_and_comes_back(good, folder) -> None:
    recipe = parse(good, folder, relations=K13, midplane=MIDPLANE, radiation_field=FIELD,
                   rotation=CURVE)  # fmt: skip
    assert recipe.midplane.density.value == 0.05
    assert recipe.radiation_field.field.value == 1.0
    text = resolved_recipe(recipe, {})
    path = folder / "again.toml"
    path.write_text(text, encoding="utf-8")
    again = load_recipe(path)
    for name in ("midplane", "radiation_field", "rotation"):
        assert getattr(again, name) == getattr(recipe, name)
    assert again.relations["k"].parameters == recipe.relations["k"].parameters


@pytest.mark.parametrize(
    ("law", "tables", "says"),
    [
        (K13, {"radiation_field": FIELD}, ["midplane", "[midplane]", "krumholz2009"]),
        (K13, {"midplane": MIDPLANE}, ["radiation", "[radiation_field]", "ostriker2010"]),
        (
            {"k": {"law": "leroy2008_pressure", "scale_length": 3, "depletion_time": 2}},
            {},
            ["stellar surface density", "[stars]", "mckee2010"],
        ),
    ],
)
def test_a_missing_input_is_named_with_what_to_add(good, folder, law, tables, says) -> None:
    fault = faults_of(good, folder, relations=law, **tables)["relations.k.law"]
    for words in says:
        assert words in fault
    assert "relations that do without: " in fault
    # Those that it names do without indeed.
    named = fault.split("do without: ")[1].split(", ")
    given = {"sigma_gas", "sigma_mol", "oh"} | ({"g0"} if "radiation_field" in tables else set())
    given |= {"rho_sd"} if "midplane" in tables else set()
    assert set(named) == {key for key in LAWS.keys() if set(LAWS.get(key).needs) <= given}  # noqa: SIM118


def test_molecular_gas_cannot_be_had_of_atomic_gas_alone(good, folder) -> None:
    maps = {name: table for name, table in good["maps"].items() if name != "co"}
    relations = {"t": {"law": "leroy2013_depletion"}}
    fault = faults_of(good, folder, maps=maps, gas="atomic only", relations=relations)
    assert "CO map" in fault["relations.t.law"]


def test_the_density_of_stars_needs_stars(good, folder) -> None:
    fault = faults_of(good, folder, relations={}, midplane=LAYER)["midplane.scale_height"]
    assert "[stars]" in fault
    assert 'density = "0.05 Msun/pc3"' in fault


@pytest.mark.parametrize(
    ("given", "says"),
    [
        ({}, "not chosen"),
        ({"depletion_time": 2, "efficiency": 0.01}, "both depletion_time and efficiency are given"),
    ],
)
def test_stars_of_a_fraction_are_a_choice(good, folder, given, says) -> None:
    relations = {"m": {"law": "mckee2010", "clumping": 5, **given}}
    fault = faults_of(good, folder, relations=relations)["relations.m.depletion_time"]
    assert says in fault
    assert "type one of depletion_time = ..., efficiency = ..." in fault
    chosen = {"m": {"law": "mckee2010", "clumping": 5, "efficiency": 0.01}}
    parameters = parse(good, folder, relations=chosen).relations["m"].parameters
    assert parameters["efficiency"] == 0.01
    assert "depletion_time" not in parameters


@pytest.mark.parametrize(
    ("table", "value", "where", "says"),
    [
        ("midplane", {}, "midplane", "scale_height"),
        ("midplane", {**MIDPLANE, **LAYER}, "midplane", "excludes"),
        ("midplane", {"density": "0.05 Msun/pc2"}, "midplane.density", "Msun/pc3"),
        ("midplane", {"density": "-1 Msun/pc3"}, "midplane.density", "positive"),
        ("midplane", {"scale_height": "300 pc"}, "midplane", "definition, dark_matter"),
        ("midplane", {**LAYER, "definition": "exp"}, "midplane.definition", "sech2(z/z0)"),
        ("radiation_field", {}, "radiation_field", "either"),
        ("radiation_field", {"field": 1.0}, "radiation_field", "unit"),
        ("radiation_field", {"field": 1.0, "unit": "Drain"}, "radiation_field.unit", "Draine"),
        ("radiation_field", {"field": 0.0, "unit": "Habing"}, "radiation_field.field", "positive"),
        ("radiation_field", {"origin": "the sky"}, "radiation_field.origin", "star formation"),
        ("radiation_field", {"fields": 1.0}, "radiation_field.fields", "did you mean"),
        ("rotation", {**CURVE, "radius_kpc": [1.0, 2.0]}, "rotation.radius_kpc", "3"),
        ("rotation", {**CURVE, "radius_kpc": [1.0, 2.0, 3.0, 4.0]}, "rotation", "4 radii"),
        ("rotation", {**CURVE, "radius_kpc": [2.0, 1.0, 3.0]}, "rotation", "rise"),
        ("rotation", {**CURVE, "velocity_km_s": [0.0, 1.0, 3.0]}, "rotation", "positive"),
        ("rotation", {**CURVE, "velocity_km_s": [1.0, 2.0, float("nan")]},
         "rotation.velocity_km_s", "finite"),
    ],
)  # fmt: skip
def test_faults_of_the_tables(good, folder, table, value, where, says) -> None:
    faults = faults_of(good, folder, **{table: value})
    assert says in faults[where]


# --- The shelf -----------------------------------------------------------------------------------


def test_relations_are_listed_and_explained() -> None:
    assert ("relations", f"{len(LAWS.keys())} records") in list_family()
    rows = list_family("relations")
    assert [row[0] for row in rows] == LAWS.keys()
    for law in LAWS:
        text = dict(explain(law.key))
        assert text["formula"] == law.formula
        assert ("from memory" in text["certainty"]) == (law.certainty == "from memory")
        assert "nan" not in text["worked number"]
        assert law.statistic in text["predicts"]
        for parameter in law.parameters:
            assert parameter.meaning in text["parameters"]
    assert dict(explain("bolatto2013_galactic"))["record"].endswith("alpha_co")


def test_worked_numbers_are_the_papers() -> None:
    # Leroy et al. 2013: 10 Msun/pc2 in 2.2 Gyr.
    assert "Sigma_SFR = 0.0045455" in dict(explain("leroy2013_depletion"))["worked number"]


def test_a_near_relation_is_offered() -> None:
    with pytest.raises(InputError, match='did you mean "krumholz2013"'):
        explain("krumholz2014")
    with pytest.raises(InputError, match='did you mean "relations"'):
        list_family("relation")
