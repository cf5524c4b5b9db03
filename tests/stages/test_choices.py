"""What a recipe chooses reaches the pixels, the histories and the summary."""

from __future__ import annotations

import json
import math
import re
import warnings
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from helpers import demo_recipe

from kspipe.core.errors import KspipeWarning
from kspipe.maps.product import read_image
from kspipe.recipe import parse_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps

OH, SLOPE = 8.75, -0.045


@pytest.fixture(scope="module")
def out(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("choices")


def reduced(out: Path, **changes: Any) -> Path:
    """Reduce the demo; the matched maps of an earlier choice are reused."""
    reduce_maps(parse_recipe(demo_recipe(out, **changes), folder=out), out / "run", overwrite=True)
    return out / "run" / "maps"


def image(folder: Path, name: str) -> np.ndarray:
    return read_image(folder / f"{name}.fits")[0].astype(float)


@pytest.mark.parametrize(
    ("gas", "alpha"),
    [
        # Accurso et al. 2017 and Wolfire et al. 2010, both from memory, written out.
        (
            {"alpha_co": "accurso2017", "ms_offset": "0.3 dex"},
            lambda oh: 10 ** (14.752 - 1.623 * oh + 0.062 * 0.3),
        ),
        (
            {"alpha_co": "wolfire2010", "g0_over_n": 0.02},
            lambda oh: (
                4.35
                * np.exp(
                    0.5
                    * (0.53 - 0.045 * math.log(0.02) - 0.097 * math.log(10) * (oh - 8.69))
                    / 10 ** (oh - 8.69)
                    - 0.5 * (0.53 - 0.045 * math.log(0.02))
                )
            ),
        ),
        ({"alpha_co": "schruba2012"}, lambda oh: 8 * 10 ** (-2 * (oh - 8.7))),
    ],
    ids=["accurso2017", "wolfire2010", "schruba2012"],
)
def test_alpha_co_in_the_pixels(out, gas, alpha) -> None:
    galactic = image(reduced(out), "sigma_mol") / 4.35
    folder = reduced(out, gas={"line_ratio": 0.65, **gas})
    got, oh = image(folder, "sigma_mol"), image(folder, "metallicity")
    seen = np.isfinite(got)
    np.testing.assert_allclose(got[seen], (galactic * alpha(oh))[seen], rtol=1e-5)


def test_doubt_is_written_down(out) -> None:
    gas = {"line_ratio": 0.65, "alpha_co": "amorin2016"}
    folder = reduced(out, gas=gas)
    history = " ".join(fits.getheader(folder / "sigma_mol.fits")["HISTORY"])
    assert "log10 alpha_CO = 0.68" in history
    assert "coefficients from memory" in history
    compare_relations(out / "run", overwrite=True)
    summary = json.loads((out / "run" / "summary.json").read_text())
    assert summary["records"]["amorin2016"]["certainty"] == "from memory"
    assert summary["records"]["leroy2008_thin"]["certainty"] == "verified"


def test_a_line_ratio_by_key(out) -> None:
    base = reduced(out)
    co = image(base, "sigma_mol") * 0.65
    folder = reduced(
        out, gas={"alpha_co": "bolatto2013_galactic", "line_ratio": "schinnerer2024_r21"}
    )
    got, sfr = image(folder, "sigma_mol"), image(folder, "sigma_sfr")
    seen = np.isfinite(got)
    # Schinnerer & Leroy 2024, Table 1.
    ratio = np.clip(0.65 * (np.maximum(sfr, 0) / 1.8e-2) ** 0.125, 0.35, 1.0)
    np.testing.assert_allclose(got[seen], (co / ratio)[seen], rtol=1e-5)
    assert "schinnerer2024_r21" in " ".join(fits.getheader(folder / "sigma_mol.fits")["HISTORY"])
    text = (out / "run" / "recipe.toml").read_text()
    assert 'line_ratio = "schinnerer2024_r21"' in text
    # The written recipe is a recipe.
    compare_relations(out / "run", overwrite=True)


def test_an_initial_mass_function(out) -> None:
    calibration = {"calibration": "kennicutt1998_fuv", "maps": ["fuv"]}
    kroupa = image(reduced(out, star_formation=calibration), "sigma_sfr")
    header = fits.getheader(out / "run" / "maps" / "sigma_sfr.fits")
    assert "Salpeter to Kroupa, star formation x 0.64509" in " ".join(header["HISTORY"])
    folder = reduced(out, star_formation={**calibration, "imf": "Salpeter"}, relations={})
    salpeter = image(folder, "sigma_sfr")
    seen = np.isfinite(salpeter)
    # C334 of the reference sheet.
    np.testing.assert_allclose((kroupa / salpeter)[seen], 0.64509, rtol=1e-4)
    assert "to Kroupa" not in " ".join(fits.getheader(folder / "sigma_sfr.fits")["HISTORY"])
    compare_relations(out / "run", overwrite=True)
    text = (out / "run" / "pixels.ecsv").read_text()
    assert "face-on, Salpeter IMF" in text


@pytest.mark.slow
def test_a_power_law_counts_what_it_leaves_out(out) -> None:
    with pytest.warns(KspipeWarning, match=r"calzetti2007_24um.*power law, and \d+ pixels"):
        reduced(out, star_formation={"calibration": "calzetti2007_24um", "maps": ["ir"]})
    compare_relations(out / "run", overwrite=True)
    summary = json.loads((out / "run" / "summary.json").read_text())
    sfr, gas = (image(out / "run" / "maps", name) for name in ("sigma_sfr", "sigma_gas"))
    assert summary["n_left_out"] == int(np.sum(np.isnan(sfr) & np.isfinite(gas))) > 100
    assert summary["n_pixels"] == int(np.isfinite(sfr + gas).sum())
    # Nothing is left out of a straight line.
    reduced(out)
    compare_relations(out / "run", overwrite=True)
    assert json.loads((out / "run" / "summary.json").read_text())["n_left_out"] == 0


@pytest.mark.parametrize(
    ("scale", "alpha_co", "says"),
    [
        # 8.75 by Marino et al. 2013 is O3N2 = -1.014, which is 9.05 by Pettini & Pagel 2004.
        ("M13 O3N2", "accurso2017", r"accurso2017.*tied to PP04 O3N2.*\+0\.30 dex at 8.75"),
        ("direct", "genzel2012", r"tied to Denicolo.*usually 0.1 to 0.3 dex"),
        ("PP04 O3N2", "accurso2017", None),
        ("not stated", "accurso2017", None),
        ("direct", "sun2020", None),
    ],
)
def test_another_scale_of_metallicity_is_told(out, scale, alpha_co, says) -> None:
    gas: dict[str, Any] = {"alpha_co": alpha_co, "line_ratio": 0.65}
    if alpha_co == "accurso2017":
        gas["ms_offset"] = "0 dex"
    metallicity = {"oh": 8.75, "scale": scale}
    recipe = parse_recipe(demo_recipe(out, gas=gas, metallicity=metallicity), folder=out)
    with warnings.catch_warnings(record=True) as told:
        warnings.simplefilter("always", KspipeWarning)
        make_plan(recipe)
    texts = [str(w.message) for w in told if "metallicity.scale" in str(w.message)]
    assert bool(texts) == (says is not None)
    assert says is None or re.search(says, texts[0])


def with_stars(out: Path) -> dict[str, Any]:
    """Write a near-infrared map of the demo and return its tables."""
    raw = demo_recipe(out)
    stars = fits.open(out / "mir24.fits")[0]
    stars.data = stars.data * 0.2
    stars.writeto(out / "nir.fits", overwrite=True)
    maps = {**raw["maps"], "nir": {**raw["maps"]["ir"], "tracer": "3.6um", "file": "nir.fits"}}
    maps["nir"]["noise"] = "0.02 MJy/sr"
    stars_table = {"record": "leroy2019_36um", "map": "nir", "mass_to_light": "0.5 +- 0.1"}
    return {"maps": maps, "stars": stars_table}


@pytest.mark.slow
def test_stars_and_the_alpha_co_that_needs_them(out) -> None:
    tables = with_stars(out)
    gas = {"alpha_co": "bolatto2013_eq31", "line_ratio": 0.65}
    folder = reduced(out, **tables, gas=gas)
    atom, mol, star, oh = (
        image(folder, name) for name in ("sigma_atom", "sigma_mol", "sigma_star", "metallicity")
    )
    base = image(reduced(out, maps=tables["maps"]), "sigma_mol") / 4.35
    seen = np.isfinite(mol)
    # Bolatto et al. 2013, Eq. 31, at the solution.
    total = star + atom + np.maximum(mol, 0.0)
    alpha = 2.9 * np.exp(0.4 / 10 ** (oh - 8.69)) * (np.maximum(total, 100) / 100) ** -0.5
    np.testing.assert_allclose(mol[seen], (alpha * base)[seen], rtol=1e-5, atol=1e-6)
    reduced(out, **tables, gas=gas)
    compare_relations(out / "run", overwrite=True)
    summary = json.loads((out / "run" / "summary.json").read_text())
    assert summary["flags"]["negative_co"] == int(np.sum((mol < 0) & np.isfinite(mol + atom)))
    # 0.1 in 0.5 is a fifth of the mass of stars, beside the flux scale.
    stars = summary["totals"]["mass_star"]
    assert stars["calibration_error"] == pytest.approx(0.2 * stars["value"], rel=0.01)
    text = (out / "run" / "pixels.ecsv").read_text()
    assert "sigma_star_err" in text
    # The written recipe is a recipe with the same stars.
    assert "[stars]" in (out / "run" / "recipe.toml").read_text()


def test_an_opacity_of_hi(out) -> None:
    thin = image(reduced(out), "sigma_atom")
    gas = {"alpha_co": "bolatto2013_galactic", "line_ratio": 0.65, "hi_opacity": "1.2 +- 0.12"}
    with pytest.warns(KspipeWarning, match="hi_opacity.*one factor for all pixels"):
        folder = reduced(out, gas=gas)
    thick = image(folder, "sigma_atom")
    seen = np.isfinite(thick)
    np.testing.assert_allclose(thick[seen], 1.2 * thin[seen], rtol=1e-6)
    assert "atomic gas x 1.2 +- 0.12" in " ".join(
        fits.getheader(folder / "sigma_atom.fits")["HISTORY"]
    )
    with pytest.warns(KspipeWarning, match="hi_opacity"):
        compare_relations(out / "run", overwrite=True)
    atom = json.loads((out / "run" / "summary.json").read_text())["totals"]["mass_atom"]
    # A tenth, common to all pixels.
    assert atom["calibration_error"] == pytest.approx(0.1 * atom["value"], rel=1e-3)
