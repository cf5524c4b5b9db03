"""The radiation field in every way that a recipe may give it, in one unit for all relations."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.io import fits
from closure import matched_painted

from kspipe.kernels.noise import total_error
from kspipe.recipe.disc_tables import RadiationFieldTable
from kspipe.stages.law_inputs import law_inputs
from kspipe.stages.surface import surfaces_of


@pytest.fixture(scope="module")
def made():
    return matched_painted(1, noise=True)


def field_of(made, **table):
    plan, matched = made
    given = RadiationFieldTable.model_validate(table)
    recipe = plan.recipe.model_copy(update={"radiation_field": given})
    disc = surfaces_of(recipe, matched, plan.grid)
    return disc, law_inputs(recipe, disc)["g0"]


def test_a_number(made) -> None:
    _, g0 = field_of(made, field=3.4, unit="Habing")
    # Draine's field, that of the solar neighbourhood, is 1.7 of Habing's (common practice).
    assert float(g0.value) == pytest.approx(2.0)
    assert g0.noise == ()
    assert "2 of the solar neighbourhood" in g0.origin


def test_a_radial_table(made) -> None:
    table = {"radius": [0.0, 5.0], "per": "kpc", "value": [3.0, 1.0]}
    disc, g0 = field_of(made, field=table, unit="Draine")
    expected = np.interp(disc.radius_kpc, [0, 5], [3, 1])
    np.testing.assert_allclose(g0.value, expected, rtol=1e-12)
    assert "table of 2 radii" in g0.origin


def test_a_map_with_its_error(made, tmp_path) -> None:
    plan, _ = made
    y, _ = np.indices(plan.grid.shape)
    value = 1.0 + y / 50.0
    for name, array in (("g0", value), ("err", 0.1 * value)):
        fits.PrimaryHDU(array, plan.grid.wcs.to_header()).writeto(tmp_path / f"{name}.fits")
    field = {"map": str(tmp_path / "g0.fits"), "error": str(tmp_path / "err.fits")}
    _, g0 = field_of(made, field=field, unit="Habing")
    inner = np.s_[2:-2, 2:-2]
    np.testing.assert_allclose(g0.value[inner], value[inner] / 1.7, rtol=1e-6)
    np.testing.assert_allclose(total_error(g0.noise)[inner], 0.1 * value[inner] / 1.7, rtol=1e-6)


def test_the_field_of_the_stars_that_form(made) -> None:
    disc, g0 = field_of(made, origin="star formation")
    sfr = disc.surfaces["sigma_sfr"]
    np.testing.assert_allclose(g0.value, sfr.value / 2.5e-3, rtol=1e-12)
    np.testing.assert_allclose(total_error(g0.noise), sfr.error / 2.5e-3, rtol=1e-12)


@pytest.mark.parametrize("field", [-1.0, {"radius": [0, 5], "per": "kpc", "value": [1, -1]}])
def test_a_field_that_cannot_be(field) -> None:
    with pytest.raises(ValueError, match="positive field"):
        RadiationFieldTable.model_validate({"field": field, "unit": "Draine"})
