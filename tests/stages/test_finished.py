"""Maps of surface densities that someone else made."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from demo_disc import converted, disc_of, matched_maps, recipe_of, shared_folder
from helpers import demo_recipe

from kspipe.core.errors import MapError, RecipeError
from kspipe.recipe import load_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.reduce import reduce_maps

COS_I = np.cos(np.radians(41.0))


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


@pytest.fixture(scope="module")
def base(out) -> dict[str, np.ndarray]:
    return converted(out)


@pytest.fixture(scope="module")
def products(out) -> dict[str, Path]:
    """The products of a reduction as finished maps, on their own beam."""
    matched_maps(out)
    reduce_maps(recipe_of(out), out / "run", overwrite=True)
    found = {}
    for name, factor in (("sigma_atom", 1 / 1.36), ("sigma_mol", 1 / COS_I), ("sigma_sfr", 1.0)):
        with fits.open(out / "run" / "maps" / f"{name}.fits") as hdus:
            image = fits.PrimaryHDU(hdus[0].data * np.float32(factor), hdus[0].header)
            sigma = fits.PrimaryHDU(hdus["ERROR"].data * np.float32(factor), hdus[0].header)
        image.writeto(out / f"finished_{name}.fits", overwrite=True)
        sigma.writeto(out / f"finished_{name}_error.fits", overwrite=True)
        found[name] = out / f"finished_{name}.fits"
    return found


def table(product: str, tracer: str, **state: Any) -> dict[str, Any]:
    noise = {"file": f"finished_{product}_error.fits", "is": "sigma"}
    return {"tracer": tracer, "file": f"finished_{product}.fits", "noise": noise, **state}


def all_finished() -> dict[str, Any]:
    """A recipe of finished maps only, each in another state."""
    return {
        "maps": {
            "atoms": table("sigma_atom", "Sigma_HI", inclination="face-on", helium=1.0),
            "molecules": table("sigma_mol", "Sigma_mol", inclination="sky", helium=1.36),
            "rate": table("sigma_sfr", "Sigma_SFR", inclination="face-on", imf="Kroupa"),
        },
        "gas": "finished map",
        "star_formation": {"calibration": "finished map", "maps": ["rate"]},
        # The grid of the reduction that they come from.
        "grid": {"beam": "15 arcsec"},
    }


def test_products_put_in_again_come_out_again(out, base, products) -> None:
    reduce_maps(recipe_of(out, **all_finished()), out / "finished", overwrite=True)
    for name in ("sigma_atom", "sigma_mol", "sigma_sfr", "sigma_gas", "f_mol"):
        with fits.open(out / "finished" / "maps" / f"{name}.fits") as hdus:
            got, error = hdus[0].data.astype(float), hdus["ERROR"].data.astype(float)
        expected, expected_error = base[name], base[f"{name}_error"]
        # The maps have the target's beam and pixels already; blank edges differ.
        shift = [(a - b) // 2 for a, b in zip(expected.shape, got.shape, strict=True)]
        cut = tuple(slice(s, s + n) for s, n in zip(shift, got.shape, strict=True))
        both = np.isfinite(got) & np.isfinite(expected[cut])
        assert both.sum() > 5000
        scale = np.nanmedian(expected_error)
        np.testing.assert_allclose(got[both], expected[cut][both], rtol=2e-4, atol=0.02 * scale)
        np.testing.assert_allclose(error[both], expected_error[cut][both], rtol=2e-2)


def test_what_was_stated_is_told_and_written(out, products) -> None:
    recipe = recipe_of(out, **all_finished())
    reduce_maps(recipe, out / "finished", overwrite=True)
    compare_relations(out / "finished", overwrite=True)
    history = " ".join(
        " ".join(fits.getheader(out / "finished" / "maps" / "sigma_gas.fits")["HISTORY"]).split()
    )
    assert "maps.atoms: a finished map of Sigma_HI, face-on, helium x 1" in history
    assert (
        "maps.molecules: a finished map of Sigma_mol, as seen on the sky, helium x 1.36" in history
    )
    summary = json.loads((out / "finished" / "summary.json").read_text())
    assert "leroy2008_thin" not in summary["records"]
    assert summary["gas"] == "atomic and molecular"
    again = load_recipe(out / "finished" / "recipe.toml")
    assert again.maps["atoms"].finished == recipe.maps["atoms"].finished
    assert again.star_formation == recipe.star_formation


@pytest.mark.parametrize(
    ("tracer", "product", "state", "factor"),
    [
        ("Sigma_HI", "sigma_atom", {"inclination": "face-on", "helium": 1.36}, 1.0),
        ("Sigma_HI", "sigma_atom", {"inclination": "face-on", "helium": 1.0}, 1.36),
        ("Sigma_HI", "sigma_atom", {"inclination": "sky", "helium": 1.4}, 1.36 / 1.4 * COS_I),
        ("Sigma_star", "sigma_star", {"inclination": "sky", "imf": "Kroupa"}, COS_I),
        # Kroupa per Salpeter 0.64509 (a worked value).
        ("Sigma_star", "sigma_star", {"inclination": "face-on", "imf": "Salpeter"}, 0.64509),
    ],
)
def test_every_state(out, tracer, product, state, factor) -> None:
    maps = demo_recipe(out)["maps"]
    name = "hi" if tracer == "Sigma_HI" else "nir"
    maps[name] = {**maps.get(name, maps["ir"]), "tracer": tracer, **state}
    stored = matched_maps(out)[1][name].value
    disc = disc_of(out, maps=maps, _as={name: tracer})
    np.testing.assert_allclose(disc.surfaces[product].value, factor * stored, rtol=1e-4)


def test_a_salpeter_rate_becomes_kroupa_once(out, products, base) -> None:
    changes = all_finished()
    changes["maps"]["rate"]["imf"] = "Salpeter"
    reduce_maps(recipe_of(out, **changes), out / "finished", overwrite=True)
    with fits.open(out / "finished" / "maps" / "sigma_sfr.fits") as hdus:
        got = hdus[0].data.astype(float)
    changes["maps"]["rate"]["imf"] = "Kroupa"
    reduce_maps(recipe_of(out, **changes), out / "finished", overwrite=True)
    with fits.open(out / "finished" / "maps" / "sigma_sfr.fits") as hdus:
        kroupa = hdus[0].data.astype(float)
    seen = np.isfinite(got) & (np.abs(kroupa) > 1e-6)
    np.testing.assert_allclose((got / kroupa)[seen], 0.64509, rtol=1e-4)


@pytest.mark.parametrize(
    ("change", "where", "why"),
    [
        ({"inclination": None}, "maps.atoms.inclination", "says its inclination"),
        ({"helium": None}, "maps.atoms.helium", "says its helium"),
        ({"helium": 1.3}, "maps.atoms.helium", "1.0 (hydrogen only)"),
        ({"imf": "Kroupa"}, "maps.atoms.imf", "does not belong to a map of Sigma_HI"),
        ({"inclination": "face on"}, "maps.atoms.inclination", "face-on"),
    ],
)
def test_states_that_are_none(out, products, change, where, why) -> None:
    changes = all_finished()
    atoms = {**changes["maps"]["atoms"], **change}
    changes["maps"]["atoms"] = {k: v for k, v in atoms.items() if v is not None}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, **changes)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert why in faults[where]


def test_one_product_from_two_maps_is_refused(out, products) -> None:
    changes = all_finished()
    changes["maps"]["hi"] = demo_recipe(out)["maps"]["hi"]
    with pytest.raises(RecipeError, match="HI and Sigma_HI are both there"):
        recipe_of(out, **changes)
    del changes["maps"]["hi"], changes["maps"]["molecules"]
    with pytest.raises(RecipeError, match="no map is one of Sigma_mol"):
        recipe_of(out, **changes)


def test_an_intensity_is_no_surface_density(out, products) -> None:
    changes = all_finished()
    changes["maps"]["atoms"]["unit"] = "K km/s"
    with pytest.raises(MapError, match=r"Sigma_HI.*'Msun/pc2'"):
        reduce_maps(recipe_of(out, **changes), out / "bad")
