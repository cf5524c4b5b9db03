"""The ladder against the analytic sky, and its counts of massive stars against closed forms."""

from __future__ import annotations

import math

import numpy as np
import pytest
from closure import load_demo

from kspipe.conversions.tracer_ages import TRACER_AGES, massive_stars_per_msun
from kspipe.kernels.geometry import beam_axes
from kspipe.trials.ladder import _limits, _massive_stars, climb, plain_ladder, widened


def test_wider_beam_is_the_sky_at_that_beam(noise_free):
    # Independent truth: the painter's analytic Gaussians (demo_maps/make_demo.py).
    wide = widened(noise_free, 2)
    lon, lat = wide.grid.sky()
    complete = np.min([sky.coverage for sky in wide.matched.values()], axis=0) > 0.9999
    for tracer, sky in wide.disc.intensity.items():
        truth = load_demo().true_intensity(tracer, lon, lat, wide.beam_arcsec2)
        used = complete & (truth > 0.05 * truth.max())
        assert beam_axes(wide.beam_arcsec2)[0] == pytest.approx(30.0)
        np.testing.assert_allclose(sky.value[used], truth[used], rtol=5e-3, err_msg=tracer)


def test_noise_falls_as_the_beam_widens(demo):
    # Noise correlated like a beam b, smoothed to 2 b: sqrt(det C / det 4 C) = 1 / 4 in variance
    # (integral of a product of Gaussians).
    wide = widened(demo, 2)
    for name, sky in wide.matched.items():
        full = (sky.coverage > 0.9999) & (demo.matched[name].coverage > 0.9999)
        ratio = np.median((sky.error / demo.matched[name].error)[full])
        assert 0.3 < ratio < 0.6, name


def test_massive_stars_of_a_broken_power_law():
    # Kroupa 2001 written out: m^-2.3 above 0.5 Msun, 2 m^-1.3 below, 0.1 to 100 Msun.
    number = (8**-1.3 - 100**-1.3) / 1.3
    mass = 2 * (0.5**0.7 - 0.1**0.7) / 0.7 + (0.5**-0.3 - 100**-0.3) / 0.3
    assert massive_stars_per_msun("Kroupa") == pytest.approx(number / mass, rel=1e-6)
    # Some 0.01 supernovae per solar mass (common practice).
    assert 0.009 < massive_stars_per_msun("Kroupa") < 0.013


def test_ages_are_those_of_the_review():
    # Kennicutt & Evans 2012, Table 1: youngest, mean, 90 percent [Myr].
    assert str(TRACER_AGES["Halpha"]) == "0-3-10"
    assert str(TRACER_AGES["FUV"]) == "0-10-100"
    assert str(TRACER_AGES["NUV"]) == "0-10-200"
    assert str(TRACER_AGES["24um"]) == "0-5-100"


def test_expected_stars_by_hand(demo):
    chosen = demo.lattice()
    expected, ages = _massive_stars(demo, chosen)
    assert set(ages) == {"FUV", "24um"}
    # Sigma_SFR x face-on beam area x 100 Myr x stars per Msun; 15 arcsec at 8.6 Mpc, i = 41 deg.
    beam_kpc2 = math.pi / (4 * math.log(2)) * (15 * 8.6 / 206.264806) ** 2
    per_sigma = beam_kpc2 / math.cos(math.radians(41)) * 1e8 * massive_stars_per_msun("Kroupa")
    np.testing.assert_allclose(
        expected, per_sigma * demo.disc.surfaces["sigma_sfr"].value[chosen], rtol=1e-6
    )


def test_labels():
    assert _limits(400.0, 0.1) == ["beam of 400 pc, below 500 pc"]
    assert len(_limits(600.0, 0.6)) == 1
    assert _limits(600.0, 0.5) == []
    assert _limits(600.0, math.nan) == []


def test_top_rung_without_samples_says_so(demo):
    rung = climb(demo, (8,))[0]
    assert rung.line.n < 10
    assert not rung.line.is_fitted
    assert "needs 10" in rung.line.message
    plain = plain_ladder([rung])[0]
    assert math.isnan(plain["line"]["slope"])
    assert rung.n_independent == pytest.approx(demo.used.sum() * 25 / (2 * 64 * 254.95), rel=0.1)
