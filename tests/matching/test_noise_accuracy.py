"""Stated errors against the scatter of many noise-only maps: pixels, then sums over regions.

Outside reference: the scatter of draws, made here by filtering white noise on a padded grid in
Fourier space (numpy only). A sidelobed correlation stands for an interferometer's.
"""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.wcs import WCS

from kspipe.kernels.correlation import SampledCorrelation
from kspipe.kernels.geometry import beam_covariance
from kspipe.kernels.noise import NoiseTerm, sum_covariance
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import SkyMap
from kspipe.matching import Grid, match_map, measure_noise, measure_noise_correlation

CENTRE = (150.0, 20.0)
PIXEL = 4.0
N = 160
TARGET = beam_covariance(15.0, 15.0, 0.0)
SOURCE_BEAM = beam_covariance(12.0, 9.0, 30.0)


def tilted_wcs(angle_deg: float = 25.0) -> WCS:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval, wcs.wcs.crpix = CENTRE, [(N + 1) / 2] * 2
    c, s = math.cos(math.radians(angle_deg)), math.sin(math.radians(angle_deg))
    wcs.wcs.cd = PIXEL / 3600 * np.array([[-c, s], [s, c]])
    wcs.wcs.set()
    return wcs


WCS_IN = tilted_wcs()
JACOBIAN = pixel_jacobian(WCS_IN, (N - 1) / 2, (N - 1) / 2)
SIGMA = 1.0 + 0.5 * np.hypot(*(np.indices((N, N)) - N / 2)) / N


def transfer(kind: str, shape: tuple[int, int]) -> np.ndarray:
    """Amplitude in Fourier space of the filter that makes the noise, unit variance after it."""
    ky, kx = np.meshgrid(np.fft.fftfreq(shape[0]), np.fft.fftfreq(shape[1]), indexing="ij")
    inverse = np.linalg.inv(JACOBIAN)
    (a, b), (_, d) = inverse @ SOURCE_BEAM @ inverse.T
    gaussian = np.exp(-2 * math.pi**2 * (a * kx**2 + 2 * b * kx * ky + d * ky**2))
    amplitude = {
        "white": np.ones(shape),
        "beam": gaussian,
        # Missing short spacings: a negative bowl around each peak.
        "sidelobes": gaussian * (1 - np.exp(-((kx**2 + ky**2) / 2 / 0.02**2))),
    }[kind]
    return amplitude / np.sqrt(np.mean(amplitude**2))


def draw(kind: str, rng: np.random.Generator) -> np.ndarray:
    shape = (2 * N, 2 * N)
    white = np.fft.fft2(rng.normal(size=shape))
    return np.fft.ifft2(white * transfer(kind, shape)).real[:N, :N] * SIGMA


def noise_term(kind: str) -> NoiseTerm:
    correlation = np.zeros((2, 2)) if kind == "white" else SOURCE_BEAM
    if kind != "sidelobes":
        return NoiseTerm("n", SIGMA, correlation)
    acf = np.fft.fftshift(np.fft.ifft2(transfer(kind, (256, 256)) ** 2).real)[88:169, 88:169]
    return NoiseTerm("n", SIGMA, correlation, SampledCorrelation(acf, JACOBIAN))


def sky(value: np.ndarray, *noise: NoiseTerm) -> SkyMap:
    return SkyMap(
        name="n",
        tracer="HI",
        value=value,
        noise=noise,
        coverage=np.ones((N, N)),
        flags=np.zeros((N, N), np.int32),
        unit="K km/s",
        wcs=WCS_IN,
        beam_arcsec2=SOURCE_BEAM,
        averages_pixels=False,
    )


def grid() -> Grid:
    wcs = WCS(naxis=2)
    wcs.wcs.ctype = ["RA---TAN", "DEC--TAN"]
    wcs.wcs.crval, wcs.wcs.crpix = CENTRE, [40.5, 40.5]
    wcs.wcs.cdelt = [-5 / 3600, 5 / 3600]
    wcs.wcs.set()
    return Grid(wcs, (80, 80), 5.0, CENTRE)


KINDS = ("white", "beam", "sidelobes")


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_pixel_error_is_the_scatter_of_draws(kind):
    target, rng = grid(), np.random.default_rng(11)
    stated = match_map(sky(np.zeros((N, N)), noise_term(kind)), TARGET, target)
    draws = [match_map(sky(draw(kind, rng)), TARGET, target).value for _ in range(200)]
    pulls = np.array(draws) / stated.error
    # 80 x 80 pixels of 5 arcsec hold 314 beams of 255 arcsec2: 200 draws give 0.3 %.
    assert np.sqrt(np.mean(pulls**2)) == pytest.approx(1.0, abs=0.02)
    # Not only on average: in the middle and at the rim, where sigma is 1.4 times larger.
    radius = np.hypot(*(np.indices((80, 80)) - 39.5))
    for ring in (radius < 15, radius > 35):
        assert np.sqrt(np.mean(pulls[:, ring] ** 2)) == pytest.approx(1.0, abs=0.02)


def regions() -> list[np.ndarray]:
    """Discs, strips and rings of 1 to 100 beams (10 to 1020 pixels)."""
    rng = np.random.default_rng(3)
    y, x = np.indices((80, 80))
    found = []
    for pixels in np.geomspace(10, 1020, 12):
        cx, cy = rng.uniform(25, 55, 2)
        side = math.sqrt(pixels)
        found.append(np.hypot(x - cx, y - cy) < math.sqrt(pixels / math.pi))
        wide, thin = min(3 * side, 76), pixels / min(3 * side, 76)
        found.append((abs(x - 39.5) < wide / 2) & (abs(y - cy) < thin / 2 + 0.3))
        ring = np.hypot(x - 39.5, y - 39.5)
        inner = rng.uniform(3, 12)
        found.append((ring >= inner) & (ring**2 < inner**2 + pixels / math.pi))
    return [region for region in found if region.sum() >= 10]


@pytest.mark.slow
@pytest.mark.parametrize("kind", KINDS)
def test_region_sums_have_the_error_of_draws(kind):
    target, rng, masks = grid(), np.random.default_rng(12), regions()
    assert len(masks) >= 30
    stated = match_map(sky(np.zeros((N, N)), noise_term(kind)), TARGET, target)
    sums = []
    for _ in range(2000):
        value = match_map(sky(draw(kind, rng)), TARGET, target).value
        sums.append([value[mask].sum() for mask in masks])
    jacobian = target.jacobian_arcsec()
    ratios = np.array(
        [math.sqrt(sum_covariance(stated.noise, stated.noise, mask, jacobian)) for mask in masks]
    ) / np.std(sums, axis=0)
    print(kind, "mean", ratios.mean(), "least", ratios.min(), "most", ratios.max())
    assert ratios.mean() == pytest.approx(1.0, abs=0.02)
    assert np.abs(ratios - 1).max() < 0.08


@pytest.mark.slow
def test_measured_correlation_gives_the_error_of_sums():
    """A map that says nothing of its correlation: measured on blank sky, then used."""
    target, rng = grid(), np.random.default_rng(13)
    everywhere = np.ones((N, N), bool)
    masks = regions()[::3]
    sums, stated = [], []
    for _ in range(60):
        blank = sky(draw("sidelobes", rng) / SIGMA)
        measured = measure_noise_correlation(
            measure_noise(blank, everywhere, correlated=True), everywhere
        )
        matched = match_map(measured, TARGET, target)
        sums.append([matched.value[mask].sum() for mask in masks])
        jacobian = target.jacobian_arcsec()
        stated.append(
            [sum_covariance(matched.noise, matched.noise, m, jacobian) ** 0.5 for m in masks]
        )
    ratio = np.mean(stated, axis=0) / np.std(sums, axis=0)
    # 60 draws give each scatter to 9 %; the mean over 12 regions to about 4 %.
    assert ratio.mean() == pytest.approx(1.0, abs=0.12)
    # Taking the beam for the correlation instead would be wrong by more than that.
    as_beam = NoiseTerm("n", np.ones((80, 80)), TARGET)
    wrong = sum_covariance((as_beam,), (as_beam,), masks[-1], jacobian) ** 0.5
    assert wrong / np.std(sums, axis=0)[-1] > 1.5
