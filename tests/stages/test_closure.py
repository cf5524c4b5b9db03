"""The reduction recovers the analytic truth of the demo sky, within the errors that it states."""

from __future__ import annotations

import pytest
from closure import PRODUCTS, coverage_table, noise_free_percentiles, reduce_painted


@pytest.mark.parametrize("recipe", ["orrinda_short.toml", "orrinda_full.toml"])
def test_noise_free_sky_is_recovered(recipe):
    # Independent truth: the painter's analytic Gaussians (demo_maps/make_demo.py).
    for name, (p1, p16, _, p84, p99) in noise_free_percentiles(recipe).items():
        assert -0.2 < p16 <= p84 < 0.2, name
        assert -0.5 < p1 <= p99 < 0.5, name


@pytest.mark.slow
def test_errors_hold_the_truth_as_often_as_they_say():
    """Pooled over 20 noise seeds, per product and separately by S/N.

    A normal distribution holds 68.27 % within 1 sigma and 95.45 % within 2. The ratios f_mol and
    t_dep are asked of their intervals, LOWER and UPPER: no symmetric error of a ratio holds both
    where its denominator is faint.
    """
    rows = coverage_table(range(1, 21))
    for row in rows:
        assert 0.665 <= row.within_1 <= 0.70, row
        assert 0.945 <= row.within_2 <= 0.965, row
    tested = {(row.product, row.snr) for row in rows if row.n > 1000}
    assert tested == {(name, snr) for name in PRODUCTS for snr in ("< 1", "1 to 5", "> 5")}


def test_demo_is_as_faint_as_promised():
    """At least 30 % of the covered pixels are below S/N 1, some of them negative."""
    run = reduce_painted(1, noise=True)
    mol = run.disc.surfaces["sigma_mol"]
    covered = run.disc.coverage["sigma_gas"] >= 0.5
    faint = (mol.value < mol.error) & covered
    assert faint.sum() > 0.30 * covered.sum()
    assert (mol.value[covered] < 0).sum() > 0.1 * covered.sum()
