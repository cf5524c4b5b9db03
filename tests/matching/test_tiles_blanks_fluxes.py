"""Tiles equal the whole map, any blanks leave a flat sky flat, flux survives in every unit."""

from __future__ import annotations

import numpy as np
import pytest
from astropy.io import fits
from helpers import CENTRE, make_hdu, make_sky, make_wcs, read_map
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage

from kspipe.kernels.geometry import beam_covariance
from kspipe.kernels.noise import NoiseTerm
from kspipe.matching import Grid, bending, match_map


def round_beam(fwhm: float) -> np.ndarray:
    return beam_covariance(fwhm, fwhm, 0.0)


def grid_around(n: int, pixel: float) -> Grid:
    return Grid(make_wcs((n, n), pixel), (n, n), pixel, CENTRE)


@pytest.mark.parametrize("correlated", [False, True], ids=["white", "beam"])
def test_tiles_equal_the_whole_map(monkeypatch, correlated) -> None:
    """Within 1e-6 of the peak at 3 pixels per FWHM, and noise within 1e-3 of the local sigma."""
    rng = np.random.default_rng(5)
    side, pixel = 400, 3.0
    # White noise smoothed to 3 pixels FWHM is sampled at 3 pixels per FWHM.
    value = ndimage.gaussian_filter(rng.normal(size=(side, side)), 3 / 2.3548)
    value[150:170, 90:260] = np.nan
    sigma = 1.0 + ndimage.gaussian_filter(rng.normal(size=(side, side)), 20) * 20
    beam = round_beam(9.0)
    term = NoiseTerm("n", sigma, beam if correlated else np.zeros((2, 2)))
    wcs = make_wcs((side, side), pixel, rotation_deg=20.0)
    sky = make_sky(value, wcs=wcs, beam_arcsec2=beam, noise=(term,))
    results = []
    for size in (10_000, 70):
        monkeypatch.setattr(bending, "TILE", size)
        results.append(match_map(sky, round_beam(15.0), grid_around(180, 5.0)))
    whole, tiles = results
    seen = np.isfinite(whole.value)
    np.testing.assert_array_equal(seen, np.isfinite(tiles.value))
    peak = np.abs(whole.value[seen]).max()
    assert np.abs(whole.value - tiles.value)[seen].max() < 1e-6 * peak
    np.testing.assert_allclose(tiles.error[seen], whole.error[seen], rtol=1e-3)


@settings(max_examples=40, deadline=None, derandomize=True)
@given(
    shape=st.tuples(st.integers(24, 70), st.integers(24, 70)),
    share=st.floats(0.0, 0.9),
    seed=st.integers(0, 1000),
    box=st.tuples(*[st.integers(0, 40)] * 4),
)
def test_any_blanks_leave_a_flat_sky_flat(shape, share, seed, box) -> None:
    rng = np.random.default_rng(seed)
    value = np.full(shape, 2.5)
    value[rng.random(shape) < share] = np.nan
    value[box[0] : box[0] + box[1], box[2] : box[2] + box[3]] = np.nan
    beam = round_beam(9.0)
    term = NoiseTerm("n", np.ones(shape), beam)
    sky = make_sky(value, wcs=make_wcs(shape, 3.0), beam_arcsec2=beam, noise=(term,))
    matched = match_map(sky, round_beam(15.0), grid_around(30, 5.0))
    seen = np.isfinite(matched.value)
    np.testing.assert_allclose(matched.value[seen], 2.5, rtol=1e-4)
    assert not np.any(seen & (matched.coverage < 0.5))
    assert (matched.error[seen] > 0).all()


UNITS = {
    "HI": ["K km/s", "Jy/beam km/s", "JY/BEAM.M/S", "cm-2"],
    "FUV": ["MJy/sr", "Jy/pixel", "mJy/arcsec2", "Jy/beam", "erg/s/cm2/Hz/sr"],
    "Halpha": ["erg/s/cm2/arcsec2", "erg/s/cm2/sr", "Rayleigh", "W/m2/sr"],
}


@pytest.mark.parametrize(("tracer", "unit"), [(t, u) for t, us in UNITS.items() for u in us])
def test_flux_is_conserved_in_every_unit(tracer, unit) -> None:
    """To 1e-4 over the footprint: what is read on the map's pixels is there on the grid's."""
    side = 91
    y, x = np.indices((side, side))
    data = np.exp(-((x - 47.3) ** 2 + (y - 43.9) ** 2) / 2 / 5.0**2)
    hdu: fits.PrimaryHDU = make_hdu(
        data, wcs=make_wcs((side, side), 3.0, rotation_deg=33.0), unit=unit
    )
    sky = read_map(hdu, tracer=tracer, velocity_kms=640.0, beam=(9.0, 9.0, 0.0), zeros="flux")
    matched = match_map(sky, round_beam(15.0), grid_around(50, 5.0))
    before, after = matched.facts["flux_before"], matched.facts["flux_after"]
    assert before > 0
    assert after == pytest.approx(before, rel=1e-4)
