"""From stored numbers to a map with its noise: nothing is guessed, nothing is written."""

from __future__ import annotations

import hashlib
import math
from pathlib import Path

import numpy as np
import pytest
from astropy.io import fits
from helpers import ARCSEC2_SR, assert_maps_close, make_hdu, make_wcs, open_source, read_map

from kspipe.core.errors import MapError, ShapeError, UnitError
from kspipe.maps import NoiseRequest
from kspipe.maps.read import load_map
from kspipe.maps.skymap import SkyMap

SHAPE = (40, 50)
FROM_FILE = Path("noise.fits")


@pytest.fixture(scope="module")
def data() -> np.ndarray:
    return np.random.default_rng(5).normal(3.0, 1.0, SHAPE)


@pytest.fixture(scope="module")
def sigma() -> np.ndarray:
    return np.random.default_rng(6).uniform(0.1, 0.4, SHAPE)


def with_noise(hdu, noise_hdu, stated="sigma", correlated="beam", **changes) -> SkyMap:
    noise = NoiseRequest("file", file=FROM_FILE, stated=stated, correlated=correlated)
    return load_map(open_source(hdu, noise_hdu=noise_hdu, noise=noise, **changes))


# --- Noise -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("stated", "power"), [("sigma", 1.0), ("variance", 2.0), ("inverse variance", -2.0)]
)
@pytest.mark.parametrize("unit", ["K km/s", "K m/s"])
def test_three_ways_to_state_noise(data, sigma, stated, power, unit) -> None:
    # Definitions of variance and inverse variance; both in the unit of the map.
    scale = 1e3 if unit == "K m/s" else 1.0
    sky = with_noise(
        make_hdu(data * scale, unit=unit), make_hdu((sigma * scale) ** power, unit=None), stated
    )
    (term,) = sky.noise
    assert_maps_close(term.sigma, sigma, rtol=1e-12)
    assert_maps_close(sky.error, sigma, rtol=1e-12)
    assert f"read as {stated}" in " ".join(sky.history)


def test_a_sigma_map_may_have_its_own_unit(data, sigma) -> None:
    sky = with_noise(make_hdu(data), make_hdu(sigma * 1e3, unit="mK km/s"))
    assert_maps_close(sky.error, sigma, rtol=1e-12)


def test_the_unit_of_a_sigma_map_counts_when_that_of_the_map_is_typed(data, sigma) -> None:
    """A map without BUNIT and a noise map that has one: it must not be ignored."""
    hdu, noise_hdu = make_hdu(data, unit=None), make_hdu(sigma * 1e-3, unit="kJy/sr")
    expected = sigma * 1e-6  # 1 kJy/sr is 1e-3 MJy/sr
    try:
        sky = with_noise(hdu, noise_hdu, unit="MJy/sr", tracer="24um")
    except UnitError:
        return
    assert_maps_close(sky.error, expected, rtol=1e-12)


def test_noise_of_a_wrong_kind_is_refused(data, sigma) -> None:
    with pytest.raises(UnitError, match=r"maps\.probe\.noise.*'MJy/sr'"):
        with_noise(make_hdu(data), make_hdu(sigma, unit="MJy/sr"))
    with pytest.raises(UnitError, match=r"maps\.probe.*'MJy/sr'"):
        open_source(make_hdu(data), noise=NoiseRequest("value", value=0.2, unit="MJy/sr"))


@pytest.mark.parametrize(
    ("map_unit", "noise_unit"),
    [("Jy/beam km/s", "K km/s"), ("K km/s", "Jy/beam km/s"), ("K km/s", "mJy/beam km/s")],
)
def test_a_typed_noise_in_another_unit_of_the_tracer(data, map_unit, noise_unit) -> None:
    """Noise of interferometer maps is quoted per beam, whatever the map is in."""
    one = {"velocity_kms": 640.0}
    in_kelvin = open_source(make_hdu(data, unit="Jy/beam km/s"), **one).door.factor
    per = {"K km/s": 1.0, "Jy/beam km/s": in_kelvin, "mJy/beam km/s": in_kelvin / 1e3}
    noise = NoiseRequest("value", value=0.2, unit=noise_unit)
    sky = read_map(make_hdu(data, unit=map_unit), noise=noise, **one)
    np.testing.assert_allclose(sky.error, 0.2 * per[noise_unit], rtol=1e-6)


@pytest.mark.parametrize("correlated", ["beam", "none"])
def test_noise_carries_its_correlation(data, correlated) -> None:
    noise = NoiseRequest("value", value=0.5, correlated=correlated)
    sky = read_map(make_hdu(data, beam_arcsec=(12.0, 8.0, 30.0)), noise=noise)
    expected = sky.beam_arcsec2 if correlated == "beam" else np.zeros((2, 2))
    np.testing.assert_array_equal(sky.noise[0].correlation_arcsec2, expected)
    np.testing.assert_array_equal(sky.error, 0.5)


def test_noise_per_pixel_follows_the_area_of_the_pixel() -> None:
    """A flux per pixel of constant error is an intensity error that goes as 1 / area."""
    wcs = make_wcs((100, 20), 3600.0, centre=(180.0, 0.0), projection="CAR")
    ones = np.ones((100, 20))
    # The area of a plate-carree cell goes as the cosine of its latitude, here +-49.5 deg.
    latitude = np.radians(np.arange(100) - 49.5)
    expected = 1e-6 / (np.cos(latitude) * 3600.0**2 * ARCSEC2_SR)
    hdu = make_hdu(ones, wcs=wcs, unit="Jy/pixel", beam_arcsec=7200.0)
    centre = (180.0, 0.0)
    sky = read_map(
        hdu, tracer="24um", centre=centre, noise=NoiseRequest("value", value=0.5, unit="")
    )
    # Cells of one degree: to (1 deg)^2 = 3e-4.
    np.testing.assert_allclose(sky.value[:, 3], expected, rtol=3e-4)
    np.testing.assert_allclose(sky.error[:, 3], 0.5 * expected, rtol=3e-4)
    # A noise typed as an intensity is that intensity in every pixel.
    typed = NoiseRequest("value", value=0.5, unit="MJy/sr")
    sky = read_map(hdu, tracer="24um", centre=centre, noise=typed)
    np.testing.assert_allclose(sky.error, 0.5, rtol=1e-9)


@pytest.mark.parametrize("shape", [(40, 49), (50, 40), (20, 25)])
def test_noise_of_another_shape_is_refused(data, shape) -> None:
    with pytest.raises(ShapeError, match=rf"{shape[1]} x {shape[0]} pixels, the map 50 x 40"):
        with_noise(make_hdu(data), make_hdu(np.ones(shape)))


@pytest.mark.parametrize("stated", ["sigma", "variance", "inverse variance"])
@pytest.mark.parametrize("bad", [0.0, -0.2])
def test_noise_that_is_not_positive_is_refused(data, sigma, stated, bad) -> None:
    wrong = sigma.copy()
    wrong[5, 6] = bad
    with pytest.raises(MapError, match=rf"maps\.probe\.noise.*1 pixels.*a {stated} is positive"):
        with_noise(make_hdu(data), make_hdu(wrong), stated)
    # Where the map itself is blank it does no harm.
    blanked = data.copy()
    blanked[5, 6] = np.nan
    assert np.isnan(with_noise(make_hdu(blanked), make_hdu(wrong), stated).value[5, 6])


@pytest.mark.parametrize("stated", ["sigma", "variance", "inverse variance"])
def test_infinite_noise_is_not_a_perfect_pixel(data, sigma, stated) -> None:
    """An infinite sigma was not observed; an infinite weight is nonsense, never sigma = 0."""
    odd = sigma.copy()
    odd[5, 6] = np.inf
    try:
        sky = with_noise(make_hdu(data), make_hdu(odd), stated)
    except MapError:
        return
    assert np.isnan(sky.value[5, 6])
    assert sky.error[5, 6] != 0.0


def test_pixels_without_a_stated_error_are_left_out(data, sigma) -> None:
    holes = sigma.copy()
    holes[:3] = np.nan
    sky = with_noise(make_hdu(data), make_hdu(holes))
    assert np.isnan(sky.value[:3]).all()
    assert np.isfinite(sky.value[3:]).all()
    np.testing.assert_array_equal(sky.coverage, np.isfinite(sky.value))
    assert "150 pixels without a stated error left out" in sky.history
    with pytest.raises(MapError, match="blank where the map is not"):
        with_noise(make_hdu(data), make_hdu(np.full(SHAPE, np.nan)))


def test_an_error_of_the_zero_level_is_kept_apart(data) -> None:
    sky = read_map(make_hdu(data), pedestal_error=(20.0, "mK km/s"), calibration_error=0.05)
    assert sky.common.pedestal == pytest.approx(0.02)
    assert sky.common.calibration == 0.05
    np.testing.assert_array_equal(sky.error, 1.0)


# --- Values ------------------------------------------------------------------------------------


def test_blanks_of_every_kind(data) -> None:
    holes = data.copy()
    holes[0, 0], holes[1, 1], holes[2, 2] = np.nan, np.inf, -np.inf
    sky = read_map(make_hdu(holes))
    assert_maps_close(sky.value, np.where(np.isfinite(holes), holes, np.nan), rtol=0)
    assert sky.facts["blank_pixels"] == 3
    with pytest.raises(MapError, match=r"maps\.probe.*no pixel"):
        read_map(make_hdu(np.full(SHAPE, np.nan)))


def test_exact_zeros_ask_for_a_meaning(data) -> None:
    few, many = data.copy(), data.copy()
    few[0, :10] = 0.0  # half a percent
    many[:10] = 0.0
    assert read_map(make_hdu(few)).value[0, 0] == 0.0
    with pytest.raises(MapError, match=r'25\.0%.*maps\.probe\.zeros = "blank" or "flux"'):
        read_map(make_hdu(many))
    blank, flux = (read_map(make_hdu(many), zeros=way) for way in ("blank", "flux"))
    assert_maps_close(blank.value, np.where(many == 0, np.nan, many), rtol=0)
    assert_maps_close(flux.value, many, rtol=0)
    with pytest.raises(MapError, match="no pixel"):
        read_map(make_hdu(np.zeros(SHAPE)), zeros="blank")


def test_values_have_the_precision_of_the_file(data) -> None:
    sky = read_map(make_hdu(data.astype(">f4")))
    assert sky.value.dtype == np.float64
    np.testing.assert_array_equal(sky.value, data.astype(np.float32).astype(float))


def test_what_was_read_is_told(data, tmp_path) -> None:
    make_hdu(data, beam_arcsec=(12.0, 8.0, 30.0)).writeto(tmp_path / "hi map.fits")
    text = "\n".join(read_map(tmp_path / "hi map.fits").history)
    for word in ("hi map.fits", "50 x 40", "'K km/s'", "12 x 8 arcsec", "header BMAJ"):
        assert word in text


# --- Input files are never written to ----------------------------------------------------------


def checksums(folder: Path) -> dict[str, tuple[str, int]]:
    return {
        file.name: (hashlib.sha256(file.read_bytes()).hexdigest(), file.stat().st_mtime_ns)
        for file in sorted(folder.iterdir())
    }


def test_input_files_are_never_modified(data, sigma, tmp_path) -> None:
    masked = data.astype(np.float32)
    masked[:10] = 0.0
    make_hdu(masked, unit="K m/s").writeto(tmp_path / "map.fits")
    make_hdu(sigma**2, unit=None).writeto(tmp_path / "variance.fits")
    hdus = [fits.PrimaryHDU(), fits.ImageHDU(np.arange(2000, dtype=np.int16).reshape(SHAPE))]
    hdus[1].header.update(make_hdu(data).header)
    fits.HDUList(hdus).writeto(tmp_path / "integer.fits")
    before = checksums(tmp_path)
    noise = NoiseRequest("file", file=tmp_path / "variance.fits", stated="variance")
    read_map(tmp_path / "map.fits", noise=noise, zeros="blank")
    read_map(tmp_path / "integer.fits")
    assert checksums(tmp_path) == before
    assert len(before) == 3


def test_hdus_in_memory_are_never_modified(data, sigma) -> None:
    many = data.copy()
    many[:10] = 0.0
    hdu, noise_hdu = make_hdu(many, unit="K m/s"), make_hdu(sigma**2, unit=None)
    before = hdu.data.copy(), str(hdu.header), noise_hdu.data.copy(), str(noise_hdu.header)
    with_noise(hdu, noise_hdu, "variance", zeros="blank")
    np.testing.assert_array_equal(hdu.data, before[0])
    np.testing.assert_array_equal(noise_hdu.data, before[2])
    assert (str(hdu.header), str(noise_hdu.header)) == before[1::2]


@pytest.mark.parametrize(
    ("shape_is", "expected"),
    [
        # Common practice: noise as 1/PB, 1/sqrt(time or weight), sqrt(channels summed).
        ("primary beam", [2.0, 1.0, 0.25]),
        ("exposure", [math.sqrt(8.0), 2.0, 1.0]),
        ("weight", [math.sqrt(8.0), 2.0, 1.0]),
        ("channels", [math.sqrt(0.5), 1.0, 2.0]),
    ],
)
def test_noise_follows_its_shape(tmp_path, data, shape_is, expected) -> None:
    shape = np.full(SHAPE, 4.0)
    shape[0, :2] = 0.5, 1.0
    file = tmp_path / "shape.fits"
    make_hdu(shape).writeto(file)
    noise = NoiseRequest("value", value=0.1, unit="K km/s", shape_file=file, shape_is=shape_is)
    sky = read_map(make_hdu(data), noise=noise)
    np.testing.assert_allclose(sky.error[0, :3], 0.1 * np.array(expected), rtol=1e-6)
