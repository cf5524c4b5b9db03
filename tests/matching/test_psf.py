"""Point-spread functions as images: reading, matching to a Gaussian, refusing; and bands that are
known not to be Gaussian."""

from __future__ import annotations

import math
import re
import warnings
from pathlib import Path
from types import SimpleNamespace
from typing import Any

import numpy as np
import pytest
from astropy.coordinates import SkyCoord
from astropy.io import fits
from helpers import (
    CENTRE,
    SIGMA_PER_FWHM,
    assert_maps_close,
    elliptical_beam,
    make_hdu,
    make_sky,
    make_wcs,
    open_source,
    read_map,
    round_beam,
)
from hypothesis import given, settings
from hypothesis import strategies as st
from photutils.psf_matching import make_kernel
from scipy import special

from kspipe.core.errors import BeamError, KspipeWarning, UnitError
from kspipe.kernels.geometry import beam_axes
from kspipe.maps.product import read_matched, write_matched
from kspipe.maps.psf import PsfImage, read_psf
from kspipe.maps.psf_records import PSF_RECORDS
from kspipe.maps.skymap import CommonError, NoiseTerm, SkyMap
from kspipe.matching import Grid, choose_beam, match_map
from kspipe.matching.psf import matching_kernel, smallest_psf_fwhm
from kspipe.matching.target import effective_beam, smallest_legal_fwhm
from kspipe.stages.summary import common_errors

fixed = settings(derandomize=True, deadline=None, max_examples=50)


# --- Skies and PSFs, written out ---------------------------------------------------------------


def offsets(wcs, shape, position=CENTRE) -> tuple[np.ndarray, np.ndarray]:
    """East and north of a position [arcsec]."""
    y, x = np.indices(shape, dtype=float)
    sky = wcs.pixel_to_world(x, y).icrs
    east, north = SkyCoord(*position, unit="deg").spherical_offsets_to(sky)
    return east.arcsec, north.arcsec


def gaussian(east, north, covariance) -> np.ndarray:
    """Integral 1 over the sky."""
    step = np.stack([east, north], axis=-1)
    exponent = np.einsum("...i,ij,...j", step, np.linalg.inv(covariance), step)
    return np.exp(-0.5 * exponent) / (2 * math.pi * math.sqrt(np.linalg.det(covariance)))


def double_gaussian(east, north, core=6.0, wings=24.0, share=0.15) -> np.ndarray:
    return (1 - share) * gaussian(east, north, round_beam(core)) + share * gaussian(
        east, north, round_beam(wings)
    )


def diffraction(east, north, core=6.0, obscured=0.0) -> np.ndarray:
    """Round aperture with a round obscuration (Born & Wolf, Principles of Optics, 8.6.2).

    The FWHM of the pattern without obscuration is 1.0290 lambda / D.
    """
    v = np.pi * np.hypot(east, north) * 1.0290 / core
    v = np.where(v == 0, 1e-9, v)
    field = 2 * special.j1(v) / v
    if obscured:
        field = field - obscured**2 * 2 * special.j1(obscured * v) / (obscured * v)
    # A field of 1 at the peak has the flux (lambda/D)^2 4/pi / (1 - e^2) for unit field (1 - e^2).
    field /= 1 - obscured**2
    return field**2 * math.pi / 4 * (1 - obscured**2) * (1.0290 / core) ** 2


SHAPES = {
    "double Gaussian": double_gaussian,
    "diffraction": diffraction,
    "obscured": lambda east, north: diffraction(east, north, obscured=0.33),
}


def psf_file(
    folder: Path,
    profile: Any,
    *,
    side: int = 161,
    pixel: float = 2.0,
    turn: float = 0.0,
    cards: dict[str, Any] | None = None,
    on_sky: bool = False,
    at: tuple[float, float] = (0.0, 0.0),
) -> Path:
    """Image of a profile on pixels of its own, its centre `at` so many arcsec east and north."""
    wcs = make_wcs((side, side), pixel, rotation_deg=turn)
    east, north = offsets(wcs, (side, side))
    header = wcs.to_header() if on_sky else fits.Header()
    header.update(cards or {})
    file = folder / f"psf_{abs(hash((side, pixel, turn, at, on_sky, str(cards))))}.fits"
    image = profile(east - at[0], north - at[1])
    fits.PrimaryHDU(image.astype(np.float64), header).writeto(file, overwrite=True)
    return file


def image_of(profile: Any, side: int = 161, pixel: float = 2.0) -> PsfImage:
    """The PSF on pixels of the map, without a file."""
    wcs = make_wcs((side, side), pixel)
    step = np.array([[-pixel, 0.0], [0.0, pixel]])
    return read_psf(profile(*offsets(wcs, (side, side))), fits.Header(), step, "psf", "maps.probe")


STEP = np.array([[-2.0, 0.0], [0.0, 2.0]])


def grid_on(wcs, side: int, pixel: float) -> Grid:
    """The pixels of the map themselves: nothing is interpolated."""
    return Grid(wcs, (side, side), pixel, CENTRE)


def plain_grid(side: int, pixel: float) -> Grid:
    return Grid(make_wcs((side, side), pixel), (side, side), pixel, CENTRE)


# --- A Gaussian image is a Gaussian ------------------------------------------------------------

BEAM = (7.0, 5.0, 35.0)


@pytest.fixture(scope="module")
def sky_hdu() -> fits.PrimaryHDU:
    """Blobs, a blank border and a hole, on turned pixels of 2 arcsec."""
    side, generator = 181, np.random.default_rng(5)
    wcs = make_wcs((side, side), 2.0, rotation_deg=25.0)
    image = np.zeros((side, side))
    for _ in range(40):
        position = CENTRE + generator.uniform(-0.04, 0.04, 2)
        covariance = elliptical_beam(*BEAM) + generator.uniform(0, 60) * np.eye(2)
        image += generator.uniform(0, 1) * gaussian(
            *offsets(wcs, image.shape, position), covariance
        )
    image[:9], image[:, -7:] = np.nan, np.nan
    y, x = np.indices(image.shape)
    image[np.hypot(x - 80, y - 100) < 8] = np.nan
    return make_hdu(image / np.nanmax(image), wcs=wcs, unit="MJy/sr", beam_arcsec=BEAM)


@pytest.mark.parametrize(
    "how",
    [
        {"pixel": 2.0, "turn": 25.0, "side": 81},
        {
            "pixel": 0.5,
            "turn": 25.0,
            "side": 161,
            "cards": {"CDELT1": -0.5 / 3600, "CDELT2": 0.5 / 3600},
        },
        {"pixel": 0.8, "turn": 25.0, "side": 120, "cards": {"PIXSCALE": 0.8}},
        {"pixel": 0.7, "turn": -40.0, "side": 141, "on_sky": True},
    ],
    ids=["on the map's pixels", "CDELT, finer", "PIXSCALE, even", "on the sky, turned"],
)
def test_the_image_of_a_gaussian_is_the_gaussian(tmp_path, sky_hdu, how) -> None:
    profile = lambda east, north: gaussian(east, north, elliptical_beam(*BEAM))  # noqa: E731
    read = {"tracer": "24um", "averages_pixels": False, "zeros": "flux"}
    grid, target = plain_grid(61, 5.0), round_beam(15.0)
    exact = match_map(read_map(sky_hdu, **read), target, grid)
    got = match_map(read_map(sky_hdu, psf=psf_file(tmp_path, profile, **how), **read), target, grid)
    peak = np.nanmax(exact.value)
    assert np.isfinite(exact.value).sum() > 2000
    # 1e-3 of the peak; pixels may be blank in one of them where coverage is just at its limit.
    seen = np.isfinite(exact.value) & np.isfinite(got.value)
    assert (seen != np.isfinite(exact.value)).sum() <= 2
    np.testing.assert_allclose(got.value[seen], exact.value[seen], rtol=0, atol=1e-3 * peak)
    np.testing.assert_allclose(got.coverage, exact.coverage, rtol=0, atol=1e-3)
    np.testing.assert_allclose(got.error[seen], exact.error[seen], rtol=5e-3)
    np.testing.assert_array_equal(got.beam_arcsec2, target)


def test_a_psf_turned_the_wrong_way_would_be_seen(tmp_path, sky_hdu) -> None:
    """The case above can fail: the same image taken along the map's axes is 65 deg off."""
    profile = lambda east, north: gaussian(east, north, elliptical_beam(9.0, 4.0, 35.0))  # noqa: E731
    grid, target = plain_grid(61, 5.0), round_beam(15.0)
    read = {"tracer": "24um", "averages_pixels": False, "beam": (9.0, 4.0, 35.0)}
    exact = match_map(read_map(sky_hdu, **read), target, grid)
    wrong = psf_file(tmp_path, profile, pixel=0.7, turn=-40.0, cards={"PIXSCALE": 0.7})
    got = match_map(read_map(sky_hdu, psf=wrong, **read), target, grid)
    assert np.nanmax(np.abs(got.value - exact.value)) > 0.01 * np.nanmax(exact.value)


# --- A point source through other shapes -------------------------------------------------------


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize("factor", [1.0, 1.5], ids=["smallest legal", "wider"])
def test_a_point_source_becomes_the_gaussian(name, factor) -> None:
    profile = SHAPES[name]
    psf = image_of(profile)
    target = factor * smallest_psf_fwhm(psf, STEP, averages_pixels=False)
    # A fraction of a pixel off the pixel centres.
    side, position = 261, (CENTRE[0] + 0.0002, CENTRE[1] - 0.0001)
    wcs = make_wcs((side, side), 2.0)
    image = profile(*offsets(wcs, (side, side), position))
    sky = make_sky(image, wcs=wcs, beam_arcsec2=psf.core_arcsec2)
    matched = match_map(with_psf(sky, psf), round_beam(target), grid_on(wcs, side, 2.0))
    truth = gaussian(*offsets(wcs, (side, side), position), round_beam(target))
    # Away from the edge, where part of the PSF falls off the map: 60 arcsec hold the Gaussian.
    inner = np.s_[60:-60, 60:-60]
    cell = 4.0
    total = np.sum(matched.value[inner]) * cell
    # 1 in, 1.000 +- 0.002 out; less what the image cuts off.
    cut_off = 1 - psf_sum(profile)
    assert total == pytest.approx(1.0, abs=0.002 + cut_off)
    kernel = matching_kernel(psf, round_beam(target), STEP, averages_pixels=False)
    off = np.sum(np.abs(matched.value[inner] - truth[inner])) * cell
    # The reported residual bounds the real one; what the PSF image cuts off is not in it, and
    # counts at most twice (flux missing, flux elsewhere).
    assert off < kernel.residual + 2 * cut_off + 1e-4
    peak = np.max(truth)
    assert np.max(np.abs(matched.value[inner] - truth[inner])) < 0.02 * peak + cut_off * peak
    assert f"residual {kernel.residual:.2g}" in " ".join(matched.history)
    assert matched.facts["psf_residual"] == pytest.approx(kernel.residual, rel=1e-3)
    assert matched.facts["psf_negative_weight"] == pytest.approx(kernel.negative_weight, rel=1e-3)


def with_psf(sky: SkyMap, psf: PsfImage | None, **changes: Any) -> SkyMap:
    return sky.with_step("a PSF image", psf=psf, **changes)


def psf_sum(profile: Any, side: int = 161, pixel: float = 2.0) -> float:
    """Flux of a profile of integral 1 within the image."""
    return float(np.sum(profile(*offsets(make_wcs((side, side), pixel), (side, side)))) * pixel**2)


@pytest.mark.parametrize("name", SHAPES)
def test_read_as_a_gaussian_the_same_map_is_far_off(name) -> None:
    """What the PSF image is for: without it the peak of a point source is low by 8 % and more."""
    profile, side = SHAPES[name], 261
    wcs = make_wcs((side, side), 2.0)
    sky = make_sky(profile(*offsets(wcs, (side, side))), wcs=wcs, beam_arcsec2=round_beam(6.0))
    grid, target = grid_on(wcs, side, 2.0), round_beam(14.0)
    truth = gaussian(0.0, 0.0, target)
    as_gaussian = match_map(sky, target, grid).value[130, 130] / truth
    with_image = match_map(with_psf(sky, image_of(profile)), target, grid).value[130, 130] / truth
    assert as_gaussian < 0.92
    assert with_image == pytest.approx(1.0, abs=0.02 if name == "obscured" else 0.015)


def test_a_flat_map_stays_flat_around_its_hole() -> None:
    """Negative lobes beside a hole are weighed like the values: blanks never ring."""
    side = 121
    wcs = make_wcs((side, side), 2.0)
    value = np.full((side, side), 7.0)
    y, x = np.indices(value.shape)
    value[np.hypot(x - 60, y - 60) < 9] = np.nan
    value[:8] = np.nan
    sky = with_psf(
        make_sky(value, wcs=wcs, beam_arcsec2=round_beam(6.0)), image_of(diffraction, side=81)
    )
    matched = match_map(sky, round_beam(9.0), plain_grid(61, 3.0))
    seen = np.isfinite(matched.value)
    assert 1000 < seen.sum() < seen.size
    # Constant to 1e-4.
    np.testing.assert_allclose(matched.value[seen], 7.0, rtol=1e-4)


def test_a_psf_beside_the_middle_of_its_image_moves_nothing(tmp_path) -> None:
    side = 161
    wcs = make_wcs((side, side), 2.0)
    hdu = make_hdu(
        double_gaussian(*offsets(wcs, (side, side))), wcs=wcs, unit="MJy/sr", beam_arcsec=6.0
    )
    read = {"tracer": "24um", "averages_pixels": False, "zeros": "flux"}
    grid, target = grid_on(wcs, side, 2.0), round_beam(14.0)
    off = psf_file(tmp_path, double_gaussian, side=120, at=(7.3, -4.1))
    matched = match_map(read_map(hdu, psf=off, **read), target, grid)
    truth = gaussian(*offsets(wcs, (side, side)), target)
    inner = np.s_[20:-20, 20:-20]
    assert_maps_close(matched.value[inner], truth[inner], rtol=0, atol=2e-3 * truth.max())


@pytest.mark.parametrize("averages", [True, False], ids=["means over pixels", "at points"])
def test_a_finer_psf_is_averaged_over_the_detector_pixel(tmp_path, averages) -> None:
    """A PSF on pixels of 0.5 arcsec without the detector's 4: the map holds means over those."""
    side, pixel = 61, 4.0
    wcs, beam, target = make_wcs((side, side), pixel), round_beam(8.0), round_beam(16.0)
    nodes, weights = np.polynomial.legendre.leggauss(5)
    image = np.zeros((side, side))
    east, north = offsets(wcs, (side, side))
    for i, j in np.ndindex(5, 5):
        shift = (pixel / 2 * nodes[i], pixel / 2 * nodes[j]) if averages else (0.0, 0.0)
        image += weights[i] * weights[j] / 4 * gaussian(east + shift[0], north + shift[1], beam)
    hdu = make_hdu(image, wcs=wcs, unit="MJy/sr", beam_arcsec=8.0)
    psf = psf_file(
        tmp_path, lambda e, n: gaussian(e, n, beam), side=101, pixel=0.5, cards={"PIXSCALE": 0.5}
    )
    read = {"tracer": "24um", "averages_pixels": averages, "zeros": "flux", "psf": psf}
    matched = match_map(read_map(hdu, **read), target, grid_on(wcs, side, pixel))
    truth = gaussian(east, north, target)
    inner = np.s_[5:-5, 5:-5]
    assert_maps_close(matched.value[inner], truth[inner], rtol=0, atol=1e-3 * truth.max())
    # Taken the other way the peak is off by the variance of the pixel over that of the target.
    wrong = read_map(hdu, **(read | {"averages_pixels": not averages}))
    peak = match_map(wrong, target, grid_on(wcs, side, pixel)).value[30, 30] / truth.max()
    sign = -1 if averages else 1
    assert peak - 1 == pytest.approx(sign * pixel**2 / 12 / target[0, 0], rel=0.2)


def test_a_psf_on_pixels_as_coarse_as_the_maps_was_recorded_by_them(tmp_path) -> None:
    hdu = make_hdu(np.ones((61, 61)), unit="MJy/sr", beam_arcsec=6.0)
    for pixel, has_pixel in ((2.0, True), (1.6, True), (1.0, False)):
        file = psf_file(tmp_path, double_gaussian, pixel=pixel, cards={"PIXSCALE": pixel})
        source = open_source(hdu, tracer="24um", psf=file)
        assert source.psf is not None
        assert source.psf.has_pixel == has_pixel


# --- Noise -------------------------------------------------------------------------------------


@pytest.mark.parametrize("correlated", [False, True], ids=["white", "correlated"])
def test_the_stated_noise_is_the_scatter_of_drawn_noise(correlated) -> None:
    side, target = 161, round_beam(10.0)
    wcs, psf = make_wcs((side, side), 2.0), image_of(diffraction, side=61)
    generator = np.random.default_rng(11)
    correlation = round_beam(6.0) if correlated else np.zeros((2, 2))
    grid = grid_on(wcs, side, 2.0)
    draws = []
    for _ in range(24):
        noise = smoothed_noise(generator, side, math.sqrt(correlation[0, 0]) / 2.0)
        term = NoiseTerm("probe", np.ones((side, side)), correlation)
        sky = with_psf(make_sky(noise, wcs=wcs, beam_arcsec2=round_beam(6.0), noise=(term,)), psf)
        draws.append(match_map(sky, target, grid))
    values = np.array([draw.value for draw in draws])[:, 30:-30, 30:-30]
    sigma = draws[0].error[30:-30, 30:-30]
    # 24 draws of about 600 independent beams: good to 0.6 %.
    assert np.std(values) == pytest.approx(np.mean(sigma), rel=0.02)
    np.testing.assert_allclose(sigma, sigma[0, 0], rtol=1e-3)
    after = draws[0].noise[0]
    for dx, dy in ((1, 0), (2, 1), (0, 4), (6, 0)):
        pairs = values[:, : -dy or None, : -dx or None] * values[:, dy:, dx:]
        stated = after.correlation_at(np.array([-2.0 * dx]), np.array([2.0 * dy]))
        assert stated[0] == pytest.approx(np.mean(pairs) / np.var(values), abs=0.02)


def smoothed_noise(generator, side: int, sigma_pix: float) -> np.ndarray:
    """Unit noise, white or smoothed with a Gaussian, wide of its edges."""
    k = np.fft.fftfreq(2 * side)
    transfer = np.exp(-2 * (math.pi * sigma_pix) ** 2 * (k[:, None] ** 2 + k[None, :] ** 2))
    white = np.fft.fft2(generator.normal(size=(2 * side, 2 * side)))
    return np.fft.ifft2(white * transfer).real[:side, :side] / math.sqrt(np.mean(transfer**2))


def test_the_noise_gain_is_that_of_the_gaussian_kernel() -> None:
    # White noise through a wide Gaussian kernel of sigma_k pixels: 1 / (2 sqrt(pi) sigma_k).
    psf = image_of(lambda e, n: gaussian(e, n, round_beam(6.0)))
    kernel = matching_kernel(psf, round_beam(20.0), STEP, averages_pixels=False)
    sigma_k = math.sqrt(20.0**2 - 6.0**2) * SIGMA_PER_FWHM / 2.0
    assert kernel.noise_gain == pytest.approx(1 / (2 * math.sqrt(math.pi) * sigma_k), rel=1e-3)
    assert kernel.negative_weight < 1e-6
    assert kernel.residual < 1e-4
    assert np.sum(kernel.values) == pytest.approx(1.0)


def test_correlation_travels_through_the_matched_file(tmp_path) -> None:
    side = 101
    term = NoiseTerm("probe", np.ones((side, side)), np.zeros((2, 2)))
    wcs = make_wcs((side, side), 2.0)
    sky = make_sky(np.ones((side, side)), wcs=wcs, beam_arcsec2=round_beam(6.0), noise=(term,))
    sky = with_psf(sky, image_of(diffraction, side=61))
    matched = match_map(sky, round_beam(10.0), plain_grid(21, 4.0))
    assert matched.psf is None
    write_matched(tmp_path / "probe.fits", matched)
    back = read_matched(tmp_path / "probe.fits").noise[0]
    for lag in (0.0, 3.3, 9.0):
        at = np.array([lag]), np.array([0.5 * lag])
        stated = matched.noise[0].correlation_at(*at)
        np.testing.assert_allclose(back.correlation_at(*at), stated, atol=1e-6)


# --- Sharper than the source -------------------------------------------------------------------


def test_a_kernel_routine_does_not_notice_but_the_limits_do() -> None:
    """photutils makes a kernel to any target; the three numbers tell which of them smooth."""
    profile = lambda e, n: gaussian(e, n, round_beam(8.0))  # noqa: E731
    psf = image_of(profile, side=81)
    east, north = offsets(make_wcs((81, 81), 2.0), (81, 81))
    for target, is_legal in ((6.0, False), (7.5, False), (8.0, False), (8.8, True), (12.0, True)):
        sharp = make_kernel(psf.values, gaussian(east, north, round_beam(target)))
        assert np.isfinite(sharp).all()
        kernel = matching_kernel(psf, round_beam(target), STEP, averages_pixels=False)
        assert bool(kernel.why_not) != is_legal, target


@pytest.mark.parametrize(
    ("profile", "low", "high"),
    [
        # Sharper than a Gaussian PSF is sharper than its own width.
        (lambda e, n: gaussian(e, n, round_beam(6.0)), 6.0, 6.6),
        (lambda e, n: gaussian(e, n, elliptical_beam(6.0, 4.5, 70.0)), 5.999, 6.6),
        (double_gaussian, 6.0, 7.0),
        # The transfer function of an aperture ends at D/lambda = 1.029 / FWHM; a Gaussian of r
        # times the FWHM transmits exp(-3.76 r^2) there: 0.1 % at r = 1.35.
        (diffraction, 7.4, 8.6),
        # Aniano et al. 2011 call 9 arcsec moderate for a core of 6.5 (from memory): 1.38 times.
        (lambda e, n: diffraction(e, n, obscured=0.33), 7.8, 9.6),
    ],
    ids=["Gaussian", "elliptical", "double Gaussian", "diffraction", "obscured"],
)
def test_the_smallest_legal_beam(profile, low, high) -> None:
    psf = image_of(profile, side=101)

    def is_legal(fwhm: float) -> bool:
        return not matching_kernel(psf, round_beam(fwhm), STEP, averages_pixels=False).why_not

    smallest = smallest_psf_fwhm(psf, STEP, averages_pixels=False)
    assert low < smallest < high
    assert is_legal(smallest)
    assert not is_legal(smallest - 0.011)
    # All wider targets are legal and all sharper ones are not, as a bisection needs.
    widths = smallest * np.geomspace(0.4, 4.0, 25)
    assert [is_legal(width) for width in widths] == [bool(width > smallest) for width in widths]


def test_the_smallest_legal_beam_hardly_depends_on_the_pixels() -> None:
    beams = []
    for pixel, side in ((1.0, 201), (1.5, 133), (2.0, 101), (2.5, 81)):
        step = np.array([[-pixel, 0.0], [0.0, pixel]])
        psf = image_of(diffraction, side=side, pixel=pixel)
        beams.append(smallest_psf_fwhm(psf, step, averages_pixels=False))
    assert np.ptp(beams) < 0.03 * np.mean(beams)


@pytest.fixture
def sources(tmp_path) -> list[Any]:
    """A sharp map with a Gaussian beam and one with a diffraction pattern."""
    hdu = make_hdu(np.ones((161, 161)), unit="MJy/sr", beam_arcsec=None)
    psf = psf_file(tmp_path, diffraction, side=101)
    return [
        open_source(hdu, tracer="24um", name="ir", psf=psf),
        open_source(hdu, tracer="FUV", name="uv", beam=(3.0, 3.0, 0.0)),
    ]


def test_a_target_sharper_than_the_psf_is_refused(sources) -> None:
    with pytest.raises(BeamError, match=r"6\.5 arcsec is sharper than maps\.ir") as caught:
        choose_beam(sources, 6.5)
    message = str(caught.value)
    assert "PSF image" in message
    assert "negative weight" in message
    assert "maps.uv" not in message
    found = re.search(r'grid\.beam = "([\d.]+) arcsec"', message)
    assert found
    smallest = float(found[1])
    assert smallest == smallest_legal_fwhm(sources[0])
    assert beam_axes(choose_beam(sources, smallest))[0] == pytest.approx(smallest)
    with pytest.raises(BeamError):
        choose_beam(sources, smallest - 0.011)
    # Past the plan the map itself refuses.
    sky = read_map(sources[0].image.memory, tracer="24um", name="ir", psf=sources[0].request.psf)
    with pytest.raises(BeamError, match=r"maps\.ir.*sharper than the map's PSF image"):
        match_map(sky, round_beam(6.5), plain_grid(21, 2.0))


def test_the_common_beam_counts_the_psf(sources) -> None:
    common = beam_axes(choose_beam(sources, None))[0]
    assert common == pytest.approx(smallest_legal_fwhm(sources[0]))
    assert common > 7.0
    # What the plan found legal is legal for the map.
    read = {"tracer": "24um", "name": "ir", "psf": sources[0].request.psf}
    match_map(read_map(sources[0].image.memory, **read), round_beam(common), plain_grid(21, 2.0))


# --- Reading -----------------------------------------------------------------------------------


def opened(tmp_path, image: np.ndarray, **cards: Any) -> Any:
    fits.PrimaryHDU(image, fits.Header(cards)).writeto(tmp_path / "psf.fits", overwrite=True)
    hdu = make_hdu(np.ones((161, 161)), unit="MJy/sr", beam_arcsec=None)
    return open_source(hdu, tracer="24um", psf=tmp_path / "psf.fits")


def image(profile=double_gaussian, side: int = 81, pixel: float = 2.0) -> np.ndarray:
    return profile(*offsets(make_wcs((side, side), pixel), (side, side)))


@pytest.mark.parametrize(
    ("cards", "arcsec", "told"),
    [
        ({}, 2.0, "those of the map"),
        ({"CDELT1": 1.0, "CDELT2": 1.0}, 2.0, "those of the map"),  # the standard's default
        ({"CDELT1": -1.0 / 3600, "CDELT2": 1.0 / 3600}, 1.0, "from CDELT1"),
        ({"CDELT1": 1.0 / 3600}, 1.0, "from CDELT1"),
        ({"CDELT1": 0.9, "CDELT2": 0.9, "CUNIT1": "arcsec"}, 0.9, "from CDELT1"),
        ({"CD1_1": -1.2 / 3600, "CD2_2": 1.2 / 3600}, 1.2, "from CD1_1"),
        ({"PIXSCALE": 1.1}, 1.1, "from PIXSCALE"),
        ({"PIXELSCL": 0.7}, 0.7, "from PIXELSCL"),
    ],
)
def test_pixels_of_the_psf(tmp_path, cards, arcsec, told) -> None:
    source = opened(tmp_path, image(), **cards)
    assert math.sqrt(abs(np.linalg.det(source.psf.jacobian_arcsec))) == pytest.approx(arcsec)
    assert told in source.psf.origin
    assert f"{arcsec:.4g} arcsec" in source.psf.origin
    # The beam is that of the core, for all that needs a Gaussian.
    assert source.beam.major_arcsec == pytest.approx(6.0 * arcsec / 2.0, rel=0.03)
    assert source.beam.origin.startswith("the core of the PSF image")
    assert f"core of {6.0 * arcsec / 2.0:.1f}" in source.psf.story


def test_the_core_is_that_of_the_gaussian_wherever_it_lies() -> None:
    wcs = make_wcs((61, 61), 2.0)
    covariance = elliptical_beam(9.0, 6.0, 20.0)
    for de, dn in ((0.0, 0.0), (0.7, -0.9), (-11.3, 5.5)):
        east, north = offsets(wcs, (61, 61))
        psf = read_psf(gaussian(east - de, north - dn, covariance), fits.Header(), STEP, "f", "m")
        np.testing.assert_allclose(psf.core_arcsec2, covariance, rtol=1e-6, atol=1e-6)
        assert psf.centre == pytest.approx((30 - de / 2, 30 + dn / 2), abs=1e-5)
        assert psf.values.sum() == pytest.approx(1.0)


def test_the_transfer_function_is_the_sum_over_pixels() -> None:
    psf = image_of(diffraction, side=41)
    y, x = np.indices((41, 41)) - 20.0
    for qx, qy in ((0.0, 0.0), (0.03, 0.01), (-0.2, 0.11), (0.31, 0.4)):
        direct = np.sum(psf.values * np.exp(-2j * math.pi * (qx * x + qy * y)))
        assert abs(psf.transfer(np.array([qx]), np.array([qy]))[0] - direct) < 2e-5
    assert psf.transfer(np.array([0.6]), np.array([0.0])) == 0.0


def holed(image: np.ndarray) -> np.ndarray:
    image = image.copy()
    image[3, 4] = np.nan
    return image


@pytest.mark.parametrize(
    ("image", "cards", "why"),
    [
        (holed(image()), {}, "without a value"),
        (image() + 0.01 * image().max(), {}, "at the border"),  # sky that was not taken off
        (image(diffraction, side=11), {}, "larger image"),  # rings cut off
        (-image(), {}, "sum of the PSF image"),
        (np.pad(np.ones((1, 1)), 20), {}, "not sampled"),
        (image(pixel=7.0), {}, "not sampled"),
        (image(), {"CDELT1": 3.0, "CDELT2": 3.0}, "CDELT counts in degrees"),
        (image(), {"PIXSCALE": -1.0}, "PIXSCALE"),
        (image(), {"CDELT1": 1.0, "CDELT2": 2.0, "CUNIT1": "Jy"}, "'Jy', not an angle"),
    ],
    ids=["NaN", "sky", "small", "negative", "delta", "coarse", "CDELT", "PIXSCALE", "CUNIT"],
)
def test_what_is_no_psf_is_refused(tmp_path, image, cards, why) -> None:
    with pytest.raises(BeamError, match=why) as caught:
        opened(tmp_path, image, **cards)
    assert "maps.probe.psf" in str(caught.value)
    assert "psf.fits" in str(caught.value)


def test_a_unit_per_beam_needs_a_beam_besides_the_psf(tmp_path) -> None:
    file = psf_file(tmp_path, double_gaussian)
    hdu = make_hdu(np.ones((161, 161)), unit="Jy/beam", beam_arcsec=None)
    with pytest.raises(UnitError, match=r"needs a beam.*beam = "):
        open_source(hdu, tracer="24um", psf=file)
    source = open_source(hdu, tracer="24um", psf=file, beam=(6.0, 6.0, 0.0))
    # 1 Jy per 1.1331 x 36 arcsec2 (reference sheet, C115's factor).
    assert source.door.factor == pytest.approx(1e-6 / (1.13309 * 36 * math.radians(1 / 3600) ** 2))


def test_an_undersampled_map_is_averaged_and_keeps_its_flux(tmp_path) -> None:
    side, pixel = 41, 8.0
    wcs = make_wcs((side, side), pixel)
    value = np.zeros((side, side))
    value[20, 20] = 1.0
    step = np.array([[-pixel, 0.0], [0.0, pixel]])
    psf_values = image(double_gaussian, side=161, pixel=2.0)
    header = fits.Header({"PIXSCALE": 2.0})
    psf = read_psf(psf_values, header, step, "psf", "maps.probe")
    sky = with_psf(make_sky(value, wcs=wcs, beam_arcsec2=round_beam(6.0)), psf)
    grid = plain_grid(31, 5.0)
    matched = match_map(sky, round_beam(14.0), grid)
    assert "area-weighted" in " ".join(matched.history)
    assert np.nansum(matched.value) * 25.0 == pytest.approx(64.0, rel=0.01)


# --- Rounding ----------------------------------------------------------------------------------


@pytest.mark.slow
@fixed
@given(
    major=st.floats(4.0, 30.0),
    ratio=st.floats(0.2, 1.0),
    pa=st.floats(0.0, 180.0),
    hair=st.sampled_from([0.0, 1e-12, 1e-9, 1e-7, -1e-7, 1e-5, 1e-3]),
)
def test_rounding_a_beam_up_to_its_major_axis_always_works(major, ratio, pa, hair) -> None:
    """Equal along one axis, a hair wider or narrower there: through the plan and the map."""
    wcs = make_wcs((41, 41), 1.5)
    # A map sampled at points on pixels wider than its beam is refused; that is checked elsewhere.
    ratio = max(ratio, 1.5 / major)
    hdu = make_hdu(np.ones((41, 41)), wcs=wcs, beam_arcsec=(major, ratio * major, pa))
    # A beam that fills half the map is no beam; that is checked elsewhere.
    source = open_source(hdu, beam=(major, ratio * major, pa))
    target = choose_beam([source], major * (1 + hair))
    term = NoiseTerm("probe", np.ones((41, 41)), source.beam_arcsec2)
    sky = make_sky(np.full((41, 41), 3.0), wcs=wcs, beam_arcsec2=source.beam_arcsec2, noise=(term,))
    matched = match_map(sky, target, plain_grid(7, major / 3), minimum_coverage=0.1)
    # The spline forgets what lies beyond a tile's margin of 14 pixels by 0.268^14 = 1e-8.
    # Of a wide beam less than a tenth may fall on the map in the grid's corners.
    seen = matched.coverage >= 0.1
    assert seen[2:5, 2:5].all()
    np.testing.assert_allclose(matched.value[seen], 3.0, rtol=1e-7)
    assert (matched.error[seen] <= 1.0 / matched.coverage[seen] + 1e-9).all()
    assert (matched.error[seen] > 0).all()


@pytest.mark.slow
def test_the_common_beam_of_any_maps_is_legal_for_all() -> None:
    generator = np.random.default_rng(2)
    for _ in range(30):
        beams = zip(
            generator.uniform(4, 30, 3),
            generator.uniform(0.3, 1.0, 3),
            generator.uniform(0, 180, 3),
            strict=True,
        )
        sources = [
            open_source(
                make_hdu(np.ones((41, 41)), beam_arcsec=(major, ratio * major, pa)),
                averages_pixels=bool(generator.integers(2)),
            )
            for major, ratio, pa in beams
        ]
        target = choose_beam(sources, None)
        for source in sources:
            wcs, averages = source.wcs, source.request.averages_pixels
            sky = make_sky(
                np.ones((41, 41)),
                wcs=wcs,
                beam_arcsec2=source.beam_arcsec2,
                averages_pixels=averages,
            )
            match_map(sky, target, plain_grid(5, 6.0), minimum_coverage=0.1)


def test_equal_beams_over_a_field_of_degrees() -> None:
    """Off the tangent point pixels are a little wider on the sky than at the galaxy's centre."""
    shape = (240, 240)
    wcs = make_wcs(shape, 120.0)
    hdu = make_hdu(np.full(shape, 3.0), wcs=wcs, unit="MJy/sr", beam_arcsec=300.0)
    source = open_source(hdu, tracer="24um", averages_pixels=True)
    width = beam_axes(effective_beam(source))[0]
    sky = make_sky(hdu.data, wcs=wcs, beam_arcsec2=source.beam_arcsec2, averages_pixels=True)
    for target in (width, width * (1 + 1e-7)):
        matched = match_map(sky, choose_beam([source], target), plain_grid(61, 360.0))
        # Constant to 1e-4.
        np.testing.assert_allclose(matched.value, 3.0, rtol=1e-4)


def test_equal_beams_leave_the_map_as_it_is() -> None:
    value = np.random.default_rng(3).normal(size=(61, 61))
    wcs = make_wcs((61, 61), 2.0)
    beam = round_beam(12.0)
    term = NoiseTerm("probe", np.ones((61, 61)), np.zeros((2, 2)))
    sky = make_sky(value, wcs=wcs, beam_arcsec2=beam, noise=(term,))
    for width in (12.0, 12.0 * (1 + 1e-7), 12.0 * (1 - 1e-7)):
        matched = match_map(sky, round_beam(width), grid_on(wcs, 61, 2.0))
        # A kernel of 2e-7 x (2.5 pixels)^2 takes 2 pi^2 (1/2) of that, 1.3e-5, off the corner of
        # the frequency plane; the largest of 3721 values is below 4.
        np.testing.assert_allclose(matched.value, value, atol=5e-5)
        np.testing.assert_allclose(matched.error, 1.0, rtol=1e-5)


# --- Bands that are not Gaussian ---------------------------------------------------------------


def band(tracer: str, fwhm: float, **changes: Any) -> Any:
    hdu = make_hdu(np.ones((161, 161)), unit="MJy/sr", beam_arcsec=fwhm)
    return hdu, {"tracer": tracer, **changes}


@pytest.mark.parametrize(
    ("tracer", "fwhm"), [("24um", 6.4), ("22um", 11.9), ("FUV", 4.6), ("NUV", 5.3)]
)
def test_a_band_known_not_to_be_gaussian_says_so(tmp_path, tracer, fwhm) -> None:
    hdu, read = band(tracer, fwhm)
    sky = read_map(hdu, **read)
    record = PSF_RECORDS.get(tracer)
    assert sky.common.matching == record.matching_error > 0
    assert sky.facts["matching_error"] == record.matching_error
    (line,) = (line for line in sky.history if "read as a Gaussian" in line)
    assert record.certainty in line
    assert f"matching error {record.matching_error:.2g}" in line
    # It is common to all pixels and never part of the random error.
    np.testing.assert_array_equal(
        sky.error, read_map(hdu, **(read | {"beam": (9.9, 9.9, 0)})).error
    )
    matched = match_map(sky, round_beam(30.0), plain_grid(9, 10.0))
    write_matched(tmp_path / "probe.fits", matched)
    assert fits.getval(tmp_path / "probe.fits", "MATCHERR") == record.matching_error
    assert read_matched(tmp_path / "probe.fits").common == matched.common == sky.common


def test_the_summary_lists_it_beside_the_error_of_the_flux_scale() -> None:
    value, areas = np.array([[1.0, 2.0], [3.0, np.nan]]), np.full((2, 2), 4.0)
    used = np.isfinite(value)
    sky = make_sky(value, wcs=make_wcs((2, 2)), beam_arcsec2=round_beam(15.0))
    sky = sky.with_step("common errors", common=CommonError(0.05, 0.0, 0.1))
    surface = SimpleNamespace(slopes={"24um": np.full((2, 2), 2.0)})
    disc = SimpleNamespace(surfaces={"sigma_sfr": surface}, intensity={"24um": sky})
    errors = common_errors(disc, "sigma_sfr", used, areas)
    # 2 x (1 + 2 + 3) x 4 = 48: 5 % of it and 10 % of it.
    assert errors == pytest.approx({"calibration_error": 2.4, "matching_error": 4.8})


def test_other_beams_and_bands_carry_no_matching_error(tmp_path) -> None:
    psf = psf_file(tmp_path, double_gaussian, side=101)
    for tracer, fwhm, changes in (
        ("24um", 15.0, {}),  # smoothed to a Gaussian before
        ("Halpha", 6.4, {"unit": "erg/s/cm2/sr"}),
        ("24um", 6.4, {"psf": psf}),  # the PSF itself was given
    ):
        hdu, read = band(tracer, fwhm, **changes)
        sky = read_map(hdu, **read)
        assert sky.common.matching == 0.0
        assert "matching_error" not in sky.facts
        with warnings.catch_warnings():
            warnings.simplefilter("error")
            choose_beam([open_source(hdu, **read)], 16.0 if fwhm > 10 else 10.0)


@pytest.mark.parametrize(("tracer", "fwhm"), [("24um", 6.4), ("FUV", 4.6), ("22um", 11.9)])
def test_a_final_beam_near_the_core_warns(tracer, fwhm) -> None:
    hdu, read = band(tracer, fwhm)
    source = open_source(hdu, **read)
    with pytest.warns(KspipeWarning, match=rf"maps\.probe.*{tracer}.*maps\.probe\.psf = "):
        choose_beam([source], 1.9 * fwhm)
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        choose_beam([source], 2.0 * fwhm)
        # The demonstration: 24 um at 6.4 arcsec, FUV at 4.6, to 15 arcsec.
        if fwhm < 7.5:
            choose_beam([source], 15.0)


def test_the_rings_of_a_diffraction_pattern_hold_what_the_record_says() -> None:
    # Born & Wolf, Principles of Optics, 8.5.2: 1 - J0^2 - J1^2 within a radius; the first dark
    # ring, J1 = 0 at 3.8317, leaves 16.2 % outside.
    outside = special.j0(3.8317) ** 2 + special.j1(3.8317) ** 2
    assert outside == pytest.approx(0.162, abs=5e-4)
    for tracer in ("24um", "22um"):
        low, high = PSF_RECORDS.get(tracer).flux_outside
        assert low <= outside <= high


def test_the_matching_error_lies_between_smooth_emission_and_a_point() -> None:
    """A point source through a diffraction pattern, read as the Gaussian of its core."""
    record, side = PSF_RECORDS.get("24um"), 401
    wcs = make_wcs((side, side), 1.6)
    east, north = offsets(wcs, (side, side))
    sky = make_sky(diffraction(east, north, 6.4), wcs=wcs, beam_arcsec2=round_beam(6.4))
    matched = match_map(sky, round_beam(15.0), plain_grid(5, 5.0))
    missing = 1 - matched.value[2, 2] / gaussian(0.0, 0.0, round_beam(15.0))
    assert 0 < record.matching_error < missing < record.flux_outside[1]


@pytest.mark.parametrize("record", list(PSF_RECORDS), ids=lambda record: record.key)
def test_records_are_complete(record) -> None:
    low, high = record.core_arcsec
    assert 0 < low < high
    assert 0 < record.flux_outside[0] <= record.flux_outside[1] < 0.5
    # Half of the flux outside: smooth emission loses nothing, a point source all of it.
    assert record.matching_error == pytest.approx(np.mean(record.flux_outside) / 2)
    assert record.certainty == "from memory"
    assert re.search(r"\d{4}, \w+", str(record))
