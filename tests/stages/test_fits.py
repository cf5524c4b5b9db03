"""Fits, ranking and trends as a comparison of the demo writes them."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from astropy.table import Table
from helpers import demo_recipe

from kspipe.core.errors import InputError, RecipeError
from kspipe.recipe import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps

DISC = 'icrs\ncircle({ra},{dec},100")\n'
COMPARISON = {
    "lattice_phases": 1,
    "population_components": 1,
    "environments": {
        "inner": {"where": "0 - 4 kpc", "alpha_co_scale": 0.5},
        "inner_as_is": "0 - 4 kpc",
        "nowhere": "90 - 95 kpc",
        "drawn": "drawn.reg",
    },
}


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("fits")
    raw = demo_recipe(folder, comparison=COMPARISON)
    position = parse_recipe({**raw, "comparison": {}}, folder=folder).galaxy.centre
    (folder / "drawn.reg").write_text(DISC.format(ra=position.lon_deg, dec=position.lat_deg))
    reduce_maps(parse_recipe(raw, folder=folder), folder / "out")
    compare_relations(folder / "out")
    return folder


@pytest.fixture(scope="module")
def summary(folder):
    return json.loads((folder / "out" / "summary.json").read_text(encoding="utf-8"))


@pytest.fixture(scope="module")
def lines(summary):
    return {(line["sample"], line["x"]): line for line in summary["fits"]["lines"]}


def test_pixels_and_independent_ones_stand_side_by_side(lines):
    line = lines["all pixels", "sigma_gas"]
    assert line["n_pixels"] > 10 * line["n_independent"] > 10 * line["n_effective_for_slope"] / 2
    assert line["n"] < line["n_pixels"] / 10
    assert line["slope_error"] > 0


def test_each_environment_has_its_own_result(lines):
    inner, as_is = lines["inner", "sigma_gas"], lines["inner_as_is", "sigma_gas"]
    assert inner["n"] == as_is["n"] < lines["all pixels", "sigma_gas"]["n"]
    # Less molecular gas for the same stars: the median at a given gas density is higher.
    at = 1.3
    level = [f["intercept"] + f["slope"] * (at - f["pivot"]) for f in (inner, as_is)]
    assert level[0] > level[1]
    assert lines["drawn", "sigma_gas"]["n_pixels"] > 100


def test_an_empty_environment_has_a_message_and_no_number(lines):
    line = lines["nowhere", "sigma_gas"]
    assert line["slope"] is None
    assert "0 independent samples" in line["message"]
    assert line["n_pixels"] == 0


def test_apertures_come_in_pairs(summary):
    gas, sfr = summary["fits"]["apertures"]
    assert (gas["on"], sfr["on"]) == ("gas", "star formation")
    # Gas peaks select gas (Schruba et al. 2010, ApJ 722, 1699).
    assert gas["ratio_dex"] > sfr["ratio_dex"]


def test_rings_reach_from_the_centre_outwards(lines):
    ring = lines["radial bins", "sigma_gas"]
    assert ring["edges_kpc"] == sorted(ring["edges_kpc"])
    assert len(ring["mean_sigma_gas"]) == len(ring["edges_kpc"]) - 1
    assert ring["mean_sigma_gas"][0] > ring["mean_sigma_gas"][-1]


def test_relations_are_fitted_in_star_formation_and_molecular_fraction(summary):
    for fits in summary["fits"]["relations"].values():
        for fit in fits.values():
            assert fit["is_fitted"], fit["message"]
            assert math.isfinite(fit["offsets_dex"]["zero_point"])


def test_trends_name_what_is_held(summary):
    for found in summary["trends"].values():
        radius = next(t for t in found if t["against"] == "radius_kpc")
        assert radius["held"] == ["sigma_gas"]


def test_the_table_repeats_the_summary(folder, lines):
    table = Table.read(folder / "out" / "fits.ecsv")
    row = table[(table["sample"] == "all pixels") & (table["method"] == "latent")][0]
    assert row["slope"] == lines["all pixels", "sigma_gas"]["slope"]
    assert np.sum(table["method"] == "bisector") == 2


@pytest.mark.parametrize(
    ("changes", "says"),
    [
        ({"environments": {"arms": "missing.reg"}}, "missing.reg does not exist"),
        ({"environments": {"arms": "3 - 1 kpc"}}, "not a range of radii"),
        ({"environments": {"two words": "0 - 1 kpc"}}, "letters, digits"),
        ({"free": {"nothing": {"clumping": 0.1}}}, 'no relation is called "nothing"'),
        ({"free": {"shielding_kpc": {"clump": 0.1}}}, "cannot be free"),
        ({"lattice_phases": 9}, "lattice_phases"),
        ({"zero_point_prior": -1.0}, "zero_point_prior"),
    ],
)
def test_what_is_typed_wrong_is_named(tmp_path, changes, says):
    raw = demo_recipe(tmp_path)
    raw["relations"] = {"shielding_kpc": {"law": "krumholz2009", "clumping": 5}}
    with pytest.raises(RecipeError) as error:
        parse_recipe({**raw, "comparison": changes}, folder=tmp_path)
    assert says in str(error.value)


def test_a_region_file_that_cannot_be_read_stops_with_its_line(folder):
    text = (folder / "drawn.reg").read_text()
    (folder / "drawn.reg").write_text("image\ncircle(1,2,3)\n")
    try:
        with pytest.raises(InputError, match=r"drawn\.reg, line 1"):
            compare_relations(folder / "out", overwrite=True)
    finally:
        (folder / "drawn.reg").write_text(text)
