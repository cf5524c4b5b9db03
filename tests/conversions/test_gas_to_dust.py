"""Gas where CO fails: from dust, and alpha_CO from the evenness of the gas-to-dust ratio."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest
from astropy.io import fits
from demo_disc import converted, disc_of, matched_maps, recipe_of, shared_folder
from helpers import demo_recipe
from typer.testing import CliRunner

from kspipe.cli.app import app
from kspipe.conversions import GAS_TO_DUST, fit_alpha_co_and_gas_to_dust
from kspipe.core.errors import InputError, KspipeWarning, RecipeError
from kspipe.maps.product import read_image
from kspipe.stages.joint_fit import fit_joint
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import reduce_maps


@pytest.fixture(scope="module")
def out() -> Path:
    return shared_folder()


def test_records() -> None:
    # Remy-Ruyer et al. 2014, Table 1 (from memory): 10^2.21 at solar metallicity.
    for key in ("remyruyer2014_linear", "remyruyer2014_power", "remyruyer2014_broken"):
        assert float(GAS_TO_DUST.get(key)(np.array(8.69))) == pytest.approx(162.18, rel=1e-4)
    linear, power, broken = (
        GAS_TO_DUST.get(f"remyruyer2014_{name}") for name in ("linear", "power", "broken")
    )
    # A slope of one: half the metals, half the dust.
    assert float(linear(np.array(8.39)) / linear(np.array(8.69))) == pytest.approx(10**0.3)
    assert float(power(np.array(7.69)) / power(np.array(8.69))) == pytest.approx(10**2.02)
    # The branches of the broken line meet at 8.10 to the digits of its coefficients.
    ends = broken(np.array([8.1 - 1e-9, 8.1 + 1e-9]))
    assert abs(np.log10(ends[0] / ends[1])) < 0.015
    # Leroy et al. 2011 (from memory): log10 G/D = 9.4 - 0.85 OH.
    leroy = GAS_TO_DUST.get("leroy2011")
    assert float(leroy(np.array(8.69))) == pytest.approx(10 ** (9.4 - 0.85 * 8.69), rel=1e-12)
    for record in GAS_TO_DUST:
        assert "follows dust by assumption" in record.note
        values = record(np.linspace(7.2, 9.0, 100))
        assert np.all(np.diff(values) < 0) or record is broken
        assert np.isnan(record(np.array([np.nan])))[0]


def recipe_changes(out: Path, **state: Any) -> dict[str, Any]:
    maps = demo_recipe(out)["maps"]
    dust = {**maps["ir"], "tracer": "Sigma_dust", "inclination": "sky", **state}
    dust |= {"unit": "Msun/pc2", "noise": "0.02 Msun/pc2"}
    del maps["co"]
    maps["dust"] = {k: v for k, v in dust.items() if v is not None}
    return {"maps": maps, "gas": {"gas_to_dust": "remyruyer2014_linear"}}


def test_molecules_are_what_is_left(out) -> None:
    changes = recipe_changes(out)
    got = converted(out, **changes)
    stored = matched_maps(out)[1]["dust"].value
    ratio = 10 ** (2.21 + 8.69 - got["metallicity"])
    total = stored * np.cos(np.radians(41)) * ratio
    seen = np.isfinite(got["sigma_mol"])
    expected = (total - got["sigma_atom"])[seen]
    np.testing.assert_allclose(got["sigma_mol"][seen], expected, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(got["sigma_gas"][seen], total[seen], rtol=1e-9, atol=1e-9)
    # Negatives are kept.
    assert (got["sigma_mol"][seen] < 0).sum() > 100
    # All gas is that of dust: the noise of HI cancels in it and stays in the molecules.
    disc = disc_of(out, **changes)
    dust_error = disc.intensity["Sigma_dust"].error * np.cos(np.radians(41)) * ratio
    np.testing.assert_allclose(got["sigma_gas_error"][seen], dust_error[seen], rtol=1e-6)
    expected = np.hypot(dust_error, got["sigma_atom_error"])[seen]
    np.testing.assert_allclose(got["sigma_mol_error"][seen], expected, rtol=1e-6)


def test_the_circle_is_declared(out) -> None:
    with pytest.warns(KspipeWarning, match="held against its own input"):
        make_plan(recipe_of(out, **recipe_changes(out)))


@pytest.mark.parametrize(
    ("change", "where", "why"),
    [
        ({"gas": {}}, "gas", "give either alpha_co"),
        (
            {"gas": {"gas_to_dust": "leroy2011", "alpha_co": "sun2020"}},
            "gas",
            "give either alpha_co",
        ),
        (
            {"gas": {"gas_to_dust": "leroy2011", "line_ratio": 0.6}},
            "gas.line_ratio",
            "belongs to CO",
        ),
        ({"gas": {"gas_to_dust": "leroy2012"}}, "gas.gas_to_dust", "did you mean"),
        ({"maps": None}, "gas.gas_to_dust", "needs a map of Sigma_dust"),
    ],
)
def test_dust_that_is_not_there(out, change, where, why) -> None:
    changes = {**recipe_changes(out), **change}
    changes = {k: v for k, v in changes.items() if v is not None}
    with pytest.raises(RecipeError) as caught:
        recipe_of(out, **changes)
    faults = {fault.where: str(fault) for fault in caught.value.faults}
    assert why in faults[where]


# --- the joint fit --------------------------------------------------------------------------------


def region(
    alpha: float, ratio: float, rng: np.random.Generator, n: int = 200, scatter_dex: float = 0.05
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Dust, atoms and CO of a region with one gas-to-dust ratio up to a scatter."""
    atom = rng.uniform(4.0, 12.0, n)
    line = rng.lognormal(0.3, 1.0, n)
    dust = (atom + alpha * line) / ratio * 10 ** (scatter_dex * rng.standard_normal(n))
    return dust, atom, line


@pytest.mark.parametrize(("alpha", "ratio"), [(4.35, 100.0), (1.0, 150.0), (20.0, 300.0)])
def test_a_known_alpha_co_is_found(alpha: float, ratio: float) -> None:
    rng = np.random.default_rng(8)
    pulls = []
    for _ in range(6):
        fit = fit_alpha_co_and_gas_to_dust(*region(alpha, ratio, rng), rng, n_bootstrap=30)
        assert fit.is_bounded
        # Where CO is most of the gas, the ratio goes with alpha_CO and is as uncertain.
        share = fit.alpha_co_error / fit.alpha_co
        assert fit.gas_to_dust == pytest.approx(ratio, rel=max(0.05, 4 * share))
        assert fit.scatter_dex == pytest.approx(0.05, rel=0.3)
        pulls.append((fit.alpha_co - alpha) / fit.alpha_co_error)
    # Six fits: their mean within 3 of its error, and none absurd.
    assert abs(np.mean(pulls)) < 3 / np.sqrt(6)
    assert np.max(np.abs(pulls)) < 4


def test_without_scatter_it_is_exact() -> None:
    rng = np.random.default_rng(9)
    fit = fit_alpha_co_and_gas_to_dust(
        *region(4.0, 120.0, rng, scatter_dex=0.0), rng, n_bootstrap=5
    )
    # To the step of the trials, 2.3 %.
    assert fit.alpha_co == pytest.approx(4.0, rel=0.0125)
    assert fit.scatter_dex < 0.005


def test_where_co_is_a_constant_share_nothing_can_be_told() -> None:
    rng = np.random.default_rng(10)
    atom = rng.uniform(5, 10, 100)
    with pytest.raises(ValueError, match="no alpha_CO can be told"):
        fit_alpha_co_and_gas_to_dust(np.ones(100), atom, np.ones(100), rng)
    with pytest.raises(ValueError, match="at least 10"):
        fit_alpha_co_and_gas_to_dust(np.ones(5), atom[:5], np.ones(5), rng)
    # A galaxy of atoms alone drives alpha_CO to an end, which is told.
    dust, atom, _ = region(4.0, 100.0, rng)
    noise = np.abs(rng.normal(0, 1e-3, dust.size))
    assert not fit_alpha_co_and_gas_to_dust(atom / 100.0, atom, noise, rng).is_bounded


@pytest.mark.slow
def test_the_fit_of_a_reduced_galaxy(out) -> None:
    # A dust map made of the galaxy's own HI and CO with alpha_CO = 6 and a ratio of 120, and a
    # scatter of 0.03 dex.
    matched_maps(out)
    raw = demo_recipe(out)
    reduce_maps(recipe_of(out), out / "run", overwrite=True)
    atom, header = read_image(out / "run" / "maps" / "sigma_atom.fits")
    mol, _ = read_image(out / "run" / "maps" / "sigma_mol.fits")
    noise = 10 ** (0.03 * np.random.default_rng(12).standard_normal(atom.shape))
    dust = (atom + 6.0 / 4.35 * mol) / 120.0 * noise
    fits.PrimaryHDU(dust, header).writeto(out / "dust.fits", overwrite=True)
    table = {"tracer": "Sigma_dust", "file": "dust.fits", "noise": "0.01 Msun/pc2"}
    maps = {**raw["maps"], "dust": {**table, "inclination": "face-on", "averages_pixels": False}}
    changes = {"maps": maps, "regions": {"inner": {"outer": "4 kpc"}}}
    reduce_maps(recipe_of(out, **changes), out / "dusty", overwrite=True)
    fit = fit_joint(out / "dusty", "inner")
    assert fit.is_bounded
    assert abs(fit.alpha_co - 6.0) < 4 * max(fit.alpha_co_error, 0.023 * 6.0)
    # The ratio follows alpha_CO by the share of CO in the gas, at most as much.
    share = max(fit.alpha_co_error, 0.023 * 6.0) / fit.alpha_co
    assert fit.gas_to_dust == pytest.approx(120.0, rel=4 * share)
    result = CliRunner().invoke(app, ["fit-alpha", str(out / "dusty"), "--region", "inner"])
    assert result.exit_code == 0, result.output
    assert "held against its own input" in result.output
    assert "alpha_CO: " in result.output
    with pytest.raises(InputError, match='no region is called "outer"'):
        fit_joint(out / "dusty", "outer")
    reduce_maps(recipe_of(out), out / "run", overwrite=True)
    with pytest.raises(InputError, match="needs maps of HI, CO and Sigma_dust"):
        fit_joint(out / "run")
