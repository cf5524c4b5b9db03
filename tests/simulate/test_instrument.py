"""Instruments on a painted plane against the analytic sky of the demonstration galaxy.

`demo_maps/make_demo.py` shares no code with kspipe: a sum of Gaussians stays one under a beam.
"""

from __future__ import annotations

import numpy as np
import pytest
from astropy.wcs import WCS
from demo import load_demo
from helpers import make_wcs, round_beam

from kspipe.maps.skymap import NoiseTerm
from kspipe.simulate import FinePlane, add_noise, look
from kspipe.simulate.sky import DiscModel, paint_disc


@pytest.mark.parametrize(
    ("pixel", "averages", "beam"),
    [
        (4.0, False, (13.4, 10.6, 35.0)),
        (4.0, True, (13.4, 10.6, 35.0)),
        (3.0, True, (9.0, 9.0, 0.0)),
    ],
)
def test_map_is_the_analytic_sky(pixel, averages, beam):
    demo = load_demo()
    plane = FinePlane.around(110.0, 1.0)
    east, north = plane.offsets_arcsec()
    ra_0, dec_0 = demo.CENTRE_DEG
    # Over 2 arcmin a plane and the sky differ by far less than the tolerance.
    dec = dec_0 + north / 3600
    ra = ra_0 + east / 3600 / np.cos(np.radians(dec))
    image = demo.true_intensity("24um", ra, dec, np.zeros((2, 2)))
    wcs = make_wcs((25, 25), pixel, centre=demo.CENTRE_DEG, rotation_deg=20.0)
    cov = demo.beam_cov(*beam)
    seen = look(image, plane, wcs, (25, 25), demo.CENTRE_DEG, cov, averages_pixels=averages)
    y, x = np.indices((25, 25), dtype=float)
    lon, lat = WCS(wcs.to_header()).wcs_pix2world(x, y, 0)
    box = averages * pixel**2 / 12.0 * np.eye(2)
    expected = demo.true_intensity("24um", lon, lat, cov + box)
    np.testing.assert_allclose(seen, expected, rtol=2e-3)
    assert np.median(np.abs(seen / expected - 1)) < 5e-4


def test_too_coarse_a_plane_is_refused():
    plane = FinePlane.around(50.0, 2.0)
    image = np.zeros((plane.n, plane.n))
    with pytest.raises(ValueError, match="too wide"):
        look(
            image,
            plane,
            make_wcs(),
            (40, 50),
            (48.1, -27.31),
            round_beam(4.0),
            averages_pixels=False,
        )


@pytest.mark.parametrize("fwhm", [0.0, 9.0])
def test_noise_has_the_stated_sigma_and_correlation(fwhm):
    # Autocorrelation of white noise under a Gaussian: exp(-d^2 / 4 s^2) (common practice).
    rng = np.random.default_rng(5)
    cov = round_beam(fwhm)
    term = NoiseTerm("a", np.full((400, 400), 2.0), cov)
    noise = add_noise(np.zeros((400, 400)), (term,), np.diag([-2.0, 2.0]), rng)
    assert noise.std() == pytest.approx(2.0, rel=0.03)
    for lag in (1, 3):
        expected = np.exp(-((2.0 * lag) ** 2) / (4 * cov[0, 0])) if fwhm else 0.0
        measured = np.mean(noise[:, lag:] * noise[:, :-lag]) / 4.0
        assert measured == pytest.approx(expected, abs=0.03)


def test_painted_disc_follows_its_law():
    model = DiscModel(
        inclination_deg=40.0,
        pa_deg=30.0,
        kpc_per_arcsec=0.04,
        mol_scale_kpc=2.0,
        atom_radius_kpc=10.0,
        star_scale_kpc=2.5,
        clump_kpc=0.3,
        scatter_kpc=0.3,
    )
    plane = FinePlane.around(60.0, 1.0)

    def law(gas, _oh):
        return 1e-3 * gas**1.4

    disc = paint_disc(model, plane, lambda r: 8.7 - 0.03 * r, law, np.random.default_rng(2))
    gas = disc.sigma_atom + disc.sigma_mol
    offset = np.log10(disc.sigma_sfr / law(gas, None))
    assert offset.std() == pytest.approx(model.scatter_dex, rel=0.15)
    assert np.median(offset) == pytest.approx(0.0, abs=0.05)
    # Clumps keep the mean of their profile.
    smooth = model.mol_centre_msun_pc2 * np.exp(-disc.radius_kpc / 2.0)
    assert disc.sigma_mol.sum() / smooth.sum() == pytest.approx(1.0, abs=0.1)
