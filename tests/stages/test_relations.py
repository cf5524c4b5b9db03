"""Relations with further inputs, from a recipe to products: HISTORY, columns, summary, figure."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from helpers import demo_recipe

from kspipe.core.errors import OutputError
from kspipe.core.report import noted_lines
from kspipe.maps.product import read_image
from kspipe.products.read import read_products, read_recipe
from kspipe.products.relation_curves import other_inputs
from kspipe.products.relation_figure import draw_star_formation_law
from kspipe.recipe import parse_recipe
from kspipe.recipe.disc_tables import RotationTable
from kspipe.relations import LAWS
from kspipe.stages.compare import compare_relations
from kspipe.stages.law_inputs import rotation_of
from kspipe.stages.reduce import reduce_maps

RELATIONS: dict[str, dict[str, Any]] = {
    "k": {"law": "krumholz2013", "clumping": 5},
    "p": {"law": "leroy2008_pressure", "scale_length": 2.5, "depletion_time": 2},
    "s": {"law": "kennicutt1998_law"},
    "gd": {"law": "gnedin2014", "scale": 600, "efficiency": 0.01},
}


def tables(out: Path) -> dict[str, Any]:
    """A recipe with stars, a layer of them, and the field of the observed star formation."""
    raw = demo_recipe(out)
    stars = fits.open(out / "mir24.fits")[0]
    stars.data = stars.data * 0.2
    stars.writeto(out / "nir.fits", overwrite=True)
    nir = {**raw["maps"]["ir"], "tracer": "3.6um", "file": "nir.fits", "noise": "0.02 MJy/sr"}
    return {
        "grid": {"beam": "40 arcsec"},
        "maps": {**raw["maps"], "nir": nir},
        "stars": {"record": "leroy2019_36um", "map": "nir", "mass_to_light": 0.5},
        "midplane": {
            "scale_height": "300 pc", "definition": "sech2(z/z0)", "dark_matter": "0.01 Msun/pc3"
        },
        "radiation_field": {"origin": "star formation"},
        "relations": RELATIONS,
    }  # fmt: skip


@pytest.fixture(scope="module")
def with_co(tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("relations")
    given = {**tables(out), "relations": {**RELATIONS, "t": {"law": "leroy2013_depletion"}}}
    reduce_maps(parse_recipe(demo_recipe(out, **given), folder=out), out / "run")
    compare_relations(out / "run")
    return out / "run"


@pytest.fixture(scope="module")
def without_co(tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("atomic")
    given = tables(out)
    given["maps"] = {name: table for name, table in given["maps"].items() if name != "co"}
    given["gas"] = "atomic only"
    reduce_maps(parse_recipe(demo_recipe(out, **given), folder=out), out / "run")
    compare_relations(out / "run")
    return out / "run"


def summary_of(out: Path) -> dict[str, Any]:
    return dict(json.loads((out / "summary.json").read_text(encoding="utf-8")))


def image(out: Path, name: str, extension: str | int = 0) -> np.ndarray:
    return read_image(out / f"{name}.fits", extension)[0].astype(float)


def test_pixels_are_predicted_from_all_inputs(with_co) -> None:
    gas, star, sfr, oh = (
        image(with_co / "maps", n) for n in ("sigma_gas", "sigma_star", "sigma_sfr", "metallicity")
    )
    # Sigma = 2 rho z0 for sech2(z/z0); G0' = Sigma_SFR / 2.5e-3 Msun/yr/kpc2 (Krumholz 2013).
    inputs = {
        "sigma_gas": gas, "oh": oh, "rho_sd": star / 600 + 0.01, "g0": sfr / 2.5e-3
    }  # fmt: skip
    law = LAWS.get("krumholz2013")
    expected = law.predict(inputs, {"clumping": 5.0}, slopes=False).sigma_sfr
    got = image(with_co / "residuals", "k", "PREDICTED")
    np.testing.assert_array_equal(np.isfinite(got), np.isfinite(expected))
    seen = np.isfinite(got) & (gas > 5)
    np.testing.assert_allclose(got[seen], expected[seen], rtol=1e-4)
    error = image(with_co / "residuals", "k", "PREDICTED_ERROR")
    assert np.isfinite(error[np.isfinite(got)]).all()


def test_histories_and_summary_say_where_inputs_come_from(with_co) -> None:
    lines = fits.getheader(with_co / "residuals" / "k.fits")["HISTORY"]
    history = " ".join(" ".join(lines).split())
    for words in (
        "stars with scale height 300 pc (sech2(z/z0)), and dark matter 0.01 Msun/pc3",
        "observed Sigma_SFR / 0.0025",
        "on both sides: 24um map",
        "taken from the same star formation; error carried as covariance",
        "alpha_CO (bolatto2013_galactic)",
    ):
        assert words in history
    entry = summary_of(with_co)["relations"]["k"]
    assert set(entry["inputs"]) == {"sigma_gas", "oh", "rho_sd", "g0"}
    carried = {s["what"]: s["covariance_carried"] for s in entry["shared"]}
    assert carried["24um map"] is True
    assert carried["alpha_CO (bolatto2013_galactic)"] is False
    sfr = image(with_co / "maps", "sigma_sfr")
    table = Table.read(with_co / "pixels.ecsv")
    # Below zero there is no field: counted, flagged no_solution, and without a prediction.
    negative = np.asarray(table["sigma_sfr"]) <= 0
    assert entry["inputs"]["g0"]["n_unusable"] == negative.sum() > 0
    assert np.isnan(np.asarray(table["predicted_k"])[np.asarray(table["sigma_sfr"]) < 0]).all()
    assert entry["n_no_solution"] == np.isnan(np.asarray(table["predicted_k"])).sum()
    notes = " ".join(noted_lines(summary_of(with_co)))
    assert f"relations.k: {entry['n_no_solution']} pixels without prediction" in notes
    assert f"g0 unusable in {negative.sum()}" in notes
    assert "shares FUV map, 24um map with the observed star formation" in notes
    outside = summary_of(with_co)["relations"]["gd"]["n_outside_range"]
    assert f"relations.gd: {outside} pixels outside its range" in notes
    assert np.isfinite(sfr).any()


def test_a_field_of_the_same_stars_covaries_with_them(with_co) -> None:
    # More light is a stronger field and, where most gas is molecular, less predicted (Gnedin &
    # Draine 2014): with a covariance below zero the error is larger than of independent values.
    assert summary_of(with_co)["relations"]["gd"]["sum_ratio_error"] > 0
    assert summary_of(with_co)["relations"]["s"]["shared"] == []
    sfr, error = image(with_co / "maps", "sigma_sfr"), image(with_co / "maps", "sigma_sfr", "ERROR")
    predicted, predicted_error, normalised = (
        image(with_co / "residuals", "gd", name)
        for name in ("PREDICTED", "PREDICTED_ERROR", "NORMALISED")
    )
    f_mol = np.full(sfr.shape, np.nan)
    table = Table.read(with_co / "pixels.ecsv")
    f_mol[table["y"], table["x"]] = table["predicted_f_mol_gd"]
    seen = (f_mol > 0.5) & (np.abs(normalised) > 1)
    uncorrelated = (sfr - predicted) / np.hypot(error, predicted_error)
    ratio = (uncorrelated / normalised)[seen]
    assert seen.sum() > 50
    # A part in a thousand here, ten times the rounding of the files; see tests/comparison for
    # its size against draws.
    assert ratio.min() > 1 - 1e-6
    assert ratio.max() > 1.0002


def test_curves_are_drawn_at_the_medians_of_other_inputs(with_co) -> None:
    products = read_products(with_co, read_recipe(with_co))
    medians = summary_of(with_co)["relations"]["k"]["inputs"]
    assert other_inputs(products, "k") == {n: medians[n]["median"] for n in ("rho_sd", "g0")}
    assert other_inputs(products, "s") == {}
    figure = draw_star_formation_law(products)
    text = " ".join(t.get_text().replace("\n", " ") for t in figure.texts)
    assert "k: medians rho_sd = " in text
    assert "t: as if all gas were molecular" in text
    figure.canvas.draw()


def test_hydrogen_alone_is_compared_both_ways(without_co) -> None:
    summary = summary_of(without_co)
    assert "from_atomic" not in summary["relations"]["s"]
    table = Table.read(without_co / "pixels.ecsv")
    for name, law in (("k", "krumholz2013"), ("gd", "gnedin2014"), ("p", "leroy2008_pressure")):
        entry = summary["relations"][name]["from_atomic"]
        roots = np.asarray(table[f"roots_{name}"])
        counted = [np.sum(roots == 0), np.sum(roots == 1), np.sum(roots > 1)]
        assert [entry[f"n_{n}"] for n in ("without_root", "one_root", "several_roots")] == counted
        assert sum(counted) == summary["n_pixels"]
        gas = np.asarray(table[f"gas_inverted_{name}"])
        np.testing.assert_array_equal(np.isnan(gas), roots == 0)
        # By substitution, on the table's own numbers.
        inputs = {
            "sigma_gas": gas, "oh": 8.69 + np.log10(table["z_prime"]),
            "sigma_star": np.asarray(table["sigma_star"]),
            "rho_sd": np.asarray(table["sigma_star"]) / 600 + 0.01,
            "g0": np.asarray(table["sigma_sfr"]) / 2.5e-3,
        }  # fmt: skip
        given = {k: float(v) for k, v in RELATIONS[name].items() if k != "law"}
        f = np.asarray(LAWS.get(law).predict(inputs, given, slopes=False).f_mol)
        seen = roots > 0
        left = ((1 - f) * gas)[seen]
        np.testing.assert_allclose(left, np.asarray(table["sigma_atom"])[seen], rtol=1e-3)
        with fits.open(without_co / "residuals" / f"{name}.fits") as hdus:
            assert {"INVERTED", "INVERTED_GAS", "INVERTED_ROOTS"} <= {hdu.name for hdu in hdus}
            assert "no amount of gas leaves so much HI atomic" in " ".join(
                hdus[0].header["HISTORY"]
            )
    # As now, HI for all gas: less molecular gas, fewer stars predicted.
    direct = np.asarray(table["predicted_k"])
    inverted = np.asarray(table["predicted_inverted_k"])
    both = np.isfinite(direct) & np.isfinite(inverted)
    assert both.any()
    assert np.all(inverted[both] >= direct[both] * (1 - 1e-6))


def test_a_rotation_curve() -> None:
    # v = 100 r^0.5 exactly between the rows: Omega = 100 r^-0.5, beta = 1/2.
    radii = [1.0, 4.0, 16.0]
    table = RotationTable(radius_kpc=radii, velocity_km_s=[100.0, 200.0, 400.0])
    r = np.array([0.5, 1.0, 2.0, 9.0, 16.0, 17.0])
    omega, beta = rotation_of(table, r)
    inside = (r >= 1) & (r <= 16)
    np.testing.assert_allclose(omega[inside], 100 * r[inside] ** -0.5, rtol=1e-12)
    np.testing.assert_allclose(beta[inside], 0.5, rtol=1e-12)
    assert np.isnan(omega[~inside]).all()
    assert np.isnan(beta[~inside]).all()


def test_other_relations_are_taken_over(with_co, tmp_path) -> None:
    # The maps stay; before, the relations of the first run would have been compared again.
    out = tmp_path / "run"
    shutil.copytree(with_co, out)
    folder = with_co.parent
    given = {**tables(folder), "relations": {"t": {"law": "leroy2013_depletion"}}}
    recipe = parse_recipe(demo_recipe(folder, **given), folder=folder)
    with pytest.raises(OutputError, match="asks for another comparison"):
        reduce_maps(recipe, out)
    assert reduce_maps(recipe, out, overwrite=True)
    assert not reduce_maps(recipe, out)
    compare_relations(out)
    assert list(summary_of(out)["relations"]) == ["t"]
