"""The level of the sky beyond a galaxy: measured, told, and taken off on request."""

from __future__ import annotations

import math

import numpy as np
import pytest
from astropy.io import fits
from helpers import demo_recipe, make_sky, make_wcs, round_beam
from scipy import ndimage

from kspipe.core.errors import KspipeWarning, MapError
from kspipe.kernels.noise import NoiseTerm
from kspipe.matching.sky_level import measure_sky_level, subtract_sky_level
from kspipe.recipe import parse_recipe
from kspipe.stages.plan import make_plan
from kspipe.stages.reduce import match_one
from kspipe.stages.steps import judge_maps, read_totals

SIDE = 240


def sky_with(value: np.ndarray, sigma: float, *, fwhm_pix: float = 0.0):
    """A map with a galaxy in its middle, 3 arcsec pixels, noise white or of a beam."""
    beam = round_beam(3.0 * fwhm_pix) if fwhm_pix else np.zeros((2, 2))
    term = NoiseTerm("probe", np.full(value.shape, sigma), beam)
    sky = make_sky(
        value, wcs=make_wcs(value.shape, 3.0), beam_arcsec2=round_beam(9.0), noise=(term,)
    )
    y, x = np.indices(value.shape) - (SIDE - 1) / 2
    return sky, np.hypot(x, y) > 60


def noise(seed: int, fwhm_pix: float = 0.0) -> np.ndarray:
    white = np.random.default_rng(seed).normal(size=(SIDE, SIDE))
    if not fwhm_pix:
        return white
    smooth = ndimage.gaussian_filter(white, fwhm_pix / 2.354820045, mode="wrap")
    return smooth / smooth.std()


@pytest.mark.parametrize("fwhm_pix", [0.0, 4.0], ids=["white", "beam"])
def test_the_error_is_that_of_the_mean(fwhm_pix) -> None:
    """Over 60 skies the pulls have a width of one: the correlation of the noise counts."""
    pulls = []
    for seed in range(60):
        sky, outside = sky_with(0.3 + noise(seed, fwhm_pix), 1.0, fwhm_pix=fwhm_pix)
        level = measure_sky_level(sky, outside)
        pulls.append((level.value - 0.3) / level.error)
    assert 0.75 < np.std(pulls) < 1.15  # 60 pulls know their width to 9 %
    assert abs(np.mean(pulls)) < 4 / math.sqrt(60)


def test_stars_and_the_galaxy_do_not_count() -> None:
    value = 0.05 + 0.1 * noise(1)
    sky, outside = sky_with(value.copy(), 0.1)
    plain = measure_sky_level(sky, outside)
    stars = np.random.default_rng(2).integers(0, SIDE, (2, 200))
    value[stars[0], stars[1]] += 50.0
    value[~outside] += 1000.0
    crowded = measure_sky_level(sky_with(value, 0.1)[0], outside)
    assert crowded.value == pytest.approx(plain.value, abs=0.3 * plain.error)


def test_a_background_that_is_not_flat_has_a_larger_error() -> None:
    x = np.indices((SIDE, SIDE))[1] / SIDE - 0.5
    flat = measure_sky_level(*sky_with(noise(3), 1.0))
    tilted = measure_sky_level(*sky_with(noise(3) + 2 * x, 1.0))
    # Sectors differ by about 0.8 rms, their mean of eight by 0.8 / sqrt(8).
    assert tilted.error == pytest.approx(0.8 / math.sqrt(8), rel=0.4)
    assert flat.error < 0.1 * tilted.error


def test_too_little_sky_gives_no_level() -> None:
    sky, _ = sky_with(noise(4), 1.0)
    few = np.zeros((SIDE, SIDE), dtype=bool)
    few[:5, :40] = True
    assert measure_sky_level(sky, few) is None


def test_taking_off_leaves_zero_and_an_error() -> None:
    sky, outside = sky_with(0.3 + noise(5), 1.0)
    level = measure_sky_level(sky, outside)
    after = subtract_sky_level(sky, level)
    np.testing.assert_allclose(after.value, sky.value - level.value)
    assert after.common.pedestal == pytest.approx(level.error)
    assert "sky level taken off" in after.history[-1]
    assert measure_sky_level(after, outside).value == pytest.approx(0.0, abs=1e-9)


PEDESTAL = 0.02


def demo_with_pedestal(folder, **keys):
    """The demonstration recipe with a level added to its FUV map."""
    raw = demo_recipe(folder)
    raw["maps"]["fuv"] |= keys
    recipe = parse_recipe(raw, folder=folder)
    plain = make_plan(recipe)
    hdu = plain.sources["fuv"].image.file
    with fits.open(hdu) as opened:
        raised = fits.PrimaryHDU(opened[0].data + np.float32(PEDESTAL), opened[0].header)
    return recipe, {"fuv": (raised, None)}


def judge(recipe, memory):
    plan = make_plan(recipe, memory)
    matched = {name: match_one(plan, name) for name in plan.sources}
    return plan, matched, judge_maps(plan, matched, read_totals(plan))


def test_a_pedestal_is_warned_of(tmp_path) -> None:
    recipe, memory = demo_with_pedestal(tmp_path)
    with pytest.warns(KspipeWarning, match=r"maps\.fuv: the sky is not zero: 0\.0(2|19|20)"):
        _, _, findings = judge(recipe, memory)
    assert findings["fuv"]["sky_level"]["value"] == pytest.approx(PEDESTAL, abs=3e-4)
    # HI, CO and 24 um have none, and none is claimed.
    for name in ("hi", "co", "ir"):
        level = findings[name]["sky_level"]
        assert abs(level["value"]) < 3 * level["error"]


def test_a_pedestal_is_taken_off_on_request(tmp_path) -> None:
    recipe, memory = demo_with_pedestal(tmp_path, background="subtract")
    _, matched, findings = judge(recipe, memory)  # a warning would be an error here
    clean_plan = make_plan(parse_recipe(demo_recipe(tmp_path), folder=tmp_path))
    clean = match_one(clean_plan, "fuv")
    level = findings["fuv"]["sky_level"]
    assert abs(level["value"]) < 3 * level["error"]
    both = np.isfinite(clean.value) & np.isfinite(matched["fuv"].value)
    off = (matched["fuv"].value - clean.value)[both]
    assert np.ptp(off) < 1e-6
    assert abs(off.mean()) < 3 * matched["fuv"].common.pedestal
    steps = {step.step: step for step in matched["fuv"].steps}
    assert "taken off" in steps["background"].what
    # What was read still had the pedestal; what was left has not.
    area = steps["read"].flux - steps["background"].flux
    assert area > 0


def test_a_known_pedestal_is_not_warned_of(tmp_path) -> None:
    recipe, memory = demo_with_pedestal(tmp_path, pedestal_error="0.02 MJy/sr")
    judge(recipe, memory)


def test_without_sky_there_is_nothing_to_take_off(tmp_path) -> None:
    raw = demo_recipe(tmp_path)
    raw["maps"]["fuv"]["background"] = "subtract"
    raw["galaxy"]["r25"] = "9 arcmin"
    plan = make_plan(parse_recipe(raw, folder=tmp_path))
    with pytest.raises(MapError, match=r"maps\.fuv\.background.*too little sky beyond 2 r25"):
        match_one(plan, "fuv")
