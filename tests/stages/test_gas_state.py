"""The state of the gas through the real chain: maps, columns, summary, fingerprints, bad files."""

from __future__ import annotations

import json
import shutil
import warnings
from dataclasses import replace
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from astropy.table import Table
from helpers import assert_maps_close, demo_recipe, make_wcs

import kspipe
from kspipe.core.errors import KspipeWarning, MapError, OutputError
from kspipe.maps.product import read_image, read_matched
from kspipe.maps.skymap import Flag
from kspipe.recipe import Recipe, load_recipe, parse_recipe
from kspipe.relations import LAWS
from kspipe.relations.inside_beam import beam_bias_dex, noise_bias
from kspipe.relations.state import QUANTITIES, TURBULENCE
from kspipe.relations.state.jeans import jeans_mass_msun
from kspipe.relations.state.thermal import gas_temperature
from kspipe.stages.compare import compare_relations
from kspipe.stages.plan import Plan, make_plan
from kspipe.stages.reduce import reduce_maps
from kspipe.stages.state import GasState, gas_state_of
from kspipe.stages.surface import Disc, surfaces_of

TYPED = {"density": "100 cm-3", "field": 1.0, "cosmic_rays": 1.0, "clumping": 5}
SMALL = {"beam": "40 arcsec", "size": "5 arcmin"}
BEAM_PC = 1667.76


@pytest.fixture(scope="module")
def folder(tmp_path_factory) -> Path:
    return tmp_path_factory.mktemp("gas state")


def recipe_of(folder: Path, state: dict[str, Any] | None, **changes: Any) -> Recipe:
    changes = {"grid": SMALL} | ({"gas_state": state} if state else {}) | changes
    return parse_recipe(demo_recipe(folder, **changes), folder=folder)


@pytest.fixture(scope="module")
def typed(folder) -> Path:
    """A whole run with every quantity in it."""
    write_linewidth(folder / "width.fits", "m/s", 6000.0)
    width = {"map": "width.fits", "is": "fwhm", "error": "0.3 km/s"}
    recipe = recipe_of(folder, TYPED | {"linewidth": width}, inside_beam={"scatter": "0.35 dex"})
    reduce_maps(recipe, folder / "typed")
    compare_relations(folder / "typed")
    return folder / "typed"


@pytest.fixture(scope="module")
def galaxy(typed) -> tuple[Plan, Disc]:
    plan = make_plan(load_recipe(typed / "recipe.toml"))
    matched = {name: read_matched(typed / "matched" / f"{name}.fits") for name in plan.sources}
    return plan, surfaces_of(plan.recipe, matched, plan.grid)


def state_of(
    compared: tuple[Plan, Disc], folder: Path, state: dict[str, Any], **changes: Any
) -> GasState:
    """Tell the state of the one galaxy under other choices."""
    plan, disc = compared
    got = gas_state_of(replace(plan, recipe=recipe_of(folder, state, **changes)), disc)
    assert got is not None
    return got


def summed(state: GasState) -> dict[str, Any]:
    return state.summary(np.ones(state.plan.grid.shape, dtype=bool))


def write_linewidth(path: Path, unit: str = "km/s", value: float = 6.0, **where: Any) -> None:
    header = make_wcs((60, 60), 15.0, **where).to_header()
    header["BUNIT"] = unit
    fits.PrimaryHDU(np.full((60, 60), value), header).writeto(path, overwrite=True)


def image(out: Path, name: str, extension: str | int = 0) -> np.ndarray:
    return read_image(out / "state" / f"{name}.fits", extension)[0]


def gas_of(out: Path) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    gas, error = (read_image(out / "maps" / "sigma_gas.fits", x)[0] for x in (0, "ERROR"))
    oh = read_image(out / "maps" / "metallicity.fits")[0]
    return gas, error, 10 ** (oh - 8.69)


def test_every_quantity_is_a_map_with_error_and_flags(typed) -> None:
    assert {path.stem for path in (typed / "state").iterdir()} == set(QUANTITIES)
    for path in (typed / "state").iterdir():
        with fits.open(path) as hdus:
            quantity = QUANTITIES[path.stem]
            names = [hdu.name for hdu in hdus]
            densities = ["AT_N_OVER_3", "AT_3N"] if quantity.follows_density else []
            assert names == ["PRIMARY", "ERROR", *densities, "FLAGS"]
            assert hdus[0].header["BUNIT"] == quantity.unit
            assert hdus[0].header["BASIS"] == "model-implied"
            history = " ".join(hdus[0].header["HISTORY"])
            assert "model-implied: a beam of 1.67e+03 pc" in history
            assert "100 cm-3 of H nuclei, typed" in history
            assert "5.0, typed" in history
            assert hdus["FLAGS"].header["FLAG512"] == "no_cold_solution"


def test_values_are_those_of_the_formulas(typed) -> None:
    gas, _, z = gas_of(typed)
    positive = np.where(gas > 0, gas, np.nan)
    # (3/4) 5 Sigma 1e-21 Z' / (1.4 m_H): 0.066850 per Msun/pc2 (Krumholz et al. 2009).
    assert_maps_close(image(typed, "depth_complex"), 0.066850 * 5 * positive * z, rtol=1e-4)
    n = np.full(gas.shape, 100.0)
    one = np.ones(gas.shape)
    cold = gas_temperature(n, one, one, z, image(typed, "depth_complex")).kelvin
    assert_maps_close(image(typed, "temperature_shielded"), cold, rtol=1e-5)
    mass = jeans_mass_msun(cold, n, definition="jeans_cube", mu=2.33)
    assert_maps_close(image(typed, "jeans_mass_shielded"), mass, rtol=1e-5)
    ball = jeans_mass_msun(cold, n, definition="bonnor_ebert_surface", mu=2.33)
    assert_maps_close(image(typed, "bonnor_ebert_mass_shielded"), ball, rtol=1e-5)
    for extension, factor in (("AT_N_OVER_3", 1 / 3), ("AT_3N", 3.0)):
        other = gas_temperature(factor * n, one, one, z, image(typed, "depth_complex")).kelvin
        assert_maps_close(image(typed, "temperature_shielded", extension), other, rtol=1e-5)


def test_errors_are_the_scatter_of_noisy_gas(typed) -> None:
    gas, error, z = gas_of(typed)
    sure = gas > 20 * error
    assert sure.sum() > 5
    rng = np.random.default_rng(8)
    drawn = gas[sure] + error[sure] * rng.normal(size=(4000, int(sure.sum())))
    one = np.ones(drawn.shape)
    cold = gas_temperature(100 * one, one, one, z[sure] * one, 0.066850 * 5 * drawn * z[sure])
    mass = jeans_mass_msun(cold.kelvin, 100.0, definition="jeans_cube", mu=2.33)
    # Scatter of 4000 draws: 1.1 %; the curvature at S/N 20 adds less than 2 %.
    for name, draws in (("temperature_shielded", cold.kelvin), ("jeans_mass_shielded", mass)):
        ratio = image(typed, name, "ERROR")[sure] / draws.std(axis=0)
        np.testing.assert_allclose(ratio, 1.0, atol=0.06)
    # Fainter gas moves its temperature far from linearly: half of the central 68 % of draws.
    faint = (gas > 2 * error) & (gas < 8 * error)
    assert faint.sum() > 5
    drawn = gas[faint] + error[faint] * rng.normal(size=(20_000, int(faint.sum())))
    one = np.ones(drawn.shape)
    depth = 0.066850 * 5 * np.maximum(drawn, 0.0) * z[faint]
    cold = gas_temperature(100 * one, one, one, z[faint] * one, depth).kelvin
    low, high = np.percentile(cold, [15.866, 84.134], axis=0)
    ratio = image(typed, "temperature_shielded", "ERROR")[faint] / (0.5 * (high - low))
    # A percentile half-width of 20000 draws is good to about 1 %.
    np.testing.assert_allclose(ratio, 1.0, atol=0.05)
    # What rests on choices alone has no random error.
    assert np.nanmax(image(typed, "temperature_unshielded", "ERROR")) == 0.0


def test_columns(typed) -> None:
    table = Table.read(typed / "pixels.ecsv")
    x, y = table["x"], table["y"]
    for name, quantity in QUANTITIES.items():
        for column, extension in ((f"state_{name}", 0), (f"state_{name}_err", "ERROR")):
            np.testing.assert_allclose(
                table[column], image(typed, name, extension)[y, x], rtol=1e-6
            )
        assert "model-implied" in table[f"state_{name}"].description
        assert (table[f"state_{name}"].unit is None) == (quantity.unit == "")
    flags = np.bitwise_or.reduce([image(typed, n, "FLAGS").astype(int) for n in QUANTITIES])
    np.testing.assert_array_equal(table["state_flags"], flags[y, x])


def test_the_summary(typed) -> None:
    summary = json.loads((typed / "summary.json").read_text(encoding="utf-8"))
    told = summary["gas_state"]
    assert told["label"] == "model-implied"
    assert set(told["quantities"]) == set(QUANTITIES)
    table = Table.read(typed / "pixels.ecsv")
    for name, entry in told["quantities"].items():
        column = np.asarray(table[f"state_{name}"], dtype=float)
        assert entry["n_without_value"] == np.sum(~np.isfinite(column))
        assert entry["median"] == pytest.approx(np.nanmedian(column), rel=1e-6)
        assert ("median_at_3n" in entry) == QUANTITIES[name].follows_density
    assert told["n_nonpositive_gas"] == np.sum(table["sigma_gas"] <= 0)
    # A third of 100 per cm3 has no cold solution in full light: counted.
    unshielded = told["quantities"]["temperature_unshielded"]
    assert unshielded["n_without_value_at_n_over_3"] == len(table)
    assert told["efficiencies"]["span"] > 10
    assert f"{len(TURBULENCE.keys())} models" in told["efficiencies"]["note"]
    assert "about 0.01 is observed" in told["efficiencies"]["note"]
    assert told["choices"]["mass per particle"].count("the default") == 2
    assert told["records"]["virial_parameter"]["certainty"] == "verified"
    assert "krumholz2011" in told["sources"]


def test_the_same_in_a_script(typed) -> None:
    comparison = kspipe.Comparison(typed)
    got = comparison.state("jeans_mass_shielded")
    assert got.unit == u.Msun
    np.testing.assert_array_equal(got.value, image(typed, "jeans_mass_shielded"))
    assert comparison.state("temperature_shielded", "AT_3N").unit == u.K
    with pytest.raises(KeyError, match="'jeans_mas' is not among the state of the gas"):
        comparison.state("jeans_mas")


def test_inside_the_beam(typed) -> None:
    table = Table.read(typed / "pixels.ecsv")
    law = LAWS.get("krumholz2009")
    rows = {
        "sigma_gas": np.asarray(table["sigma_gas"]),
        "oh": 8.69 + np.log10(np.asarray(table["z_prime"])),
    }
    given = {"clumping": 5.0}
    np.testing.assert_allclose(
        table["beam_bias_shielding_kpc"], beam_bias_dex(law, rows, given, 0.35), rtol=1e-9
    )
    expected = noise_bias(law, rows, given, np.asarray(table["sigma_gas_err"]))
    np.testing.assert_allclose(table["noise_bias_shielding_kpc"], expected, rtol=1e-9)
    told = json.loads((typed / "summary.json").read_text(encoding="utf-8"))["inside_beam"]
    assert told["shielding_kpc"]["median_noise_bias"] == pytest.approx(np.nanmedian(expected))
    assert told["shielding_kpc"]["n_without_value"] == np.sum(~np.isfinite(expected))


def test_without_the_table_nothing_is_told(galaxy, folder) -> None:
    plan, disc = galaxy
    assert gas_state_of(replace(plan, recipe=recipe_of(folder, None)), disc) is None


def test_field_and_density_from_the_maps(galaxy, folder) -> None:
    choices = TYPED | {
        "density": "larger",
        "midplane_density": "0.05 Msun/pc3",
        "field": "star formation",
        "cosmic_rays": "field",
        "density_clumping": 5.0,
        "clumping": "beam",
    }
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", KspipeWarning)
        got = state_of(galaxy, folder, choices)
    disc = galaxy[1]
    sfr, z = disc.surfaces["sigma_sfr"].value, 10 ** (disc.oh - 8.69)
    density = got.quantities["density"].value
    two = 23 * sfr / 2.5e-3 * 4.1 / (1 + 3.1 * z**0.365)
    seen = np.isfinite(density) & (sfr > 0)
    assert np.all(density[seen] >= two[seen] * (1 - 1e-12))
    floor = seen & (density > 1.01 * two)
    assert floor.any()
    assert not floor[seen].all()
    # On the floor the field and the density part ways, and noise in the star formation shows;
    # in two phases the density follows the field and the transition stays where it is.
    error = got.errors["depth_transition"]
    assert np.all(error[floor] > 0)
    two_phase = {k: v for k, v in choices.items() if k != "midplane_density"}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", KspipeWarning)
        still = state_of(galaxy, folder, two_phase | {"density": "two-phase"})
    np.testing.assert_allclose(still.errors["depth_transition"][seen], 0.0, atol=1e-15)
    assert f"5 for a beam of {BEAM_PC:.0f} pc" in got.choices["clumping"]
    # Without star formation there is no field, and no value.
    assert np.isnan(got.quantities["temperature_unshielded"].value[sfr <= 0]).all()


def test_without_co_the_midplane_holds_atoms_alone(galaxy, folder) -> None:
    plan, disc = galaxy
    atoms = {name: s for name, s in disc.surfaces.items() if name != "sigma_mol"}
    choices = TYPED | {"density": "hydrostatic", "midplane_density": "0.05 Msun/pc3"}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", KspipeWarning)
        got = state_of((plan, replace(disc, surfaces=atoms)), folder, choices)
        whole = state_of(galaxy, folder, choices)
    assert "no CO map" in got.choices["molecular gas"]
    assert "molecular gas" not in whole.choices
    both = np.isfinite(got.quantities["density"].value) & (disc.surfaces["sigma_mol"].value > 0)
    assert np.all(whole.quantities["density"].value[both] > got.quantities["density"].value[both])


def test_gas_without_a_cold_solution_is_flagged_counted_and_warned_of(galaxy, folder) -> None:
    with pytest.warns(KspipeWarning, match=r"gas_state\.density .*no cold solution in \d+ of"):
        got = state_of(galaxy, folder, TYPED | {"density": "30 cm-3"})
    flags = got.flags["jeans_mass_unshielded"]
    assert np.all((flags & int(Flag.NO_COLD_SOLUTION)) != 0)
    assert np.isnan(got.quantities["jeans_mass_unshielded"].value).all()
    told = summed(got)["quantities"]
    assert told["jeans_mass_unshielded"]["n_no_cold_solution"] == flags.size
    # Shielded gas of the same density is cold where the complex is thick.
    assert np.isfinite(got.quantities["jeans_mass_shielded"].value).any()


def test_a_small_beam_says_of_each_quantity_what_it_rests_on(galaxy, folder) -> None:
    near = demo_recipe(folder)["galaxy"] | {"distance": "0.45 Mpc"}
    got = state_of(galaxy, folder, TYPED, galaxy=near)
    assert got.beam_pc < 100
    assert summed(got)["label"] == "see each quantity"
    for name in got.quantities:
        assert got.label(name) == "model-implied"
    assert "rests on clumping" in " ".join(got.history("depth_complex"))


def test_a_linewidth_size_relation(galaxy, folder) -> None:
    got = state_of(galaxy, folder, TYPED | {"linewidth": "solomon1987", "cloud_radius": "30 pc"})
    # 0.72 (30)^0.5 km/s (Solomon et al. 1987, from memory), for a typed radius.
    np.testing.assert_allclose(got.quantities["linewidth"].value, 3.9436, rtol=5e-5)
    assert "30 pc, typed" in got.choices["cloud radius"]
    assert "coefficients from memory" in got.choices["linewidth"]
    assert "Solomon" in summed(got)["sources"]["solomon1987"]


# --- files of its own ----------------------------------------------------------------------------


def test_a_map_of_linewidths(typed) -> None:
    # 6000 m/s FWHM; FWHM = (8 ln 2)^0.5 sigma of a Gaussian line.
    sigma = 6.0 / 2.354820
    got = image(typed, "linewidth")
    np.testing.assert_allclose(got[np.isfinite(got)], sigma, rtol=1e-5)
    np.testing.assert_allclose(image(typed, "linewidth", "ERROR")[np.isfinite(got)], 0.3, rtol=1e-5)
    # 5 sigma^2 R / (G pi R^2 Sigma) with R half of the beam.
    gas, error, _ = gas_of(typed)
    complex_ = 5 * np.where(gas > 0, gas, np.nan)
    alpha = 5 * sigma**2 / (4.30092e-3 * np.pi * BEAM_PC / 2 * complex_)
    seen = np.isfinite(got) & (gas > 0)
    np.testing.assert_allclose(image(typed, "virial_parameter")[seen], alpha[seen], rtol=1e-4)
    # Half of the span of 1/(1 +- 1/snr) along the gas, and the linewidth to first order.
    snr = gas / error
    span = np.where(snr > 1, 1 / (1 - np.minimum(1 / snr, 0.999) ** 2) / snr, np.nan)
    relative = np.hypot(2 * 0.3 / sigma, span)
    seen &= snr > 1.01
    got_error = image(typed, "virial_parameter", "ERROR") / image(typed, "virial_parameter")
    np.testing.assert_allclose(got_error[seen], relative[seen], rtol=1e-4)
    history = " ".join(fits.getheader(typed / "state" / "linewidth.fits")["HISTORY"])
    assert "half of the beam" in history
    assert "interpolated, not smoothed" in history


def test_a_bad_map_of_linewidths_is_refused_before_anything_is_made(galaxy, folder) -> None:
    state = TYPED | {"linewidth": {"map": "bad.fits", "is": "sigma"}}
    write_linewidth(folder / "bad.fits", "K km/s")
    with pytest.raises(MapError, match=r"gas_state\.linewidth\.map.*BUNIT is \"K km/s\""):
        reduce_maps(recipe_of(folder, state), folder / "bad")
    assert not (folder / "bad").exists()
    write_linewidth(folder / "bad.fits", centre=(120.0, 10.0))
    with pytest.raises(MapError, match="does not reach the galaxy"):
        state_of(galaxy, folder, state)


FINER = {"tracer": "CO(2-1)", "file": "fine.fits", "noise": "0.01 K km/s"}


def write_fine(path: Path, value: np.ndarray, beam_arcsec: float = 4.0) -> None:
    header = make_wcs(value.shape, 1.5).to_header()
    header["BUNIT"] = "K km/s"
    header["BMAJ"] = header["BMIN"] = beam_arcsec / 3600
    header["BPA"] = 0.0
    fits.PrimaryHDU(value, header).writeto(path, overwrite=True)


def clumping_in(got: GasState, disc: Disc) -> np.ndarray:
    """Depth of the complex over that of the beam: 0.066850 Sigma Z' (Krumholz et al. 2009)."""
    smooth = 0.066850 * disc.surfaces["sigma_gas"].value * 10 ** (disc.oh - 8.69)
    return got.quantities["depth_complex"].value / smooth


def test_clumping_from_a_finer_map(galaxy, folder) -> None:
    # Cells of 6 arcsec, a quarter of them bright: <S^2>/<S>^2 inside a wide beam is that of the
    # cells, known from their values.
    rows, columns = np.indices((320, 320))
    value = np.where((rows // 4 % 2 == 0) & (columns // 4 % 2 == 0), 10.0, 2.0)
    write_fine(folder / "fine.fits", value)
    got = state_of(galaxy, folder, TYPED | {"clumping": "finer map", "finer_map": FINER})
    clumping = clumping_in(got, galaxy[1])
    expected = (value**2).mean() / value.mean() ** 2
    middle = np.isfinite(clumping)
    assert middle.sum() > 10
    # Beams that the edge of the map cuts hold another share of bright cells.
    np.testing.assert_allclose(clumping[middle], expected, rtol=0.03)
    assert np.median(clumping[middle]) == pytest.approx(expected, rel=1e-3)
    assert "CO(2-1), 4 arcsec = 167 pc" in got.story[0]


def test_noise_of_the_finer_map_is_taken_off(galaxy, folder) -> None:
    rng = np.random.default_rng(2)
    write_fine(folder / "fine.fits", 5.0 + rng.normal(0, 2.0, (320, 320)))
    finer = FINER | {"noise": "2.0 K km/s"}
    got = state_of(galaxy, folder, TYPED | {"clumping": "finer map", "finer_map": finer})
    clumping = clumping_in(got, galaxy[1])
    # 5 with noise 2 would be 1.16.
    assert np.nanmean(clumping) == pytest.approx(1.0, abs=0.01)
    # Below 1 is noise: kept, and flagged.
    below = clumping < 1 - 1e-3
    assert below.any()
    assert np.all((got.flags["depth_complex"][below] & int(Flag.OUTSIDE_RANGE)) != 0)


def test_a_finer_map_that_is_not_finer_is_refused(galaxy, folder) -> None:
    write_fine(folder / "fine.fits", np.full((320, 320), 5.0), beam_arcsec=50.0)
    with pytest.raises(MapError, match=r"gas_state\.finer_map"):
        state_of(galaxy, folder, TYPED | {"clumping": "finer map", "finer_map": FINER})


def test_what_makes_a_comparison_stale(typed, folder) -> None:
    out = shutil.copytree(typed, folder / "stale")
    assert not compare_relations(out)
    text = (out / "recipe.toml").read_text(encoding="utf-8")
    (out / "recipe.toml").write_text(text.replace('"cube"', '"virial"'), encoding="utf-8")
    with pytest.raises(OutputError, match="another recipe"):
        compare_relations(out)
    # Other contents of the map of linewidths make the reduction stale; another place does not.
    moved = folder / "moved.fits"
    shutil.copy(folder / "width.fits", moved)
    text = text.replace("width.fits", "moved.fits")
    (out / "recipe.toml").write_text(text, encoding="utf-8")
    assert not compare_relations(out)
    write_linewidth(moved, "m/s", 7000.0)
    with pytest.raises(OutputError, match="stale"):
        compare_relations(out)


def test_other_choices_reach_a_folder_that_is_there(typed, folder) -> None:
    out = shutil.copytree(typed, folder / "other choices")
    width = {"map": "width.fits", "is": "fwhm", "error": "0.3 km/s"}
    same = TYPED | {"linewidth": width}
    inside = {"scatter": "0.35 dex"}
    assert not reduce_maps(recipe_of(folder, same, inside_beam=inside), out)
    other = recipe_of(folder, same | {"jeans": "virial"}, inside_beam=inside)
    with pytest.raises(OutputError, match="another comparison"):
        reduce_maps(other, out)
    matched = {path: path.stat().st_mtime_ns for path in (out / "matched").iterdir()}
    before = image(out, "jeans_mass_shielded")
    assert reduce_maps(other, out, overwrite=True)
    compare_relations(out)
    # (5^1.5 (3/(4 pi))^0.5) / pi^1.5; nothing is smoothed again.
    assert_maps_close(image(out, "jeans_mass_shielded"), before * 0.98103, rtol=1e-4)
    assert matched == {path: path.stat().st_mtime_ns for path in (out / "matched").iterdir()}
