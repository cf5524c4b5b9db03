"""Offsets on stars beyond the disc: astrometric between any tracers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from helpers import CENTRE, make_sky, make_wcs, round_beam
from scipy import ndimage

from kspipe.kernels.noise import NoiseTerm
from kspipe.matching import Grid
from kspipe.matching.point_sources import point_offset
from kspipe.matching.registration import register_maps

SIDE, PIXEL, FWHM = 121, 5.0, 15.0
SIGMA_PIX = FWHM / 2.354820045 / PIXEL
GRID = Grid(make_wcs((SIDE, SIDE), PIXEL), (SIDE, SIDE), PIXEL, CENTRE)
Y, X = np.indices((SIDE, SIDE), dtype=float)
OUTSIDE = np.hypot(X - 60, Y - 60) > 25


def stars(n: int, seed: int, *, width_pix: float = SIGMA_PIX, east: float = 0.0) -> np.ndarray:
    """Stars beyond the disc, at the same places for one seed, moved east by arcseconds."""
    rng = np.random.default_rng(seed)
    image = np.zeros((SIDE, SIDE))
    made = 0
    while made < n:
        x, y = rng.uniform(8, SIDE - 9, 2)
        if np.hypot(x - 60, y - 60) < 32:
            continue
        at = x - east / PIXEL  # longitude grows to the left
        image += np.exp(-0.5 * ((X - at) ** 2 + (Y - y) ** 2) / width_pix**2)
        made += 1
    return image


def sky_of(value: np.ndarray, sigma: float, *, name: str, tracer: str):
    """With noise of the beam's correlation, by smoothing in real space."""
    white = np.random.default_rng(len(name)).normal(size=(SIDE + 40, SIDE + 40))
    smooth = ndimage.gaussian_filter(white, SIGMA_PIX)[20:-20, 20:-20]
    noisy = value + sigma * smooth / smooth.std()
    term = NoiseTerm(name, np.full(value.shape, sigma), round_beam(FWHM))
    made = make_sky(noisy, wcs=GRID.wcs, beam_arcsec2=round_beam(FWHM), noise=(term,), name=name)
    return replace(made, tracer=tracer)


def disc(east: float) -> np.ndarray:
    """Emission of the galaxy, displaced between tracers by more than the stars."""
    at = 60 - east / PIXEL
    return 2 * np.exp(-0.5 * ((X - at) ** 2 + (Y - 60) ** 2) / 8**2)


def test_stars_place_a_map_where_emission_is_displaced() -> None:
    fuv = sky_of(disc(0) + stars(25, 1), 0.02, name="fuv", tracer="FUV")
    ir = sky_of(disc(12) + stars(25, 1, east=2.0), 0.03, name="infrared", tracer="24um")
    found = register_maps({"fuv": fuv, "infrared": ir}, GRID, None, OUTSIDE)
    moved = next(one for one in found.values() if one.reference)
    sign = 1 if moved.reference == "fuv" else -1
    assert moved.kind == "astrometric"
    assert moved.n_sources >= 10
    offset = moved.offset
    assert sign * offset.east_arcsec == pytest.approx(2.0, abs=3 * offset.east_error_arcsec)
    assert offset.north_arcsec == pytest.approx(0.0, abs=3 * offset.north_error_arcsec)
    assert offset.east_error_arcsec < 0.3
    assert f"on {moved.n_sources} point sources" in str(moved)
    assert (
        moved.proposal == f'shift = "{-offset.east_arcsec:.2f} {-offset.north_arcsec:.2f} arcsec"'
    )
    assert moved.as_plain()["correlation"] is None
    # Without the stars it is the emission that is displaced, and not called astrometric.
    by_light = register_maps({"fuv": fuv, "infrared": ir}, GRID)
    moved = next(one for one in by_light.values() if one.reference)
    assert moved.kind == "offset of emission"


def test_errors_hold_the_truth() -> None:
    """Pulls over 40 pairs have a width of one (their scatter of n sources is known to 15 %)."""
    pulls = []
    for seed in range(40):
        one = sky_of(stars(20, seed), 0.03, name=f"a{seed}" * (seed + 1), tracer="FUV")
        other = sky_of(stars(20, seed, east=1.0), 0.03, name="b" * (seed + 3), tracer="24um")
        found = point_offset(other, one, OUTSIDE, GRID.jacobian_arcsec())
        pulls.append((-found.x * PIXEL - 1.0) / np.sqrt(found.covariance[0, 0]) / PIXEL)
    assert 0.7 < np.std(pulls) < 1.45
    assert abs(np.mean(pulls)) < 0.7


def test_extended_sources_are_no_points() -> None:
    wide = stars(25, 3, width_pix=2.2 * SIGMA_PIX)
    one, other = (sky_of(wide, 0.005, name=name, tracer="FUV") for name in ("a", "bb"))
    assert point_offset(one, other, OUTSIDE, GRID.jacobian_arcsec()) is None


@pytest.mark.parametrize("n", [0, 3])
def test_too_few_stars_tell_nothing(n) -> None:
    one, other = (sky_of(stars(n, 4), 0.02, name=name, tracer="FUV") for name in ("a", "bb"))
    assert point_offset(one, other, OUTSIDE, GRID.jacobian_arcsec()) is None


def test_different_stars_are_not_taken_for_one() -> None:
    one = sky_of(stars(25, 5), 0.02, name="a", tracer="FUV")
    other = sky_of(stars(25, 6), 0.02, name="bb", tracer="24um")
    assert point_offset(one, other, OUTSIDE, GRID.jacobian_arcsec()) is None


def test_blanks_and_edges_are_kept_away_from() -> None:
    value = stars(25, 7)
    value[30:60, :20] = np.nan
    one, other = (sky_of(value, 0.02, name=name, tracer="FUV") for name in ("a", "bb"))
    found = point_offset(one, other, OUTSIDE, GRID.jacobian_arcsec())
    assert found is not None
    assert np.isfinite([found.x, found.y]).all()
