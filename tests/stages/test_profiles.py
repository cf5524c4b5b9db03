"""Profiles: sums that must add up, errors against draws of the noise, limits."""

from __future__ import annotations

import numpy as np
import pytest
from closure import matched_painted

from kspipe.kernels.noise import sum_covariance
from kspipe.maps.skymap import NoiseTerm
from kspipe.simulate import add_noise
from kspipe.stages.profiles import profile_table, rings_of
from kspipe.stages.surface import surfaces_of


@pytest.fixture(scope="module")
def scene():
    plan, matched = matched_painted(1, noise=True)
    disc = surfaces_of(plan.recipe, matched, plan.grid)
    covered = np.isfinite(disc.surfaces["sigma_gas"].value)
    covered &= np.isfinite(disc.surfaces["sigma_sfr"].value)
    centre = disc.radius_kpc < 1.0
    table = profile_table(
        plan.recipe, disc, covered, plan.grid, plan.target_arcsec2, {"centre": centre}
    )
    return plan, disc, covered, table


def test_rings_add_up_to_all(scene):
    _, _, covered, table = scene
    rings = table[np.isfinite(table["inner_kpc"])]
    whole = table[table["region"] == "all"][0]
    assert rings["n_pixels"].sum() == whole["n_pixels"] == covered.sum()
    assert rings["area_kpc2"].sum() == pytest.approx(whole["area_kpc2"])
    for name in ("sigma_atom", "sigma_mol", "sigma_gas", "sigma_sfr"):
        total = np.sum(rings[name] * rings["area_kpc2"])
        assert total == pytest.approx(whole[name] * whole["area_kpc2"], rel=1e-9)


def test_error_of_all_is_the_exact_sum(scene):
    plan, disc, covered, table = scene
    noise = disc.surfaces["sigma_mol"].noise
    exact = np.sqrt(sum_covariance(noise, noise, covered, plan.grid.jacobian_arcsec()))
    whole = table[table["region"] == "all"][0]
    assert whole["sigma_mol_err"] == pytest.approx(exact / covered.sum(), rel=1e-4)


def test_named_region_has_its_row(scene):
    _, disc, _, table = scene
    row = table[table["region"] == "centre"][0]
    inside = disc.radius_kpc < 1.0
    assert row["sigma_gas"] == pytest.approx(
        np.mean(disc.surfaces["sigma_gas"].value[inside]), rel=1e-5
    )
    assert row["covered_share"] == 1.0
    # f_mol of the means, not the mean of f_mol.
    assert row["f_mol"] == pytest.approx(row["sigma_mol"] / row["sigma_gas"])


def test_limits_only_where_not_detected(scene):
    table = scene[-1]
    faint = table["sigma_mol"] < 3 * table["sigma_mol_err"]
    assert faint.any()
    np.testing.assert_array_equal(np.isfinite(table["sigma_mol_limit"]), faint)
    # The region's own error: outer rings, of noisier sky, have looser limits.
    limits = table["sigma_mol_limit"][faint][:-1]
    assert (limits > 0).all()


def test_errors_are_the_scatter_of_draws(scene):
    """Noise drawn in real space (kspipe.simulate) against the stated errors of ring means."""
    plan, disc, covered, table = scene
    jacobian = plan.grid.jacobian_arcsec()
    term = disc.surfaces["sigma_atom"].noise[0]
    # Matched noise is a Gaussian's to a percent; its sigma varies over the field.
    drawn = NoiseTerm("hi", np.nan_to_num(term.sigma), term.correlation_arcsec2)
    beam_kpc = table.meta["beam_kpc"]
    rings = [r.inside & covered for r in rings_of(disc.radius_kpc, covered, beam_kpc)][:8]
    rng = np.random.default_rng(4)
    means = []
    for _ in range(300):
        noise = add_noise(np.zeros(covered.shape), (drawn,), jacobian, rng)
        means.append([noise[ring].mean() for ring in rings])
    means = np.array(means)
    stated = np.asarray(table["sigma_atom_err"])[:8]
    # 300 draws know a scatter to 4 %.
    np.testing.assert_allclose(means.std(axis=0), stated, rtol=0.16)
    beside = [np.corrcoef(means[:, i], means[:, i + 1])[0, 1] for i in range(7)]
    np.testing.assert_allclose(beside, table["sigma_atom_next_corr"][:7], atol=0.17)
