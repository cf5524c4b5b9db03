"""What other records would give, and the chain of one pixel."""

from __future__ import annotations

import itertools
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from astropy.wcs import WCS
from demo_disc import converted, matched_maps, recipe_of, shared_folder
from helpers import demo_recipe
from typer.testing import CliRunner

import kspipe
from kspipe.cli.app import app
from kspipe.conversions import ALPHA_CO, LINE_RATIO
from kspipe.core.errors import InputError, OutputError
from kspipe.maps.product import read_image
from kspipe.recipe.alternatives import alternatives_of
from kspipe.stages.alternatives import alternative_table
from kspipe.stages.reduce import reduce_maps

GAS = {"alpha_co": "sun2020", "line_ratio": "leroy2022_r21"}


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


@pytest.fixture(scope="module")
def reduced(out) -> Path:
    matched_maps(out)
    reduce_maps(recipe_of(out, gas=GAS), out / "run", overwrite=True)
    return out / "run"


# --- alternatives ---------------------------------------------------------------------------------


def table_of(out: Path, **changes: Any) -> dict[tuple[str, str], Any]:
    grid, maps = matched_maps(out)
    recipe = recipe_of(out, **changes)
    table = alternative_table(recipe, {name: maps[name] for name in recipe.maps}, grid)
    return {(row["family"], row["record"]): row for row in table}


def test_each_row_is_the_reduction_by_that_record(out) -> None:
    rows = table_of(out, gas=GAS)
    base = converted(out, gas=GAS)
    grid = matched_maps(out)[0]
    area = grid.areas_arcsec2() * (8.6e6 * np.pi / 648000) ** 2 / np.cos(np.radians(41))
    inside = base["radius"] <= 156 * 8.6e3 * np.pi / 648000
    for family, key in (("alpha_co", "schruba2012"), ("line_ratio", "schinnerer2024_r21")):
        got = converted(out, gas={**GAS, family: key})["sigma_mol"]
        row = rows[family, key]
        both = np.isfinite(got) & np.isfinite(base["sigma_mol"])
        assert row["total"] == pytest.approx(np.sum((got * area)[both]), rel=1e-9)
        ratio = np.sum((got * area)[both]) / np.sum((base["sigma_mol"] * area)[both])
        assert row["total_ratio"] == pytest.approx(ratio, rel=1e-9)
        assert row["median"] == pytest.approx(np.median(got[both & inside]), rel=1e-9)
        positive = both & inside & (got > 0) & (base["sigma_mol"] > 0)
        dex = np.median(np.log10(got[positive] / base["sigma_mol"][positive]))
        assert row["median_dex"] == pytest.approx(dex, abs=1e-12)
    used = rows["alpha_co", "sun2020"]
    assert used["used"]
    assert (used["total_ratio"], used["median_dex"], used["tilt_dex"]) == (1.0, 0.0, 0.0)
    # A constant over a constant has no tilt: 0.65 / 0.64 everywhere.
    row = rows["line_ratio", "denbrok2021_r21"]
    assert row["total_ratio"] == pytest.approx(0.65 / 0.64, rel=1e-12)
    assert row["tilt_dex"] == pytest.approx(0.0, abs=1e-12)


def test_the_tilt_of_a_known_gradient(out) -> None:
    # OH falls by 0.045 dex/kpc: 8.0 x 10^(-2 (OH - 8.7)) over 4.35 Z'^-1.6 rises by 0.4 x 0.045
    # dex per kpc (Schruba et al. 2012, Sun et al. 2020).
    row = table_of(out, gas=GAS)["alpha_co", "schruba2012"]
    per_r25 = 0.4 * 0.045 * 156 * 8.6e3 * np.pi / 648000
    # Sums over rings a beam wide are not quite at their middle.
    assert row["tilt_dex"] == pytest.approx(per_r25, rel=0.02)


def test_only_what_fits_is_there(out) -> None:
    keys = {key for family, key in table_of(out, gas=GAS) if family == "alpha_co"}
    # No stars, no main sequence, no field over density in this recipe.
    needs = {r.key: set(r.needs) for r in ALPHA_CO}
    assert keys == {key for key, needed in needs.items() if needed <= {"oh"}}
    ratios = {key for family, key in table_of(out, gas=GAS) if family == "line_ratio"}
    assert ratios == {r.key for r in LINE_RATIO if (r.upper, r.lower) == ("CO(2-1)", "CO(1-0)")}
    maps = demo_recipe(out)["maps"]
    maps["nir"] = {**maps["ir"], "tracer": "3.6um"}
    stars = {"record": "leroy2019_36um", "map": "nir"}
    more = {k for f, k in table_of(out, gas=GAS, maps=maps, stars=stars) if f == "alpha_co"}
    assert {
        k for k, needed in needs.items() if needed <= {"oh", "sigma_star", "sigma_total"}
    } == more
    # A recipe of its own numbers has no alternatives of them.
    typed = recipe_of(out, gas={"alpha_co": 4.35, "line_ratio": 0.65})
    assert not any(a.is_used for a in alternatives_of(typed) if a.family == "alpha_co")


def test_alternatives_of_a_strong_line(out) -> None:
    lines = {"o3n2": {"radius": [0, 5], "per": "kpc", "value": [0.0, 1.0]}}
    metallicity = {"calibration": "pettini2004_o3n2", "lines": lines}
    rows = table_of(out, gas=GAS, metallicity=metallicity)
    keys = {key for family, key in rows if family == "strong_lines"}
    assert keys == {"pettini2004_o3n2", "marino2013_o3n2", "curti2017_o3n2"}
    # At O3N2 = 0 the scales are 8.73 and 8.533: 1.6 x 0.197 dex more alpha_CO, falling outwards.
    row = rows["strong_lines", "marino2013_o3n2"]
    assert 0.1 < row["median_dex"] < 1.6 * 0.197
    assert row["tilt_dex"] < 0


def test_the_table_in_the_folder(out, reduced) -> None:
    table = kspipe.alternatives(reduced, overwrite=True)
    assert (reduced / "alternatives.ecsv").is_file()
    assert set(table.colnames) >= {"family", "record", "total", "median", "tilt_dex", "paper"}
    result = CliRunner().invoke(app, ["alternatives", str(reduced), "--quiet"])
    assert result.exit_code == 0, result.output
    for text in ("schruba2012", "sun2020 (used)", "from memory", "dex/r25"):
        assert text in result.output
    # Another reduction makes it out of date.
    reduce_maps(recipe_of(out), reduced, overwrite=True)
    assert not (reduced / "alternatives.ecsv").exists()
    reduce_maps(recipe_of(out, gas=GAS), reduced, overwrite=True)


def test_there_must_be_a_reduction(tmp_path) -> None:
    with pytest.raises(OutputError, match="holds no reduction"):
        kspipe.alternatives(tmp_path)
    with pytest.raises(OutputError, match="holds no reduction"):
        kspipe.chain(tmp_path, "48.1 -27.31 deg")


# --- the chain ------------------------------------------------------------------------------------


def test_every_chain_multiplies_up_to_the_product(out, reduced) -> None:
    _value, header = read_image(reduced / "maps" / "sigma_gas.fits")
    wcs, shape = WCS(header), _value.shape
    rng = np.random.default_rng(3)
    for _ in range(3):
        y, x = (
            rng.integers(shape[0] // 3, 2 * shape[0] // 3),
            rng.integers(shape[1] // 3, shape[1] // 2),
        )
        lon, lat = wcs.all_pix2world(x, y, 0)
        table = kspipe.chain(reduced, f"{float(lon)!r} {float(lat)!r} deg")
        assert table.meta["pixel"] == f"x = {x}, y = {y}, zero-based"
        sums: dict[str, float] = {}
        for name in ("hi", "co", "fuv", "ir"):
            mine = [row for row in table if row["map"] == name]
            value = mine[0]["value"]
            for row in mine[1:]:
                assert row["value"] == pytest.approx(value * row["factor"], rel=1e-12)
                value = row["value"]
            product = mine[0]["product"]
            sums[product] = sums.get(product, 0.0) + value
        sums["sigma_gas"] = sums["sigma_atom"] + sums["sigma_mol"]
        for product, total in sums.items():
            (last,) = [r for r in table if r["product"] == product and r["map"] == ""]
            assert last["value"] == pytest.approx(total, rel=1e-12)
            written = read_image(reduced / "maps" / f"{product}.fits")[0][y, x]
            assert last["value"] == pytest.approx(float(written), rel=1e-6)


def test_the_factors_are_the_published_ones(out, reduced) -> None:
    table = kspipe.chain(reduced, "03h12m24.0s -27d18m36s")
    steps = {(row["map"], row["step"]): row for row in table}
    # Leroy et al. 2008, Eq. A1, to the digits of the atomic constants; Appendix D.
    atoms = steps["hi", "atoms with helium, optically thin"]
    assert atoms["factor"] == pytest.approx(0.019868, rel=5e-5)
    assert atoms["unit"] == "Msun/pc2"
    assert steps["fuv", "leroy2008_fuv_24um"]["factor"] == 8.1e-2
    assert steps["co", "over the line ratio"]["factor"] == pytest.approx(1 / 0.65, rel=1e-12)
    # Sun et al. 2020 at the centre, 12+log10(O/H) = 8.75.
    expected = 4.35 * 10 ** (-1.6 * (8.75 - 8.69))
    assert steps["co", "alpha_CO"]["factor"] == pytest.approx(expected, rel=1e-9)
    for name in ("hi", "co", "fuv", "ir"):
        assert steps[name, "cos i"]["factor"] == pytest.approx(np.cos(np.radians(41)), rel=1e-12)
    # The stored number is that of the file.
    stored = next(row for row in table if row["map"] == "hi" and "stored" in row["step"])
    data = fits.getdata(out / "hi.fits").squeeze()
    x, y = (
        int(part.split("= ")[1]) for part in stored["step"].removeprefix("stored, ").split(", ")
    )
    assert stored["value"] == pytest.approx(float(data[y, x]), rel=1e-7)
    assert stored["unit"] == "JY/BEAM*M/S"


def test_the_chain_on_the_command_line(reduced) -> None:
    result = CliRunner().invoke(app, ["chain", str(reduced), "03h12m24.0s -27d18m36s"])
    assert result.exit_code == 0, result.output
    assert "alpha_CO" in result.output
    assert "Msun/yr/kpc2" in result.output
    result = CliRunner().invoke(app, ["chain", str(reduced), "03h12m24.0s -26d18m36s"])
    assert result.exit_code == 2
    with pytest.raises(InputError, match="is not a position"):
        kspipe.chain(reduced, "03 12 24 -27 18 36")


def test_a_chain_with_everything(out) -> None:
    maps = demo_recipe(out)["maps"]
    maps["nir"] = {**maps["ir"], "tracer": "3.6um"}
    maps["ir"]["diffuse"] = {"filter": "3 kpc"}
    changes: dict[str, Any] = {
        "maps": maps,
        "stars": {"record": "leroy2019_36um", "map": "nir", "mass_to_light": 0.4},
        "gas": {**GAS, "alpha_co": "bolatto2013_eq31", "line_ratio": "schinnerer2024_r21"},
        "foreground": {"ebv": {"radius": [0, 5], "per": "kpc", "value": [0.1, 0.05]}},
        "star_formation": {
            "calibration": "leroy2008_fuv_24um",
            "maps": ["fuv", "ir"],
        },
    }
    reduce_maps(recipe_of(out, **changes), out / "chain", overwrite=True)
    history = " ".join(fits.getheader(out / "chain" / "maps" / "sigma_mol.fits")["HISTORY"])
    assert "ERROR: by draws in" in " ".join(history.split())
    table = kspipe.chain(out / "chain", "03h12m24.0s -27d18m36s")
    for product in ("sigma_star", "sigma_mol", "sigma_sfr"):
        rows = [row for row in table if row["product"] == product]
        ends = [
            row["value"] for row, after in itertools.pairwise(rows) if after["map"] != row["map"]
        ]
        assert sum(ends) == pytest.approx(rows[-1]["value"], rel=1e-12)
    steps = [row["step"] for row in table]
    assert {"diffuse emission taken off", "foreground extinction", "M/L"} <= set(steps)
    summary = json.loads(json.dumps(dict(table.meta)))
    assert summary["radius_kpc"] < 0.2
