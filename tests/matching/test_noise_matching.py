"""Noise through the matching: 200 noise-only maps against the error that is stated."""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cache
from typing import Any

import numpy as np
import pytest
from helpers import CENTRE, elliptical_beam, make_sky, make_wcs, round_beam

from kspipe.core.errors import MapError
from kspipe.maps.header import pixel_jacobian
from kspipe.maps.skymap import NoiseTerm, SkyMap
from kspipe.matching import Grid, match_map, measure_noise

DRAWS = 200
SIDE = 75
BLOCK = 7
NONE = np.zeros((2, 2))


@dataclass(frozen=True)
class Case:
    """Pixels [arcsec], beam, target, whether the noise is correlated, how the map lies."""

    pixel: float
    beam: tuple[float, float, float]
    target: float
    correlated: bool
    rotation_deg: float = 0.0
    step: float = 4.0
    varying: bool = False


CASES = {
    "white": Case(3.0, (7.0, 7.0, 0.0), 15.0, correlated=False),
    "white, narrow kernel": Case(4.0, (11.0, 11.0, 0.0), 12.0, correlated=False, step=3.7),
    "white, turned, varying": Case(3.0, (7, 7, 0.0), 15.0, False, 30.0, varying=True),
    "beam": Case(3.0, (10.0, 10.0, 0.0), 15.0, correlated=True),
    "elliptical beam": Case(3.0, (13.0, 8.0, 40.0), 15.0, correlated=True),
    "elliptical, turned": Case(3.0, (13.0, 8.0, 40.0), 15.0, True, -35.0),
    "elliptical, turned, narrow": Case(4.0, (13.4, 10.6, 35.0), 14.0, True, 30.0, 3.7),
    "beam, varying": Case(3.0, (10.0, 10.0, 0.0), 20.0, True, varying=True),
    "equal beams": Case(4.0, (12.0, 12.0, 0.0), 12.0, correlated=True, step=3.7),
}


# Some seconds each: the hardest one runs always, the others with -m slow.
ALWAYS = ("elliptical, turned, narrow",)
every_case = pytest.mark.parametrize(
    "name",
    [name if name in ALWAYS else pytest.param(name, marks=pytest.mark.slow) for name in CASES],
)


def unit_noise(case: Case, wcs, rng: np.random.Generator) -> np.ndarray:
    """Noise of rms one: white, or white convolved with the beam on a periodic canvas."""
    if not case.correlated:
        return rng.standard_normal((SIDE, SIDE))
    n = 128
    k = np.stack(np.meshgrid(*(np.fft.fftfreq(n),) * 2), axis=-1)
    to_pix = np.linalg.inv(pixel_jacobian(wcs, SIDE / 2, SIDE / 2))
    cov = to_pix @ elliptical_beam(*case.beam) @ to_pix.T
    transfer = np.exp(-2 * math.pi**2 * np.einsum("...i,ij,...j", k, cov, k))
    noise = np.fft.ifft2(np.fft.fft2(rng.standard_normal((n, n))) * transfer).real
    # The mean square of filtered white noise is that of the filter.
    return noise[:SIDE, :SIDE] / math.sqrt(np.mean(transfer**2))


def stated_sigma(case: Case) -> np.ndarray:
    """One, or a slope of a factor 2 across the map."""
    ramp = np.linspace(1.0, 2.0, SIDE) if case.varying else np.ones(SIDE)
    return np.broadcast_to(ramp, (SIDE, SIDE)) * 1.0


def blank(shape=(SIDE, SIDE)) -> np.ndarray:
    """A blank disc in the map."""
    y, x = np.indices(shape)
    return np.hypot(x - 20, y - 26) < 7


class RememberingGrid(Grid):
    """A grid that works out its positions once: 200 maps lie alike."""

    def positions_in(self, wcs, x, y) -> tuple[np.ndarray, np.ndarray]:
        return _remembered(super().positions_in, id(wcs), x.tobytes(), lambda f: f(wcs, x, y))

    def areas_arcsec2(self) -> np.ndarray:
        return _remembered(super().areas_arcsec2, id(self), b"areas", lambda f: f())


_MEMORY: dict[tuple[int, bytes], Any] = {}


def _remembered(function, owner: int, key: bytes, call) -> Any:
    if (owner, key) not in _MEMORY:
        _MEMORY[owner, key] = call(function)
    return _MEMORY[owner, key]


@cache
def draws(name: str) -> tuple[np.ndarray, SkyMap]:
    """Matched noise, (draws, ny, nx), and one matched map with its statements."""
    case = CASES[name]
    wcs = make_wcs((SIDE, SIDE), case.pixel, rotation_deg=case.rotation_deg)
    sigma = stated_sigma(case)
    beam = elliptical_beam(*case.beam)
    term = NoiseTerm("probe", sigma, beam if case.correlated else NONE)
    side = 2 * int(0.55 * SIDE * case.pixel / case.step) + 1
    grid = RememberingGrid(make_wcs((side, side), case.step), (side, side), case.step, CENTRE)
    _MEMORY.clear()
    rng = np.random.default_rng(1234)
    values = []
    for _ in range(DRAWS):
        value = np.where(blank(), np.nan, sigma * unit_noise(case, wcs, rng))
        sky = make_sky(value, wcs=wcs, beam_arcsec2=beam)
        values.append(match_map(sky, round_beam(case.target), grid).value)
    # What is stated depends on the noise and the blanks only: once is enough.
    stated = make_sky(value, wcs=wcs, beam_arcsec2=beam, noise=(term,))
    return np.array(values), match_map(stated, round_beam(case.target), grid)


@pytest.mark.slow
@every_case
@pytest.mark.parametrize("where", ["inside", "near blanks and edges", "everywhere"])
def test_stated_error_is_the_scatter(name, where) -> None:
    # The output sigma equals the scatter over 200 draws
    # within 5 %.
    values, matched = draws(name)
    inside = matched.coverage > 0.98
    seen = np.isfinite(matched.value)
    region = {"inside": inside, "everywhere": seen}.get(where, seen & ~inside)
    if not region.any():
        pytest.skip("no pixel of this case is partly covered")  # equal beams: all or nothing
    scatter = np.sqrt(np.mean(values[:, region] ** 2, axis=0))
    ratio = matched.error[region] / scatter
    # Pooled over the region: the scatter of 200 draws is known to 5 % in each pixel.
    assert np.sqrt(np.mean(ratio**2)) == pytest.approx(1.0, abs=0.05)
    # And pixel by pixel as wide as 200 draws make it, sqrt(1 / 400), in no part of the map.
    if where == "inside":
        assert np.std(np.log(ratio)) < 0.065
        assert np.quantile(ratio, [0.01, 0.99]) == pytest.approx([1.0, 1.0], abs=0.2)


@every_case
def test_pulls_are_normal(name) -> None:
    # Pull width 1.00 +- 0.05.
    values, matched = draws(name)
    pulls = (values / matched.error)[:, np.isfinite(matched.value)]
    assert np.std(pulls) == pytest.approx(1.0, abs=0.05)
    assert np.mean(np.abs(pulls) < 1) == pytest.approx(0.6827, abs=0.015)


@every_case
@pytest.mark.parametrize("lag", [(1, 0), (0, 1), (2, 0), (0, 2), (2, 2), (2, -2), (4, 1)])
def test_stated_correlation_is_the_measured_one(name, lag) -> None:
    """The draws are the reference; exp(-d^T C^-1 d / 4) where noise is wider than a pixel."""
    values, matched = draws(name)
    case = CASES[name]
    pulls = np.where(matched.coverage > 0.98, values / matched.error, np.nan)
    dx, dy = lag
    n = pulls.shape[1]
    first = pulls[:, max(0, -dy) : n - max(0, dy), max(0, -dx) : n - max(0, dx)]
    second = pulls[:, max(0, dy) : n + min(0, dy), max(0, dx) : n + min(0, dx)]
    both = np.isfinite(first) & np.isfinite(second)
    measured = np.sum(first[both] * second[both]) / np.sqrt(
        np.sum(first[both] ** 2) * np.sum(second[both] ** 2)
    )
    stated = stated_correlation(matched, -dx * case.step, dy * case.step)
    assert measured == pytest.approx(stated, abs=0.03)


def stated_correlation(matched: SkyMap, east: Any, north: Any) -> Any:
    """What the term says: a Gaussian, or lag by lag where it feels the map's pixels."""
    (term,) = matched.noise
    return term.correlation_at(*np.broadcast_arrays(east, north))


@every_case
def test_errors_of_sums_follow_from_the_stated_correlation(name) -> None:
    """Sums over blocks of 7 x 7 pixels: sigma_i sigma_j R_ij summed over all pairs of pixels."""
    values, matched = draws(name)
    step = CASES[name].step
    y, x = (a.ravel() for a in np.indices((BLOCK, BLOCK)))
    pairs = stated_correlation(matched, -step * (x - x[:, None]), step * (y - y[:, None]))
    ratios = []
    for row, column in np.ndindex(*(n // BLOCK for n in matched.value.shape)):
        rows, columns = (slice(n * BLOCK, (n + 1) * BLOCK) for n in (row, column))
        cut = np.s_[..., rows, columns]
        if not (matched.coverage[cut] > 0.98).all():
            continue
        sigma = matched.error[cut].ravel()
        ratios.append(np.mean(values[cut].sum(axis=(1, 2)) ** 2) / (sigma @ pairs @ sigma))
    assert len(ratios) > 12
    assert math.sqrt(np.mean(ratios)) == pytest.approx(1.0, abs=0.05)


@every_case
def test_stated_correlation_adds_up(name) -> None:
    """Covariances of convolved Gaussians add: of the noise and of the kernel."""
    case = CASES[name]
    _, matched = draws(name)
    expected = round_beam(case.target) - elliptical_beam(*case.beam)
    if case.correlated:
        expected = expected + elliptical_beam(*case.beam)
        atol = 1e-6
    else:
        # White on pixels is white on the sky, averaged over a pixel: up to 1/12 pixel2 more.
        atol = case.pixel**2 / 12 + 1e-6
    np.testing.assert_allclose(matched.noise[0].correlation_arcsec2, expected, atol=atol)


def test_published_gain_of_white_noise() -> None:
    # C804: sigma / (2 sqrt(pi) s) with s = 4 pixels leaves 0.070524 of white noise.
    pixel = 2.0
    fwhm = 4 * pixel * math.sqrt(8 * math.log(2))
    sky = make_sky(
        np.ones((151, 151)),
        wcs=make_wcs((151, 151), pixel),
        beam_arcsec2=round_beam(6.0),
        noise=(NoiseTerm("probe", np.ones((151, 151)), NONE),),
    )
    grid = Grid(make_wcs((21, 21), pixel), (21, 21), pixel, CENTRE)
    matched = match_map(sky, round_beam(math.hypot(fwhm, 6.0)), grid)
    np.testing.assert_allclose(matched.error, 0.070524, rtol=5e-5)


def test_beam_correlated_noise_falls_as_the_ratio_of_beams() -> None:
    # Reference sheet, section 8: sigma_out = sigma_in FWHM_in / FWHM_out.
    beam = round_beam(10.0)
    sky = make_sky(
        np.ones((151, 151)),
        wcs=make_wcs((151, 151), 2.0),
        beam_arcsec2=beam,
        noise=(NoiseTerm("probe", np.ones((151, 151)), beam),),
    )
    grid = Grid(make_wcs((21, 21), 2.0), (21, 21), 2.0, CENTRE)
    matched = match_map(sky, round_beam(25.0), grid)
    np.testing.assert_allclose(matched.error, 10.0 / 25.0, rtol=1e-6)


def test_every_term_keeps_its_source_and_blanks() -> None:
    terms = tuple(NoiseTerm(name, np.ones((51, 51)), NONE) for name in ("a", "b"))
    value = np.ones((51, 51))
    value[:20] = np.nan
    sky = make_sky(value, wcs=make_wcs((51, 51), 3.0), beam_arcsec2=round_beam(8.0), noise=terms)
    matched = match_map(sky, round_beam(15.0), Grid(make_wcs((31, 31), 5.0), (31, 31), 5.0, CENTRE))
    assert [term.source for term in matched.noise] == ["a", "b"]
    for term in matched.noise:
        np.testing.assert_array_equal(np.isfinite(term.sigma), np.isfinite(matched.value))
    assert np.isnan(matched.error).any()


# --- Noise measured on blank sky ---------------------------------------------------------------


def sky_with(value: np.ndarray, fwhm: float = 12.0) -> SkyMap:
    return make_sky(value, wcs=make_wcs(value.shape, 3.0), beam_arcsec2=round_beam(fwhm))


def galaxy(shape=(300, 300)) -> tuple[np.ndarray, np.ndarray]:
    """A bright disc, and where no emission of it is expected."""
    y, x = np.indices(shape)
    radius = np.hypot(x - 150, y - 150)
    return 50.0 * np.exp(-radius / 20), radius > 120


@pytest.mark.parametrize("correlated", [False, True])
@pytest.mark.parametrize("contents", ["galaxy", "and stars", "and a pedestal", "and blanks"])
def test_measured_noise_is_the_true_one(correlated, contents) -> None:
    rng = np.random.default_rng(11)
    signal, is_outside = galaxy()
    case = Case(3.0, (12.0, 12.0, 0.0), 15.0, correlated)
    pieces = [unit_noise(case, make_wcs((SIDE, SIDE), 3.0), rng) for _ in range(16)]
    value = 0.37 * np.block([pieces[4 * i : 4 * i + 4] for i in range(4)])[:300, :300] + signal
    if contents == "and stars":
        hit = rng.integers(0, 300, (2, 250))
        value[*hit] += rng.uniform(3.0, 300.0, 250)
    value += 5.0 if contents == "and a pedestal" else 0.0
    if contents == "and blanks":
        value[:40] = np.nan
    measured = measure_noise(sky_with(value), is_outside, correlated=correlated)
    (term,) = measured.noise
    # Within 3 %: about 2000 beams outside know the scatter to 1.5 %.
    np.testing.assert_allclose(term.sigma, 0.37, rtol=0.03)
    assert term.sigma.shape == value.shape
    expected = round_beam(12.0) if correlated else NONE
    np.testing.assert_array_equal(term.correlation_arcsec2, expected)
    assert "noise measured" in measured.history[-1]


def test_masked_sky_shows_no_noise() -> None:
    rng = np.random.default_rng(12)
    signal, is_outside = galaxy()
    value = signal + rng.normal(0, 0.4, signal.shape)
    value[is_outside] = np.where(rng.random(is_outside.sum()) < 0.4, 0.0, value[is_outside])
    with pytest.raises(MapError, match=r"maps\.probe\.noise.*(39|40|41)\.\d%.*exactly zero"):
        measure_noise(sky_with(value), is_outside, correlated=True)


def test_too_little_blank_sky_is_refused() -> None:
    value = np.random.default_rng(13).normal(size=(60, 60))
    is_outside = np.zeros(value.shape, dtype=bool)
    is_outside[:10] = True
    # 600 pixels of 9 arcsec2 over 1.13309 x 144 arcsec2 (C115's formula) are 33 beams.
    with pytest.raises(MapError, match=r"maps\.probe\.noise.*holds 33 beams"):
        measure_noise(sky_with(value), is_outside, correlated=True)
    with pytest.raises(MapError, match="holds 0 beams"):
        measure_noise(sky_with(value), np.zeros_like(is_outside), correlated=True)
    with pytest.raises(MapError, match="holds 0 beams"):
        measure_noise(sky_with(np.full((60, 60), np.nan)), ~is_outside, correlated=True)


def test_a_sky_without_any_scatter_is_refused() -> None:
    with pytest.raises(MapError, match="scatter"):
        measure_noise(sky_with(np.ones((90, 90))), np.ones((90, 90), dtype=bool), correlated=False)
