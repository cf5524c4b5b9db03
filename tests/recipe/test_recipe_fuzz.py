"""Whatever stands in a recipe: a `Recipe`, or a `RecipeError` with full keys."""

from __future__ import annotations

import copy
import datetime as dt
from pathlib import Path
from typing import Any

import pytest
from helpers import demo_recipe
from hypothesis import example, given, settings
from hypothesis import strategies as st

from kspipe.core.errors import RecipeError
from kspipe.recipe import Recipe, parse_recipe

# Every kind of value that TOML can hold.
SCALARS = st.one_of(
    st.booleans(),
    st.integers(-(2**63), 2**63 - 1),
    st.floats(),
    st.text(max_size=12),
    st.sampled_from(
        [
            "measure", "atomic only", "common", "HI", "CO(2-1)", "24um", "15 arcsec", "8 Mpc",
            "1 K km/s", "0.1 MJy/sr", "5 %", "hi.fits", "krumholz2009", "-0.04 dex/r25", "inf Mpc",
            "1e999 deg", "12 x 10 arcsec, pa 3 deg", "48.1 -27.3 deg", "beam", "sigma",
        ]
    ),
    st.just(dt.datetime(1979, 5, 27, tzinfo=dt.UTC)),
    st.just(dt.date(1979, 5, 27)),
    st.just(dt.time(7, 32)),
)  # fmt: skip
WORDS = st.sampled_from(
    [
        "galaxy", "grid", "maps", "metallicity", "foreground", "gas", "star_formation", "relations",
        "comparison", "seed", "name", "centre", "distance", "inclination", "position_angle", "beam",
        "hi", "tracer", "file", "noise", "is", "level", "correlated", "unit", "zeros", "oh", "map",
        "gradient", "ebv", "alpha_co", "line_ratio", "calibration", "law", "clumping", "size",
        "pedestal_error", "calibration_error", "hdu", "nii_ratio", "as_24um", "r25", "velocity",
    ]
)  # fmt: skip
KEYS = st.one_of(WORDS, st.text(max_size=6))
VALUES = st.recursive(
    SCALARS,
    lambda inner: st.lists(inner, max_size=3) | st.dictionaries(KEYS, inner, max_size=4),
    max_leaves=12,
)

fuzz = settings(derandomize=True, deadline=None, max_examples=80)


def check(raw: dict[str, Any], folder: Path) -> None:
    """Neither a crash nor a fault without place and words."""
    try:
        recipe = parse_recipe(raw, folder=folder)
    except RecipeError as error:
        faults = error.faults
    else:
        assert isinstance(recipe, Recipe)
        for name, table in recipe.maps.items():
            table.request(name)  # what is valid can be asked for
        return
    assert faults
    assert all(isinstance(fault.where, str) and fault.what for fault in faults)


@fuzz
@given(raw=st.dictionaries(KEYS, VALUES, max_size=6))
def test_nested_dictionaries_of_any_kind(raw) -> None:
    check(raw, Path("/nowhere"))


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("fuzz")


@pytest.fixture(scope="module")
def good(folder) -> dict[str, Any]:
    return demo_recipe(folder)


def paths(raw: dict[str, Any], above: tuple[str, ...] = ()) -> list[tuple[str, ...]]:
    """Every key of a recipe, tables included."""
    found = []
    for key, value in raw.items():
        found.append((*above, key))
        if isinstance(value, dict):
            found += paths(value, (*above, key))
    return found


@fuzz
@given(data=st.data())
def test_one_or_two_values_of_a_good_recipe_replaced(data, good, folder) -> None:
    raw = copy.deepcopy(good)
    for _ in range(data.draw(st.integers(1, 2))):
        *tables, key = data.draw(st.sampled_from(paths(raw)))
        table = raw
        for name in tables:
            table = table[name]
        table[key] = data.draw(VALUES)
    check(raw, folder)


@pytest.mark.parametrize(
    ("path", "value"),
    [
        # Found by the test above: each was an exception of another kind once.
        (("maps", "hi", "tracer"), ["HI"]),
        (("maps", "hi", "tracer"), {"is": "HI"}),
        (("relations", "shielding_kpc", "law"), ["krumholz2009"]),
        (("relations", "shielding_kpc", "law"), {}),
        (("maps", "hi", "pedestal_error"), "measure"),
        (("maps", "hi", "pedestal_error"), {"level": "measure"}),
    ],
)
def test_values_of_another_kind(good, folder, path, value) -> None:
    raw = copy.deepcopy(good)
    *tables, key = path
    table = raw
    for name in tables:
        table = table[name]
    table[key] = value
    with pytest.raises(RecipeError, match=r"\.".join(path)):
        parse_recipe(raw, folder=folder)


@settings(fuzz, max_examples=40)
@given(key=st.text(min_size=1, max_size=10))
@example(key="")
@example(key="a.b")
@example(key="../../etc")
@example(key="hi fits")
def test_names_of_maps_and_relations_are_safe_as_file_names(key, good, folder) -> None:
    for table in ("maps", "relations"):
        raw = copy.deepcopy(good)
        first = next(iter(raw[table].values()))
        raw[table] = {key: first}
        try:
            parse_recipe(raw, folder=folder)
        except RecipeError as error:
            where = {fault.where for fault in error.faults}
        else:
            where = set()
        if not key.isidentifier():
            assert f"{table}.{key}" in where
