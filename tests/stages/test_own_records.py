"""Straight lines and power laws of the user's own, with their citation."""

from __future__ import annotations

import json
import pickle
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from demo_disc import converted, disc_of, matched_maps, recipe_of, shared_folder

from kspipe.conversions import ALPHA_CO, LINE_RATIO, STAR_FORMATION, OwnForm, own_record
from kspipe.core.errors import KspipeWarning, RecipeError
from kspipe.recipe import load_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps

GAS = {"alpha_co": "bolatto2013_galactic", "line_ratio": 0.65}
PAPER = "Someone et al. 2031, ApJ 1, 1, Eq. 2"


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


def own(**table: Any) -> dict[str, dict[str, Any]]:
    return {"mine": {"citation": PAPER, **table}}


POWER_ALPHA = own(
    family="alpha_co",
    form="power law",
    coefficient=4.35,
    exponents={"z_prime": -1.6},
    helium=1.36,
    ranges={"z_prime": [0.2, 2.0]},
)


def close(got: np.ndarray, expected: np.ndarray) -> None:
    np.testing.assert_array_equal(np.isnan(got), np.isnan(expected))
    np.testing.assert_allclose(got, expected, rtol=1e-12)


def test_a_published_form_typed_again_gives_the_same(out) -> None:
    # Sun et al. 2020: alpha_CO = 4.35 Z'^-1.6.
    gas = {**GAS, "alpha_co": "mine"}
    typed = converted(out, gas=gas, records=POWER_ALPHA)
    published = converted(out, gas={**GAS, "alpha_co": "sun2020"})
    for name in ("sigma_mol", "sigma_mol_error", "flags"):
        close(typed[name].astype(float), published[name].astype(float))


def test_one_without_helium_is_brought_to_helium(out) -> None:
    hydrogen = {"mine": {**POWER_ALPHA["mine"], "helium": 1.0, "coefficient": 3.2}}
    got = converted(out, gas={**GAS, "alpha_co": "mine"}, records=hydrogen)["sigma_mol"]
    with_helium = converted(out, gas={**GAS, "alpha_co": "mine"}, records=POWER_ALPHA)["sigma_mol"]
    close(got, with_helium * 3.2 * 1.36 / 4.35)


def test_a_straight_line_of_oh(out) -> None:
    line = own(family="alpha_co", form="linear", zero=50.0, slopes={"oh": -5.3}, helium=1.36)
    got = converted(out, gas={**GAS, "alpha_co": "mine"}, records=line)
    base = converted(out)
    close(got["sigma_mol"], base["sigma_mol"] * (50 - 5.3 * base["metallicity"]) / 4.35)


def test_a_line_ratio_of_ones_own(out) -> None:
    # Schinnerer & Leroy 2024, Table 1.
    ratio = own(
        family="line_ratio",
        form="power law",
        lines=["CO(2-1)", "CO(1-0)"],
        coefficient=0.65 * 0.018**-0.125,
        exponents={"sigma_sfr": 0.125},
        bounds=[0.35, 1.0],
    )
    typed = converted(out, gas={**GAS, "line_ratio": "mine"}, records=ratio)
    published = converted(out, gas={**GAS, "line_ratio": "schinnerer2024_r21"})
    close(typed["sigma_mol"], published["sigma_mol"])
    close(typed["sigma_mol_error"], published["sigma_mol_error"])


def test_a_calibration_of_ones_own(out) -> None:
    # Leroy et al. 2008, Appendix D.
    linear = own(
        family="star_formation", form="linear", slopes={"FUV": 8.1e-2, "24um": 3.2e-3}, imf="Kroupa"
    )
    table = {"calibration": "mine", "maps": ["fuv", "ir"]}
    got = converted(out, star_formation=table, records=linear)
    close(got["sigma_sfr"], converted(out)["sigma_sfr"])
    # A power law, and another mass function: 0.64509 Kroupa per Salpeter (a worked value).
    power = own(
        family="star_formation",
        form="power law",
        coefficient=0.01,
        exponents={"24um": 0.9},
        imf="Salpeter",
    )
    table = {"calibration": "mine", "maps": ["ir"]}
    got = converted(out, star_formation=table, records=power)["sigma_sfr"]
    stored = matched_maps(out)[1]["ir"].value * np.cos(np.radians(41))
    expected = 0.64509 * 0.01 * np.where(stored > 0, stored, np.nan) ** 0.9
    seen = np.isfinite(got)
    np.testing.assert_allclose(got[seen], expected[seen], rtol=1e-4)


def test_a_metallicity_calibration_of_ones_own(out) -> None:
    # Pettini & Pagel 2004, Eq. 3, typed again.
    record = own(family="strong_lines", form="linear", zero=8.73, slopes={"o3n2": -0.32})
    lines = {"o3n2": {"radius": [0, 5], "per": "kpc", "value": [0.0, 1.0]}}
    got = converted(out, metallicity={"calibration": "mine", "lines": lines}, records=record)
    published = {"calibration": "pettini2004_o3n2", "lines": lines}
    close(got["metallicity"], converted(out, metallicity=published)["metallicity"])


def test_the_citation_goes_wherever_the_record_goes(out) -> None:
    recipe = recipe_of(out, gas={**GAS, "alpha_co": "mine"}, records=POWER_ALPHA)
    matched_maps(out)
    reduce_maps(recipe, out / "run", overwrite=True)
    header = fits.getheader(out / "run" / "maps" / "sigma_mol.fits")
    assert f"mine ({PAPER}, typed in the recipe): alpha_CO = 4.35 z_prime^-1.6" in " ".join(
        " ".join(header["HISTORY"]).split()
    )
    compare_relations(out / "run", overwrite=True)
    summary = json.loads((out / "run" / "summary.json").read_text())
    assert summary["records"]["mine"]["certainty"] == "the user's own"
    assert PAPER in summary["sources"].values()
    # The written recipe holds the record.
    again = load_recipe(out / "run" / "recipe.toml")
    assert again.gas == recipe.gas
    assert again.records == recipe.records


def test_own_records_travel(out) -> None:
    form = OwnForm(True, 4.35, (("sigma_total", -0.3), ("z_prime", -1.0)))
    alpha = own_record("alpha_co", "mine", form, PAPER)
    sfr = own_record("star_formation", "mine", OwnForm(False, 0.0, (("FUV", 0.1),)), PAPER)
    ratio = own_record("line_ratio", "mine", OwnForm(True, 0.7, (("sigma_sfr", 0.1),)), PAPER)
    for record in (alpha, sfr, ratio):
        assert pickle.loads(pickle.dumps(record)) == record
    # A choice by record and a choice by key are one.
    assert ALPHA_CO.get(alpha) is alpha
    assert STAR_FORMATION.get(sfr) is sfr
    assert LINE_RATIO.get(ratio) is ratio


@pytest.mark.slow
def test_one_of_the_total_is_solved(out) -> None:
    record = own(
        family="alpha_co",
        form="power law",
        coefficient=10.0,
        exponents={"sigma_total": -0.3},
        helium=1.36,
    )
    maps = {**recipe_raw(out)["maps"]}
    maps["nir"] = {**maps["ir"], "tracer": "3.6um"}
    stars = {"record": "leroy2019_36um", "map": "nir"}
    got = converted(out, gas={**GAS, "alpha_co": "mine"}, records=record, maps=maps, stars=stars)
    base = converted(out)["sigma_mol"] / 4.35
    seen = np.isfinite(got["sigma_mol"]) & (base > 0)
    total = (got["sigma_star"] + got["sigma_atom"] + got["sigma_mol"])[seen]
    # At the solution the equation holds.
    np.testing.assert_allclose(got["sigma_mol"][seen], 10 * total**-0.3 * base[seen], rtol=1e-8)


def recipe_raw(out: Path) -> dict[str, Any]:
    from helpers import demo_recipe

    return demo_recipe(out)


def test_a_power_of_what_is_not_positive_is_flagged_and_counted(out) -> None:
    record = own(
        family="alpha_co",
        form="power law",
        coefficient=10.0,
        exponents={"sigma_star": -0.2},
        helium=1.36,
    )
    maps = {**recipe_raw(out)["maps"]}
    maps["nir"] = {**maps["ir"], "tracer": "3.6um"}
    changes = {
        "gas": {**GAS, "alpha_co": "mine"},
        "records": record,
        "maps": maps,
        "stars": {"record": "leroy2019_36um", "map": "nir"},
    }
    disc = disc_of(out, **changes)
    star, mol = disc.surfaces["sigma_star"].value, disc.surfaces["sigma_mol"].value
    lost = np.isnan(mol) & np.isfinite(star) & np.isfinite(disc.intensity["CO(2-1)"].value)
    assert lost.sum() > 100
    np.testing.assert_array_equal(lost, (star <= 0) & np.isfinite(disc.intensity["CO(2-1)"].value))
    # NO_SOLUTION is 32.
    np.testing.assert_array_equal((disc.flags & 32) != 0, lost)
    with pytest.warns(KspipeWarning, match=r'gas.alpha_co: "mine" is a power law, and \d+ pixels'):
        reduce_maps(recipe_of(out, **changes), out / "run", overwrite=True)


@pytest.mark.parametrize(
    ("changes", "where", "why"),
    [
        ({"citation": ""}, "records.mine.citation", "at least 4"),
        ({"form": "cubic"}, "records.mine.form", "linear"),
        ({"coefficient": None}, "records.mine", "needs coefficient and exponents"),
        ({"zero": 1.0}, "records.mine", '"zero" does not go with form = "power law"'),
        ({"coefficient": -1.0}, "records.mine", "is not positive"),
        ({"exponents": {"z": 1.0}}, "records.mine", 'takes no "z"'),
        ({"helium": None}, "records.mine", "says its helium"),
        ({"helium": 1.2}, "records.mine.helium", "1.0 (hydrogen only)"),
        ({"imf": "Kroupa"}, "records.mine", "imf belongs to records of star_formation"),
        ({"exponents": {"sigma_total": -1.5}}, "records.mine", "lies between -1 and 0"),
        ({"ranges": {"z_prime": [2.0, 0.2]}}, "records.mine.ranges.z_prime", "does not rise"),
    ],
)
def test_records_that_are_none(out, changes, where, why) -> None:
    table = {k: v for k, v in {**POWER_ALPHA["mine"], **changes}.items() if v is not None}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, records={"mine": table})
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert why in faults[where]


def test_the_key_of_a_published_record_is_taken(out) -> None:
    with pytest.raises(RecipeError, match=r"records.sun2020.*key of a published record"):
        recipe_of(out, records={"sun2020": POWER_ALPHA["mine"]})
