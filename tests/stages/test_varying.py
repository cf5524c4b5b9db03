"""Quantities that vary over the disc: numbers, maps, radial tables and regions."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from demo_disc import converted, disc_of, matched_maps, shared_folder
from helpers import demo_recipe

from kspipe.core.errors import GridError, KspipeWarning, RecipeError
from kspipe.recipe import load_recipe, parse_recipe
from kspipe.recipe.resolved import resolved_recipe
from kspipe.stages.compare import compare_relations
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps

GAS = {"alpha_co": "bolatto2013_galactic", "line_ratio": 0.65}


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


def reduced(out: Path, **changes: Any) -> dict[str, np.ndarray]:
    """Reduce in full; the matched maps are reused."""
    matched_maps(out)
    reduce_maps(parse_recipe(demo_recipe(out, **changes), folder=out), out / "run", overwrite=True)
    return converted(out, **changes)


def notes_of(out: Path, **changes: Any) -> str:
    return " ".join(note for f in disc_of(out, **changes).fields.values() for note in f.notes)


def on_grid(out: Path, name: str, value: np.ndarray) -> dict[str, str]:
    """Write an image on the pixels of the reduction."""
    header = fits.getheader(out / "grid.fits")
    fits.PrimaryHDU(np.asarray(value, dtype=float), header).writeto(out / name, overwrite=True)
    return {"map": name}


@pytest.fixture(scope="module")
def base(out) -> dict[str, np.ndarray]:
    images = converted(out)
    (out / "grid.fits").write_bytes((out / "run" / "maps" / "radius.fits").read_bytes())
    return images


def close(got: np.ndarray, expected: np.ndarray, rtol: float = 1e-5) -> None:
    np.testing.assert_array_equal(np.isnan(got), np.isnan(expected))
    seen = np.isfinite(got)
    assert seen.sum() > 100
    np.testing.assert_allclose(got[seen], expected[seen], rtol=rtol, atol=1e-9)


# --- four ways to one quantity --------------------------------------------------------------------


def test_a_number_a_flat_map_a_flat_table_and_a_region_are_one(out, base) -> None:
    on_grid(out, "flat.fits", np.full(base["radius"].shape, 0.5))
    (out / "flat.csv").write_text("radius,value\n0,0.5\n30,0.5\n")
    expected = base["sigma_mol"] * 0.65 / 0.5
    ways: list[Any] = [
        0.5,
        {"map": "flat.fits"},
        {"radius": [0, 30], "per": "kpc", "value": [0.5, 0.5]},
        {"table": "flat.csv", "per": "kpc"},
        {"regions": {"inside": 0.5}, "elsewhere": 0.5},
    ]
    regions = {"inside": {"outer": "3 kpc"}}
    for way in ways:
        changes = {"gas": {**GAS, "line_ratio": way}, "regions": regions}
        got = converted(out, **changes)
        close(got["sigma_mol"], expected)
        # ... and the written recipe says the same.
        recipe = parse_recipe(demo_recipe(out, **changes), folder=out)
        (out / "written.toml").write_text(resolved_recipe(recipe, {}), encoding="utf-8")
        again = load_recipe(out / "written.toml")
        assert again.gas == recipe.gas
        assert again.regions == recipe.regions


def test_a_table_is_straight_between_its_rows(out, base) -> None:
    table = {"radius": [0.5, 2.0, 5.0], "per": "kpc", "value": [0.9, 0.6, 0.5]}
    changes = {"gas": {**GAS, "line_ratio": table}}
    got = converted(out, **changes)
    ratio = np.interp(base["radius"], table["radius"], table["value"])
    close(got["sigma_mol"], base["sigma_mol"] * 0.65 / ratio)
    assert "its end values in" in notes_of(out, **changes)
    flags = got["flags"]
    beyond = (base["radius"] < 0.5 * (1 - 1e-6)) | (base["radius"] > 5.0 * (1 + 1e-6))
    # OUTSIDE_RANGE is 8.
    np.testing.assert_array_equal((flags & 8) != 0, beyond)


def test_an_ecsv_says_its_unit_and_its_columns_can_be_named(out, base) -> None:
    (out / "r21.ecsv").write_text(
        "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: R, unit: kpc, datatype: float64}\n"
        "# - {name: R21, datatype: float64}\n# - {name: e, datatype: float64}\n"
        "R R21 e\n0 0.9 0.05\n6 0.5 0.1\n"
    )
    ratio = np.interp(base["radius"], [0, 6], [0.9, 0.5])
    line_ratio = {"table": "r21.ecsv", "columns": ["R", "R21", "e"]}
    got = converted(out, gas={**GAS, "line_ratio": line_ratio})
    close(got["sigma_mol"], base["sigma_mol"] * 0.65 / ratio)


def test_regions_of_every_shape(out, base) -> None:
    header = fits.getheader(out / "grid.fits")
    half = np.zeros(base["radius"].shape)
    half[: half.shape[0] // 4] = 1.0
    on_grid(out, "south.fits", half)
    regions = {
        "centre": {"outer": "1 kpc"},
        "bar": {
            "semi_major": "20 arcsec",
            "semi_minor": "8 arcsec",
            "position_angle": "0 deg",
            "centre": "03h12m24.0s -27d17m00s",
        },
        "south": {"mask": "south.fits"},
    }
    given = {"regions": {"centre": 0.9, "bar": 0.8, "south": 0.7}, "elsewhere": 0.5}
    got = converted(out, gas={**GAS, "line_ratio": given}, regions=regions)
    # The ellipse by hand: its axes are north and east.
    wcs = read_wcs(header)
    y, x = np.indices(half.shape)
    ra, dec = wcs.all_pix2world(x, y, 0)
    north = (dec - (-27 - 17 / 60)) * 3600
    east = (ra - 48.1) * np.cos(np.radians(dec)) * 3600
    bar = np.hypot(north / 20, east / 8) <= 1
    ratio = np.full(half.shape, 0.5)
    ratio[half > 0], ratio[bar], ratio[base["radius"] < 1.0] = 0.7, 0.8, 0.9
    seen = np.isfinite(got["sigma_mol"])
    wrong = np.abs(got["sigma_mol"] / (base["sigma_mol"] * 0.65 / ratio) - 1)[seen] > 1e-4
    # Pixels on a boundary may fall to either side.
    assert bar.sum() >= 20
    assert wrong.sum() <= 3


def read_wcs(header: fits.Header) -> Any:
    from astropy.wcs import WCS

    return WCS(header)


# --- their errors ---------------------------------------------------------------------------------


def test_the_error_of_a_map_is_random(out, base) -> None:
    # Sigma_mol goes with 1 / ratio: to first order s / ratio of it, beside the noise of CO.
    sigma = 0.02 * np.ones(base["radius"].shape)
    on_grid(out, "ratio.fits", np.full(sigma.shape, 0.65))
    on_grid(out, "ratio_error.fits", sigma)
    ratio = {"map": "ratio.fits", "error": "ratio_error.fits"}
    got = converted(out, gas={**GAS, "line_ratio": ratio})
    close(got["sigma_mol"], base["sigma_mol"])
    expected = np.hypot(base["sigma_mol_error"], base["sigma_mol"] * 0.02 / 0.65)
    close(got["sigma_mol_error"], expected, rtol=2e-3)
    close(got["sigma_atom_error"], base["sigma_atom_error"])
    # It is one noise in both: gas = atoms + molecules, f_mol = molecules / gas.
    mol, atom, gas = (got[f"sigma_{n}"] for n in ("mol", "atom", "gas"))
    s_mol, s_atom = got["sigma_mol_error"], got["sigma_atom_error"]
    close(got["sigma_gas_error"], np.hypot(s_mol, s_atom), rtol=1e-4)
    f_error = np.hypot(atom * s_mol, mol * s_atom) / gas**2
    sure = np.isfinite(f_error) & (gas > 0) & np.isfinite(got["f_mol_error"])
    np.testing.assert_allclose(got["f_mol_error"][sure], f_error[sure], rtol=1e-3)


@pytest.mark.parametrize(
    ("line_ratio", "share"),
    [
        ("0.65 +- 0.065", lambda r: np.full(r.shape, 0.1)),
        (
            {"regions": {"inner": "0.65 +- 0.13"}, "elsewhere": 0.65},
            lambda r: np.where(r < 2.0, 0.2, 0.0),
        ),
    ],
)
def test_the_error_of_a_number_is_common(out, base, line_ratio, share) -> None:
    changes = {"gas": {**GAS, "line_ratio": line_ratio}, "regions": {"inner": {"outer": "2 kpc"}}}
    got = converted(out, **changes)
    close(got["sigma_mol_error"], base["sigma_mol_error"])
    (shift,) = disc_of(out, **changes).shifts["sigma_mol"]
    # Differences over a tenth and a fifth of a ratio are off by the square of that.
    seen = np.isfinite(base["sigma_mol"])
    np.testing.assert_allclose(
        -shift[seen], (got["sigma_mol"] * share(base["radius"]))[seen], rtol=0.045
    )


def test_rows_of_a_table_have_errors_of_their_own(out, base) -> None:
    table = {"radius": [0, 3, 12], "per": "kpc", "value": [0.65] * 3, "error": [0.03, 0.06, 0.0]}
    disc = disc_of(out, gas={**GAS, "line_ratio": table})
    assert len(disc.shifts["sigma_mol"]) == 2
    for shift, row in zip(disc.shifts["sigma_mol"], ([0.03, 0, 0], [0, 0.06, 0]), strict=True):
        share = np.interp(base["radius"], [0, 3, 12], row) / 0.65
        seen = np.isfinite(base["sigma_mol"])
        np.testing.assert_allclose(-shift[seen], (base["sigma_mol"] * share)[seen], rtol=0.01)


# --- where they go --------------------------------------------------------------------------------


def test_alpha_co_itself(out, base) -> None:
    table = {"radius": [0, 5], "per": "kpc", "value": [2.0, 6.0], "error": [0.2, 0.6]}
    got = reduced(out, gas={**GAS, "alpha_co": table})
    alpha = np.interp(base["radius"], [0, 5], [2.0, 6.0])
    close(got["sigma_mol"], base["sigma_mol"] * alpha / 4.35)
    text = (out / "run" / "recipe.toml").read_text()
    assert "alpha_co = {radius = [0.0, 5.0]" in text
    # The two rows are independent of each other, and common to the pixels between them.
    compare_relations(out / "run", overwrite=True)
    mass = json.loads((out / "run" / "summary.json").read_text())["totals"]["mass_mol"]
    used = np.isfinite(got["sigma_gas"] + got["sigma_sfr"])
    rows = [np.interp(base["radius"], [0, 5], row) / alpha for row in ([0.2, 0], [0, 0.6])]
    parts = [np.sum((got["sigma_mol"] * row)[used]) for row in rows]
    expected = np.hypot(*parts) / np.sum(got["sigma_mol"][used])
    assert mass["calibration_error"] == pytest.approx(expected * mass["value"], rel=1e-3)


def test_a_colour_excess_that_varies(out, base) -> None:
    ebv = {"radius": [0, 5], "per": "kpc", "value": [0.02, 0.1]}
    calibration = {"calibration": "kennicutt2012_fuv", "maps": ["fuv"]}
    without = converted(out, star_formation=calibration)
    got = converted(out, star_formation=calibration, foreground={"ebv": ebv})
    # Bianchi et al. 2017: A_FUV = 8.06 E(B-V).
    factor = 10 ** (0.4 * 8.06 * np.interp(base["radius"], [0, 5], [0.02, 0.1]))
    close(got["sigma_sfr"], without["sigma_sfr"] * factor)


def test_a_ratio_of_nitrogen_that_varies(out, base) -> None:
    raw = demo_recipe(out)
    ratio = {"radius": [0, 5], "per": "kpc", "value": [0.5, 0.1]}
    halpha = {"tracer": "Halpha", "file": "halpha.fits", "noise": "measure", "nii_ratio": 0}
    calibration = {"calibration": "kennicutt2012_halpha", "maps": ["ha"]}
    maps = {**raw["maps"], "ha": halpha}
    free = converted(out, star_formation=calibration, maps=maps)
    maps = {**raw["maps"], "ha": {**halpha, "nii_ratio": ratio}}
    got = converted(out, star_formation=calibration, maps=maps)
    # [NII]6548 is 1 / 3.05 of [NII]6583 (common practice).
    nii = 1 + np.interp(free["radius"], [0, 5], [0.5, 0.1]) * (1 + 1 / 3.05)
    close(got["sigma_sfr"], free["sigma_sfr"] / nii)


# --- bad input ------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("ratio", "where", "why"),
    [
        ({"map": "nothing.fits"}, "gas.line_ratio.map", "does not exist"),
        ({"map": "hi.fits", "per": "kpc"}, "gas.line_ratio", "does not go with map"),
        ({"radius": [0, 1], "value": [1, 1]}, "gas.line_ratio", "needs per"),
        ({"radius": [0, 1], "per": "pc", "value": [1, 1]}, "gas.line_ratio", "no unit of a radius"),
        ({"radius": [1, 0], "per": "kpc", "value": [1, 1]}, "gas.line_ratio", "does not rise"),
        ({"radius": [0, 1], "per": "kpc", "value": [1]}, "gas.line_ratio", "2, 1, 2 entries"),
        ({"radius": [0, 1], "per": "kpc", "value": [1, 11]}, "gas.line_ratio", "11 in the table"),
        ({"radius": [0, 1], "per": "r_e", "value": [1, 1]}, "gas.line_ratio", "counts in r_e"),
        ({"regions": {"arm": 0.5}}, "gas.line_ratio.regions", 'no region is called "arm"'),
        ({"regions": {}}, "gas.line_ratio", "regions needs names"),
        ({"mean": 0.5}, "gas.line_ratio", "no way to give a quantity"),
        ({"table": "bad.csv"}, "gas.line_ratio", "does not say what its radius counts in"),
        ({"table": "bad.csv", "columns": ["r", "v"]}, "gas.line_ratio", 'not "r"'),
        ({"table": "bad.csv", "per": "kpc"}, "gas.line_ratio", "else than numbers"),
    ],
)
def test_what_cannot_be_read_is_told(out, ratio, where, why) -> None:
    (out / "bad.csv").write_text("radius,value\n0,a\n1,b\n")
    raw = demo_recipe(out, gas={**GAS, "line_ratio": ratio})
    with pytest.raises(RecipeError) as caught:
        parse_recipe(raw, folder=out)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert set(faults) == {where}
    assert why in faults[where]


@pytest.mark.parametrize(
    ("region", "where", "why"),
    [
        ({}, "regions.a", "one shape"),
        ({"outer": "2 kpc", "mask": "hi.fits"}, "regions.a", "one shape"),
        ({"semi_major": "10 arcsec"}, "regions.a", "needs semi_major and semi_minor"),
        ({"outer": "2 Msun"}, "regions.a.outer", "is not a radius"),
        ({"outer": "2 r_e"}, "regions.a.outer", "counts in r_e"),
        ({"mask": "nothing.fits"}, "regions.a.mask", "does not exist"),
    ],
)
def test_regions_that_are_none(out, region, where, why) -> None:
    with pytest.raises(RecipeError) as caught:
        parse_recipe(demo_recipe(out, regions={"a": region}), folder=out)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert set(faults) == {where}
    assert why in faults[where]


def test_regions_that_overlap_are_refused(out) -> None:
    regions = {"a": {"outer": "2 kpc"}, "b": {"outer": "3 kpc"}}
    ratio = {"regions": {"a": 0.5, "b": 0.6}, "elsewhere": 0.7}
    raw = demo_recipe(out, gas={**GAS, "line_ratio": ratio}, regions=regions)
    with pytest.raises(GridError, match=r"gas.line_ratio.regions.*pixels of b lie in a region"):
        reduce_maps(parse_recipe(raw, folder=out), out / "bad")


def test_a_map_of_something_else_is_refused(out, base) -> None:
    on_grid(out, "kelvin.fits", np.full(base["radius"].shape, 650.0))
    raw = demo_recipe(out, gas={**GAS, "line_ratio": {"map": "kelvin.fits"}})
    with pytest.raises(GridError, match=r"holds a ratio between 0 and 10 \(median 650\)"):
        reduce_maps(parse_recipe(raw, folder=out), out / "bad")


def test_impossible_pixels_of_a_map_are_blank_and_counted(out, base) -> None:
    ratio = np.full(base["radius"].shape, 0.65)
    ratio[40:44, 40:44] = -0.1
    on_grid(out, "holed.fits", ratio)
    changes = {"gas": {**GAS, "line_ratio": {"map": "holed.fits"}}}
    got = converted(out, **changes)
    assert np.isnan(got["sigma_mol"][40:44, 40:44]).all()
    assert "16 pixels are not a ratio between 0 and 10: blank" in notes_of(out, **changes)
    changes["gas"]["line_ratio"]["elsewhere"] = 0.65
    close(converted(out, **changes)["sigma_mol"], base["sigma_mol"])
    assert "0.65 in 16 blank pixels" in notes_of(out, **changes)


# --- metallicity ----------------------------------------------------------------------------------


def oh_of(out: Path, metallicity: dict[str, Any], **changes: Any) -> np.ndarray:
    return converted(out, metallicity=metallicity, **changes)["metallicity"]


def test_a_gradient_in_every_length(out, base) -> None:
    galaxy = {**demo_recipe(out)["galaxy"], "r_e": "60 arcsec"}
    kpc_per_arcsec = 8.6e3 * np.pi / 648000
    for length, arcsec in (("r25", 156.0), ("r_e", 60.0)):
        gradient = -0.045 * arcsec * kpc_per_arcsec
        given = {"oh": 8.75, "gradient": f"{gradient!r} dex/{length}"}
        close(oh_of(out, given, galaxy=galaxy), base["metallicity"], 1e-6)


def test_a_ratio_of_strong_lines(out, base) -> None:
    # O3N2 from -1.4 outwards: the first pixels are below the range of Pettini & Pagel 2004.
    o3n2 = -1.4 + 0.4 * base["radius"]
    on_grid(out, "o3n2.fits", o3n2)
    on_grid(out, "o3n2_error.fits", np.full(o3n2.shape, 0.1))
    lines = {"o3n2": {"map": "o3n2.fits", "error": "o3n2_error.fits"}}
    given = {"calibration": "pettini2004_o3n2", "lines": lines}
    changes = {"metallicity": given, "gas": {**GAS, "alpha_co": "sun2020"}}
    got = converted(out, **changes)
    close(got["metallicity"], 8.73 - 0.32 * o3n2, 1e-6)
    flags = got["flags"]
    outside = (o3n2 < -1.0) | (o3n2 > 1.9)
    # ... or outside that of alpha_CO, 0.2 to 2 in Z'.
    z_prime = 10 ** (8.73 - 0.32 * o3n2 - 8.69)
    told = outside | (z_prime < 0.2) | (z_prime > 2.0)
    sure = (np.abs(o3n2 + 1.0) > 1e-5) & (np.abs(z_prime - 0.2) > 1e-5)
    np.testing.assert_array_equal(((flags & 8) != 0)[sure], told[sure])
    assert f"{int(outside.sum())} pixels outside its range" in notes_of(out, **changes)
    # Sun et al. 2020: alpha ~ Z'^-1.6, so d ln(Sigma_mol) = 1.6 ln(10) x 0.32 x 0.1.
    plain = oh_free_error(out, given)
    shift = got["sigma_mol"] * 1.6 * np.log(10) * 0.032
    close(got["sigma_mol_error"], np.hypot(plain, shift), rtol=0.01)


def oh_free_error(out: Path, given: dict[str, Any]) -> np.ndarray:
    lines = {"o3n2": {"map": "o3n2.fits"}}
    return converted(
        out, metallicity={**given, "lines": lines}, gas={**GAS, "alpha_co": "sun2020"}
    )["sigma_mol_error"]


def test_relative_to_a_solar_anchor(out, base) -> None:
    # Half solar on 8.76 is 8.459; metals of 0.02 x 0.5 in solar proportion, with 0.0134 in the Sun
    # at 8.69 (Asplund et al. 2009, from memory), are 8.5629.
    close(
        oh_of(out, {"z_prime": 0.5, "solar": "8.69"}), np.full(base["radius"].shape, 8.38897), 1e-6
    )
    for anchor, oh, shift in (("8.76", 8.45897, r"\+0.070"), ("Z = 0.02", 8.56289, r"\+0.174")):
        given = {"z_prime": 0.5, "solar": anchor}
        np.testing.assert_allclose(oh_of(out, given), oh, atol=1e-4)
        with pytest.warns(KspipeWarning, match=rf"metallicity.solar.*shifts by {shift} dex"):
            make_plan(parse_recipe(demo_recipe(out, metallicity=given), folder=out))


def test_the_mass_of_the_galaxy_is_a_stated_fallback(out, base) -> None:
    # Curti et al. 2020, Eq. 2: 8.7199 for 1e10 Msun (a worked value).
    given = {"relation": "curti2020", "stellar_mass": "1e10 solMass"}
    with pytest.warns(KspipeWarning, match="a fallback"):
        make_plan(parse_recipe(demo_recipe(out, metallicity=given), folder=out))
    np.testing.assert_allclose(oh_of(out, given), 8.7199, atol=1e-4)
    assert "by the galaxy's stellar mass 1e10 solMass" in notes_of(out, metallicity=given)
    # Sanchez et al. 2019 at the effective radius: 8.6628, and the gradient turns around it.
    galaxy = {**demo_recipe(out)["galaxy"], "r_e": "60 arcsec"}
    given = {**given, "relation": "sanchez2019", "gradient": "-0.1 dex/r_e"}
    got = oh_of(out, given, galaxy=galaxy)
    radius = base["radius"] / (60 * 8.6e3 * np.pi / 648000)
    close(got, 8.6628 - 0.1 * (radius - 1.0), 2e-5)


def test_the_scale_of_a_calibration_is_held_against_alpha_co(out, base) -> None:
    on_grid(out, "n2.fits", np.full((109, 112), -0.6))
    given = {"calibration": "pettini2004_n2", "lines": {"n2": {"map": "n2.fits"}}}
    gas = {**GAS, "alpha_co": "accurso2017", "ms_offset": "0 dex"}
    raw = demo_recipe(out, metallicity=given, gas=gas)
    with pytest.warns(KspipeWarning, match=r'"PP04 N2": "accurso2017" is tied to PP04 O3N2'):
        make_plan(parse_recipe(raw, folder=out))


@pytest.mark.parametrize(
    ("given", "where", "why"),
    [
        ({"z_prime": 0.5}, "metallicity", "z_prime needs solar"),
        ({"z_prime": 0.5, "solar": "8.7"}, "metallicity.solar", "8.69"),
        ({"oh": 8.5, "solar": "8.69"}, "metallicity", "solar belongs to z_prime"),
        ({"calibration": "pettini2004_n2"}, "metallicity", "calibration needs lines"),
        (
            {"calibration": "pettini2004_n2", "lines": {"o3n2": 0.3}},
            "metallicity",
            "takes lines = {n2}; given: o3n2",
        ),
        ({"calibration": "pettini2005"}, "metallicity.calibration", "did you mean"),
        ({"relation": "curti2020"}, "metallicity", "relation needs stellar_mass"),
        (
            {
                "relation": "sanchez2019",
                "stellar_mass": "1e10 solMass",
                "gradient": "-0.1 dex/kpc",
            },
            "metallicity.relation",
            "needs galaxy.r_e",
        ),
        (
            {"calibration": "pettini2004_n2", "lines": {"n2": -0.5}, "scale": "D16"},
            "metallicity",
            'makes the scale "PP04 N2"',
        ),
        (
            {"oh": {"radius": [0, 1], "per": "kpc", "value": [8.5, 8.4]}, "gradient": "0 dex/kpc"},
            "metallicity",
            "one number for oh",
        ),
        ({"oh": 8.5, "error": "hi.fits"}, "metallicity", "error belongs to map"),
    ],
)
def test_metallicities_that_are_none(out, given, where, why) -> None:
    with pytest.raises(RecipeError) as caught:
        parse_recipe(demo_recipe(out, metallicity=given), folder=out)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert set(faults) == {where}
    assert why in faults[where]
