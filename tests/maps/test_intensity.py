"""The door: every stored unit of one sky gives one canonical intensity.

Codes such as C110 number the worked check values of the project's reference sheet.
"""

from __future__ import annotations

import math
from pathlib import Path
from typing import Any

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from helpers import ARCSEC2_SR, C_KM_S, assert_maps_close, make_hdu, make_wcs, open_source, read_map
from pydantic import ValidationError

from kspipe.core.errors import GridError, MapError, UnitError
from kspipe.core.tracers import TRACERS
from kspipe.maps import NoiseRequest
from kspipe.maps.intensity import examples, open_door, read_stored_unit
from kspipe.recipe.map_table import MapTable

# SI and CODATA 2018 exact values, kept apart from the constants of kspipe on purpose.
C_CM_S, K_ERG_K, H_ERG_S = 2.99792458e10, 1.380649e-16, 6.62607015e-27
NU_HI_GHZ = 1.420405751768
SHAPE = (40, 50)


def kelvin_per_jy_beam(ghz: float, major: float, minor: float) -> float:
    """T = c^2 / (2 k nu^2) S / Omega with Omega = pi / (4 ln 2) bmaj bmin (Rayleigh-Jeans)."""
    omega = math.pi / (4 * math.log(2)) * major * minor * ARCSEC2_SR
    return C_CM_S**2 / (2 * K_ERG_K * (ghz * 1e9) ** 2) * 1e-23 / omega


def stated(tracer: str, level: float = 1.0) -> NoiseRequest:
    """A noise in the canonical unit."""
    return NoiseRequest("value", value=level, unit=TRACERS[tracer].unit)


def factor(
    unit: str, tracer: str, *, beam: Any = 8.0, pixel_arcsec: float = 0.5, **changes: Any
) -> float:
    """Canonical intensity of one stored unit."""
    hdu = make_hdu(np.ones(SHAPE), unit=unit, beam_arcsec=beam, pixel_arcsec=pixel_arcsec)
    return open_source(hdu, tracer=tracer, **({"noise": stated(tracer)} | changes)).door.factor


# --- Jy per beam to K --------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("tracer", "beam", "expected"),
    [
        ("HI", 10.0, 6057.4),  # C110
        ("CO(1-0)", (6.0, 5.0, 20.0), 3.0659),  # C111
        ("CO(2-1)", 1.5, 10.220),  # C112
    ],
)
def test_published_kelvin_per_jy_beam(tracer, beam, expected) -> None:
    # At rest, half a unit of the last of five digits.
    got = factor("Jy/beam km/s", tracer, beam=beam, velocity_kms=0.0)
    assert got == pytest.approx(expected, rel=5e-5)


def test_published_column_of_a_jy_beam() -> None:
    # C113: 1 Jy/beam km/s at 10 arcsec is 1.1043e22 H atoms per cm2.
    per_jy = factor("Jy/beam km/s", "HI", beam=10.0, velocity_kms=0.0)
    per_atom = factor("cm-2", "HI")
    assert per_jy / per_atom == pytest.approx(1.1043e22, rel=5e-5)


@pytest.mark.parametrize(
    ("unit", "tracer", "ghz", "pixel_arcsec", "expected"),
    [
        ("MJy/sr km/s", "CO(1-0)", 115.27, 1.0, 0.0024496),  # C114
        ("mJy/pixel", "24um", None, 1.5, 18.909),  # C329
        ("Rayleigh", "Halpha", None, 1.0, 2.4087e-07),  # C330
        ("cm-2", "HI", None, 1.0, 1 / 1.823e18),  # reference sheet 1.1
    ],
)
def test_published_factors(unit, tracer, ghz, pixel_arcsec, expected) -> None:
    reading = read_stored_unit(unit, None, TRACERS[tracer], "m")
    door = open_door(
        reading,
        TRACERS[tracer],
        frequency_ghz=ghz,
        beam_area_arcsec2=None,
        pixel_area_arcsec2=pixel_arcsec**2,
        where="m",
    )
    assert door.factor == pytest.approx(expected, rel=5e-5)
    assert door.per_pixel == ("pixel" in unit)


@pytest.mark.parametrize("tracer", ["HI", "CO(1-0)", "CO(2-1)", "CO(3-2)"])
@pytest.mark.parametrize("beam", [(12.0, 12.0, 0.0), (13.4, 10.6, 35.0)])
def test_kelvin_per_jy_beam_against_two_others(tracer, beam) -> None:
    velocity = 1500.0
    ghz = TRACERS[tracer].frequency_ghz / (1 + velocity / C_KM_S)
    got = factor("Jy/beam km/s", tracer, beam=beam, velocity_kms=velocity)
    assert got == pytest.approx(kelvin_per_jy_beam(ghz, *beam[:2]), rel=1e-6)
    area = math.pi / (4 * math.log(2)) * beam[0] * beam[1] * u.arcsec**2
    reference = u.brightness_temperature(ghz * u.GHz, beam_area=area)
    assert got == pytest.approx((1 * u.Jy / u.beam).to_value(u.K, reference), rel=1e-6)


def test_the_observed_frequency_counts() -> None:
    # Reference sheet 1.2: at 3000 km/s the rest frequency is wrong by 2 percent, (1 + z)^2.
    moving = factor("Jy/beam km/s", "HI", velocity_kms=3000.0)
    at_rest = factor("Jy/beam km/s", "HI", velocity_kms=0.0)
    assert moving / at_rest == pytest.approx((1 + 3000 / C_KM_S) ** 2, rel=1e-9)
    assert moving / at_rest == pytest.approx(1.0201, abs=5e-5)


def test_without_a_frequency_jy_per_beam_is_refused() -> None:
    with pytest.raises(GridError, match=r"maps\.probe.*observed frequency.*galaxy\.velocity"):
        factor("Jy/beam km/s", "HI")
    # A detector band needs none.
    expected = 1e-6 / (math.pi / (4 * math.log(2)) * 64 * ARCSEC2_SR)
    assert factor("Jy/beam", "24um") == pytest.approx(expected, rel=1e-6)


# --- Per wavelength, magnitudes, counts --------------------------------------------------------


def test_published_ab_zero_point() -> None:
    # C331: magnitude 0 is 3630.8 Jy.
    per_arcsec2 = factor("mag(AB)/arcsec2", "FUV") * ARCSEC2_SR
    assert per_arcsec2 * 1e6 == pytest.approx(3630.8, rel=5e-5)
    per_pixel = factor("mag(AB)/pixel", "FUV", pixel_arcsec=2.0) * 4 * ARCSEC2_SR
    assert per_pixel == pytest.approx(per_arcsec2, rel=1e-9)


@pytest.mark.parametrize(
    ("tracer", "zero_point", "expected"),
    [
        ("FUV", 18.82, 0.0020355),  # C332
        ("NUV", 20.08, 6.3778e-04),  # C333
    ],
)
def test_published_count_rates(tracer, zero_point, expected) -> None:
    # 1e-3 counts/s in a pixel of 1.5 arcsec.
    got = factor("counts/s", tracer, pixel_arcsec=1.5, zero_point=zero_point)
    assert 1e-3 * got == pytest.approx(expected, rel=5e-5)


@pytest.mark.parametrize(
    ("tracer", "counts", "angstrom", "zero_point"),
    [
        # Mission pages: 1 count/s, and the AB magnitude of 1 count/s; +-10 percent. Wavelengths:
        # Martin et al. 2005 (from memory).
        ("FUV", "1.40e-15 erg/s/cm2/A", 1528.0, 18.82),
        ("NUV", "2.06e-16 erg/s/cm2/A", 2271.0, 20.08),
    ],
)
def test_two_ways_to_state_what_a_count_is_worth(tracer, counts, angstrom, zero_point) -> None:
    # f_nu = f_lambda lambda^2 / c, and 1e-17 erg/s/cm2/Hz/sr in 1 MJy/sr.
    per_hz = float(counts.split()[0]) * angstrom**2 / (C_CM_S * 1e8)
    got = factor("counts/s", tracer, counts=counts)
    assert got == pytest.approx(per_hz / (0.25 * ARCSEC2_SR) / 1e-17, rel=1e-6)
    assert got == pytest.approx(factor("counts/s", tracer, zero_point=zero_point), rel=0.1)


def test_the_effective_wavelength_is_the_tracers_or_the_recipes() -> None:
    # f_nu = f_lambda lambda^2 / c; 1538.6 A: Morrissey et al. 2007 (from memory).
    unit = "erg/s/cm2/A/arcsec2"
    usual = factor(unit, "FUV")
    assert usual == pytest.approx(1e17 * 1528.0**2 / (C_CM_S * 1e8) / ARCSEC2_SR, rel=1e-6)
    typed = factor(unit, "FUV", wavelength_um=0.15386)
    assert typed / usual == pytest.approx((1538.6 / 1528.0) ** 2, rel=1e-9)
    # 1 W/m2/um is 0.1 erg/s/cm2/A.
    assert factor("W/m2/um/arcsec2", "FUV") / usual == pytest.approx(0.1, rel=1e-9)


# --- Unit twins: one sky, many files -----------------------------------------------------------

VELOCITY = 640.0
BEAM = (13.4, 10.6, 35.0)
WCS = make_wcs(SHAPE, 4.0, rotation_deg=20.0)


def tan_areas_sr() -> np.ndarray:
    """Solid angle of each pixel of WCS: a gnomonic cell covers cos^3 of its distance."""
    y, x = np.indices(SHAPE)
    theta = np.hypot(x - 24.5, y - 19.5) * math.radians(4 / 3600)
    return 16 * ARCSEC2_SR * np.cos(np.arctan(theta)) ** 3


def twin(value: np.ndarray, unit: str, **cards: Any) -> fits.PrimaryHDU:
    return make_hdu(value, wcs=WCS, unit=unit, beam_arcsec=BEAM, cards=cards)


@pytest.fixture(scope="module")
def truth() -> np.ndarray:
    return np.random.default_rng(3).uniform(1.0, 9.0, SHAPE)


JY_PER_K = 1 / kelvin_per_jy_beam(NU_HI_GHZ / (1 + VELOCITY / C_KM_S), *BEAM[:2])
BEAM_SR = math.pi / (4 * math.log(2)) * BEAM[0] * BEAM[1] * ARCSEC2_SR
LINE_TWINS: dict[str, Any] = {
    "K km/s": 1.0,
    "K.KM/S": 1.0,
    "K km s-1": 1.0,
    "K m/s": 1e3,
    "mK km/s": 1e3,
    "Jy/beam km/s": JY_PER_K,
    "Jy beam-1 km s^-1": JY_PER_K,
    "JY/BEAM*KM/S": JY_PER_K,
    "JY/BEAM.M/S": 1e3 * JY_PER_K,
    "JY/B*M/S": 1e3 * JY_PER_K,
    "mJy/beam km/s": 1e3 * JY_PER_K,
    "cm-2": 1.823e18,
    "1e20 cm^-2": 1.823e-2,
    "m**-2": 1.823e22,
    "MJy/sr km/s": 1e-6 * JY_PER_K / BEAM_SR,
    "mJy/arcsec2 km/s": 1e3 * JY_PER_K / BEAM_SR * ARCSEC2_SR,
    "Jy/pixel km/s": lambda: JY_PER_K / BEAM_SR * tan_areas_sr(),
}


def stored(scale: Any) -> Any:
    return scale() if callable(scale) else scale


@pytest.mark.parametrize("unit", LINE_TWINS)
def test_line_twins(truth, unit) -> None:
    hdu = twin(truth * stored(LINE_TWINS[unit]), unit)
    sky = read_map(hdu, velocity_kms=VELOCITY)
    assert sky.unit == "K km/s"
    assert_maps_close(sky.value, truth, rtol=1e-6)


CONTINUUM_TWINS: dict[str, Any] = {
    "MJy/sr": 1.0,
    "MJY/SR": 1.0,
    "Jy/sr": 1e6,
    "kJy sr-1": 1e3,
    "mJy/arcsec2": 1e9 * ARCSEC2_SR,
    "Jy arcsec^-2": 1e6 * ARCSEC2_SR,
    "W/m2/Hz/sr": 1e-20,
    "erg/s/cm2/Hz/sr": 1e-17,
    "Jy/beam": 1e6 * BEAM_SR,
    "mJy/beam": 1e9 * BEAM_SR,
    "Jy/pixel": lambda: 1e6 * tan_areas_sr(),
    "uJy/pix": lambda: 1e12 * tan_areas_sr(),
}


@pytest.mark.parametrize("unit", CONTINUUM_TWINS)
@pytest.mark.parametrize("tracer", ["24um", "FUV"])
def test_continuum_twins(truth, unit, tracer) -> None:
    hdu = twin(truth * stored(CONTINUUM_TWINS[unit]), unit)
    assert_maps_close(read_map(hdu, tracer=tracer).value, truth, rtol=1e-6)


PER_ANGSTROM = 1e-17 * C_CM_S * 1e8 / 1528.0**2  # erg/s/cm2/A/sr for 1 MJy/sr at 1528 A
PER_COUNT = 10 ** (-0.4 * (18.82 + 48.60))  # erg/s/cm2/Hz, definition of AB magnitudes


def ab(per_hz: np.ndarray) -> np.ndarray:
    """AB magnitude of erg/s/cm2/Hz, by definition."""
    return -2.5 * np.log10(per_hz) - 48.60


# What 1e-17 erg/s/cm2/Hz/sr, times the sky, is stored as; and what the recipe says.
FUV_TWINS: dict[str, tuple[Any, dict[str, Any]]] = {
    "MJy/sr": (lambda sky: sky, {}),
    "Jy/arcsec2": (lambda sky: sky * 1e6 * ARCSEC2_SR, {}),
    "uJy/pixel": (lambda sky: sky * 1e12 * tan_areas_sr(), {}),
    "nJy/arcsec^2": (lambda sky: sky * 1e15 * ARCSEC2_SR, {}),
    "erg/s/cm2/Hz/sr": (lambda sky: sky * 1e-17, {}),
    "erg/s/cm2/A/pixel": (lambda sky: sky * PER_ANGSTROM * tan_areas_sr(), {}),
    "1E-17 erg/s/cm^2/Ang/spaxel": (lambda sky: sky * PER_ANGSTROM * tan_areas_sr() * 1e17, {}),
    "erg s-1 cm-2 Å-1 arcsec-2": (lambda sky: sky * PER_ANGSTROM * ARCSEC2_SR, {}),
    "W/m2/um/sr": (
        lambda sky: sky * PER_ANGSTROM * 10 * (1528.0 / 1538.6) ** 2,
        {"wavelength_um": 0.15386},
    ),
    "mag(AB)/arcsec2": (lambda sky: ab(sky * 1e-17 * ARCSEC2_SR), {}),
    "AB mag/pixel": (lambda sky: ab(sky * 1e-17 * tan_areas_sr()), {}),
    "counts/s": (lambda sky: sky * 1e-17 * tan_areas_sr() / PER_COUNT, {"zero_point": 18.82}),
    "counts": (lambda sky: sky * 1e-17 * tan_areas_sr() / PER_COUNT, {"zero_point": 18.82}),
    "counts/s/pixel": (lambda sky: sky * 1e-17 * tan_areas_sr() / PER_COUNT, {"zero_point": 18.82}),
    "counts/s/arcsec2": (lambda sky: sky * 1e-17 * ARCSEC2_SR / PER_COUNT, {"zero_point": 18.82}),
    "1e-3 counts/s": (
        lambda sky: sky * 1e-14 * tan_areas_sr() / PER_COUNT,
        {"zero_point": 18.82},
    ),
    "CPS": (
        lambda sky: sky * PER_ANGSTROM * tan_areas_sr() / 1.40e-15,
        {"counts": "1.40e-15 erg/s/cm2/A"},
    ),
    "ADU": (lambda sky: sky * 1e6 * tan_areas_sr() / 2e-6, {"counts": "2 uJy"}),
    "ELECTRONS/S": (lambda sky: sky * 1e6 * tan_areas_sr() / 2e-6, {"counts": "2 uJy/pixel"}),
    "DN/s": (lambda sky: sky / 2e-3, {"counts": "2e-3 MJy/sr"}),
    "DN/pixel": (lambda sky: sky / 2e-3, {"counts": "2e-3 MJy/sr"}),
}


@pytest.mark.parametrize("unit", FUV_TWINS)
def test_fuv_twins(truth, unit) -> None:
    store, changes = FUV_TWINS[unit]
    hdu = make_hdu(store(truth), wcs=WCS, unit=None, beam_arcsec=BEAM)
    sky = read_map(hdu, tracer="FUV", unit=unit, noise=stated("FUV", 0.5), **changes)
    assert_maps_close(sky.value, truth, rtol=1e-6)
    # A noise stated as an intensity is that intensity, whatever the map is stored in.
    np.testing.assert_allclose(sky.error, 0.5, rtol=1e-9)


@pytest.mark.parametrize("unit", [unit for unit in FUV_TWINS if "mag" not in unit])
def test_noise_in_the_unit_of_the_map_is_converted_like_the_map(truth, unit) -> None:
    store, changes = FUV_TWINS[unit]
    hdu = make_hdu(store(truth), wcs=WCS, unit=None, beam_arcsec=BEAM)
    for noise in (
        NoiseRequest("file", file=Path("noise.fits")),
        NoiseRequest("file", file=Path("noise.fits"), stated="variance"),
    ):
        power = 1 if noise.stated == "sigma" else 2
        noise_hdu = make_hdu(store(0.1 * truth) ** power, wcs=WCS, unit=None)
        sky = read_map(hdu, noise_hdu=noise_hdu, tracer="FUV", unit=unit, noise=noise, **changes)
        assert_maps_close(sky.error, 0.1 * truth, rtol=1e-6)


# One Rayleigh: 1e6 / (4 pi) photons/s/cm2/sr (Hunten, Roach & Chamberlain 1956, from memory), of
# 6562.8 Angstrom.
RAYLEIGH = 1e6 / (4 * math.pi) * H_ERG_S * C_CM_S / 6562.8e-8
HALPHA_TWINS: dict[str, Any] = {
    "erg/s/cm2/sr": 1.0,
    "erg s-1 cm-2 sr-1": 1.0,
    "erg/s/cm2/arcsec2": ARCSEC2_SR,
    "1e-17 erg/s/cm2/arcsec2": 1e17 * ARCSEC2_SR,
    "10^-17 erg/s/cm^2/arcsec^2": 1e17 * ARCSEC2_SR,
    "W/m2/sr": 1e-3,
    "Rayleigh": 1 / RAYLEIGH,
    "R": 1 / RAYLEIGH,
    "0.1 Rayleigh": 10 / RAYLEIGH,
    "erg/s/cm2/pixel": tan_areas_sr,
    "erg/s/cm2/beam": BEAM_SR,
    # Photons of 6562.8 Angstrom.
    "ph/s/cm2/sr": 6562.8e-8 / (H_ERG_S * C_CM_S),
}


def test_halpha_in_counts(truth) -> None:
    hdu = twin(truth * tan_areas_sr() / 3e-17, "ELECTRONS/S")
    sky = read_map(hdu, tracer="Halpha", counts="3e-17 erg/s/cm2")
    assert_maps_close(sky.value, truth, rtol=1e-6)


@pytest.mark.parametrize("unit", HALPHA_TWINS)
def test_halpha_twins(truth, unit) -> None:
    hdu = twin(truth * 1e-6 * stored(HALPHA_TWINS[unit]), unit)
    assert_maps_close(read_map(hdu, tracer="Halpha").value, truth * 1e-6, rtol=1e-6)


@pytest.mark.parametrize("unit", ["Jy/beam km/s", "Jy/beam m/s"])
def test_a_typed_unit_overrides_the_card(truth, unit) -> None:
    scale = JY_PER_K * (1e3 if "m/s" in unit and "km" not in unit else 1.0)
    hdu = twin(truth * scale, "cm-2")
    assert_maps_close(read_map(hdu, unit=unit, velocity_kms=VELOCITY).value, truth, rtol=1e-6)


# --- Units that are refused --------------------------------------------------------------------


@pytest.mark.parametrize("tracer", ["HI", "CO(2-1)", "24um", "FUV", "Halpha"])
@pytest.mark.parametrize("card", [None, "", "   ", 3.0, True])
def test_no_unit_is_refused(tracer, card) -> None:
    hdu = make_hdu(np.ones(SHAPE), unit=None)
    if card is not None:
        hdu.header["BUNIT"] = card
    with pytest.raises(UnitError, match=r"maps\.probe.*no unit.*unit = \.\.\.") as caught:
        open_source(hdu, tracer=tracer, velocity_kms=VELOCITY)
    # The readings that would fit are listed.
    assert examples(TRACERS[tracer]) in str(caught.value)


NO_SOLID_ANGLE = "a flux without a solid angle"
NO_VELOCITY = "not integrated over velocity"
NO_LINE = "not integrated over a line"


@pytest.mark.parametrize(
    ("tracer", "unit", "says"),
    [
        # Words that nobody can read, or that have two meanings.
        *(
            (tracer, word, "cannot be read")
            for tracer in ("HI", "24um")
            for word in ("flux", "arbitrary", "MJY", "MJY/BEAM", "Jy//beam", "(Jy")
        ),
        # Readable, but another quantity.
        ("HI", "K", NO_VELOCITY),
        ("CO(1-0)", "mK", NO_VELOCITY),
        ("HI", "counts", "what one ct is worth"),
        ("HI", "Jy/beam", NO_LINE),  # a channel
        ("HI", "M_sol pc^-2", "a surface density"),
        ("HI", "MJy/sr", NO_LINE),
        ("HI", "Jy km/s", NO_SOLID_ANGLE),
        ("HI", "km/s", "not an intensity"),
        ("HI", "Rayleigh", "not an intensity"),
        ("CO(2-1)", "cm-2", "read for HI only"),  # a column of what?
        ("CO(2-1)", "Jy", NO_SOLID_ANGLE),
        ("CO(2-1)", "Msun/pc2", "a surface density"),
        ("24um", "Jy", NO_SOLID_ANGLE),
        ("24um", "10.0*nanoJansky", NO_SOLID_ANGLE),
        ("24um", "Jy/beam/pixel", "not an intensity"),
        ("24um", "Jy/beam2", "not an intensity"),
        ("24um", "K km/s", "not an intensity"),
        ("24um", "K", NO_VELOCITY),
        ("24um", "DN", "what one DN is worth"),
        ("24um", "W/m2", NO_SOLID_ANGLE),
        ("24um", "W/m2/sr", "integrated over frequency"),
        ("24um", "Msun/yr/kpc2", "not an intensity"),
        ("24um", "1", "not an intensity"),
        ("FUV", "erg/s/cm2/A", NO_SOLID_ANGLE),
        ("FUV", "counts/s", "what one ct is worth"),
        ("FUV", "ADU", "what one adu is worth"),
        ("FUV", "ELECTRONS/S", "what one electron is worth"),
        ("FUV", "mag", "an unsaid system"),
        # AB and Vega differ by about 2 mag in the ultraviolet (from memory).
        ("FUV", "mag/arcsec2", "an unsaid system"),
        ("FUV", "mag(AB)", "not an intensity"),
        ("Halpha", "M_sol pc^-2", "a surface density"),
        ("Halpha", "erg/s/cm2", NO_SOLID_ANGLE),
        ("Halpha", "MJy/sr", NO_LINE),
        ("Halpha", "erg/s/cm2/A/arcsec2", NO_LINE),
        ("Halpha", "mag(AB)/arcsec2", NO_LINE),
    ],
)
@pytest.mark.parametrize("typed", [False, True], ids=["card", "typed"])
def test_a_wrong_kind_of_unit_is_refused(tracer, unit, says, typed) -> None:
    hdu = make_hdu(np.ones(SHAPE), unit=None if typed else unit)
    changes = {"unit": unit} if typed else {}
    with pytest.raises(UnitError, match=r"maps\.probe") as caught:
        open_source(hdu, tracer=tracer, velocity_kms=VELOCITY, **changes)
    message = str(caught.value)
    assert repr(unit) in message
    assert ("recipe" if typed else "header BUNIT") in message
    assert says in message
    # What would fit, and the key to type.
    assert examples(TRACERS[tracer]) in message
    assert "maps.probe.unit = ..." in message


@pytest.mark.parametrize("tracer", ["HI", "CO(1-0)", "24um", "FUV", "Halpha"])
def test_the_examples_in_messages_are_accepted(tracer) -> None:
    for unit in examples(TRACERS[tracer]).split(", "):
        assert factor(unit.strip("'"), tracer, velocity_kms=VELOCITY) > 0


COUNTS = "1.40e-15 erg/s/cm2/A"


@pytest.mark.parametrize("unit", ["counts", "counts/s", "DN", "ADU/s", "electron"])
def test_counts_ask_for_their_worth(unit) -> None:
    with pytest.raises(UnitError) as caught:
        factor(unit, "FUV")
    for key in ("maps.probe.counts = ", "maps.probe.zero_point = ", "maps.probe.unit = "):
        assert key in str(caught.value)


@pytest.mark.parametrize(
    ("unit", "tracer", "changes", "says"),
    [
        ("counts/s", "FUV", {"counts": COUNTS, "zero_point": 18.82}, "both say what one ct is"),
        ("MJy/sr", "FUV", {"counts": COUNTS}, r"maps\.probe\.counts.*counts nothing"),
        ("MJy/sr", "FUV", {"zero_point": 18.82}, r"maps\.probe\.zero_point.*counts nothing"),
        ("mag(AB)/arcsec2", "FUV", {"zero_point": 18.82}, "counts nothing"),
        ("counts/s", "FUV", {"counts": "1.40e-15"}, r"maps\.probe\.counts.*cannot be read"),
        ("counts/s", "FUV", {"counts": "erg/s/cm2/A"}, r"maps\.probe\.counts.*cannot be read"),
        ("counts/s", "FUV", {"counts": "0 erg/s/cm2/A"}, r"maps\.probe\.counts.*cannot be read"),
        ("counts/s", "FUV", {"counts": "inf erg/s/cm2/A"}, r"maps\.probe\.counts.*cannot be read"),
        ("counts/s", "FUV", {"counts": "1 mag(AB)"}, r"maps\.probe\.counts.*cannot be read"),
        ("counts/s", "FUV", {"counts": "1 foo"}, r'maps\.probe\.counts.*"foo" is not a known unit'),
        # Worth another quantity than the tracer's, or a solid angle twice.
        ("counts/s", "FUV", {"counts": "1 K km/s"}, r"not an intensity of FUV.*1 K km/s"),
        ("counts/s", "FUV", {"counts": "1 W/m2"}, "integrated over frequency.*1 W/m2"),
        ("counts/s/arcsec2", "FUV", {"counts": "1 MJy/sr"}, "not an intensity of FUV"),
        ("counts/s2", "FUV", {"counts": COUNTS}, "not an intensity of FUV"),
        ("counts2", "FUV", {"counts": COUNTS}, "not an intensity of FUV"),
        # A magnitude is no line intensity, whatever the filter.
        ("counts/s", "Halpha", {"zero_point": 20.0}, "not integrated over a line"),
        ("counts/s", "HI", {"zero_point": 20.0}, "not integrated over a line"),
    ],
)
def test_a_wrong_worth_of_counts_is_refused(unit, tracer, changes, says) -> None:
    with pytest.raises(UnitError, match=says):
        factor(unit, tracer, velocity_kms=VELOCITY, **changes)


@pytest.mark.parametrize(
    ("key", "typed", "unit"),
    [
        ("counts", "1.40e-15 erg/s/cm2/A", "counts/s"),
        ("counts", "2 uJy", "DN"),
        ("zero_point", "18.82 mag", "counts/s"),
        ("wavelength", "1538.6 Angstrom", "erg/s/cm2/A/arcsec2"),
    ],
)
def test_the_keys_of_a_recipe_reach_the_door(key, typed, unit) -> None:
    table = {"tracer": "FUV", "file": "map.fits", "noise": "0.1 MJy/sr", "unit": unit}
    request = MapTable.model_validate(table | {key: typed}).request("probe")
    given = {"counts": request.counts, "zero_point": request.zero_point}
    got = factor(unit, "FUV", wavelength_um=request.wavelength_um, **given)
    direct = {
        "counts": {"counts": typed},
        "zero_point": {"zero_point": 18.82},
        "wavelength": {"wavelength_um": 0.15386},
    }
    assert got == pytest.approx(factor(unit, "FUV", **direct[key]), rel=1e-12)


@pytest.mark.parametrize(
    ("key", "typed"),
    [
        ("counts", "measure"),
        ("counts", "1.40e-15"),
        ("counts", 1.4e-15),
        ("counts", "-1 uJy"),
        ("counts", "1 foo"),
        ("pedestal_error", "measure"),
        ("zero_point", 18.82),
        ("zero_point", "18.82 Jy"),
        ("wavelength", "-1 um"),
    ],
)
def test_a_recipe_is_told_that_a_worth_needs_number_and_unit(key, typed) -> None:
    table = {"tracer": "FUV", "file": "map.fits", "noise": "measure", key: typed}
    with pytest.raises(ValidationError, match="expected"):
        MapTable.model_validate(table)


# --- Magnitudes --------------------------------------------------------------------------------

IN_FILE = NoiseRequest("file", file=Path("noise.fits"))


@pytest.mark.parametrize(
    ("unit", "changes"),
    [
        ("mag(AB)/arcsec2", {"noise": NoiseRequest("value", value=0.1)}),
        ("mag(AB)/arcsec2", {"noise": NoiseRequest("measure")}),
        ("mag(AB)/arcsec2", {"noise": IN_FILE}),
        ("mag(AB)/arcsec2", {"noise": NoiseRequest("value", 0.1, "MJy/sr", gain=3.0)}),
        ("MJy/sr", {"noise": NoiseRequest("value", 0.1, "mag(AB)/arcsec2")}),
        ("MJy/sr", {"noise": IN_FILE, "noise_unit": "mag(AB)/arcsec2"}),
    ],
)
def test_noise_in_magnitudes_is_refused(unit, changes) -> None:
    noise_hdu = make_hdu(np.ones(SHAPE), unit=changes.pop("noise_unit", None))
    hdu = make_hdu(np.full(SHAPE, 25.0), unit=unit)
    with pytest.raises(UnitError, match=r'maps\.probe\.noise.*maps\.probe\.noise = ".*MJy/sr"'):
        open_source(hdu, noise_hdu=noise_hdu, tracer="FUV", **changes)


def test_a_zero_level_in_magnitudes_is_refused() -> None:
    with pytest.raises(UnitError, match=r"maps\.probe\.pedestal_error.*magnitudes"):
        factor("MJy/sr", "FUV", pedestal_error=(27.0, "mag(AB)/arcsec2"))


def test_a_noise_map_beside_magnitudes_may_be_an_intensity() -> None:
    hdu, noise_hdu = (
        make_hdu(np.full(SHAPE, 25.0), unit="mag(AB)/arcsec2"),
        make_hdu(np.full(SHAPE, 2.0), unit="kJy/sr"),
    )
    sky = read_map(hdu, noise_hdu=noise_hdu, tracer="FUV", noise=IN_FILE)
    np.testing.assert_allclose(sky.error, 2e-3, rtol=1e-12)


def test_blank_magnitudes_stay_blank() -> None:
    data = np.full(SHAPE, 25.0)
    data[0, 0], data[1, 1], data[2, 2] = np.nan, -1e30, np.inf
    sky = read_map(make_hdu(data, unit="AB mag/arcsec2"), tracer="FUV", noise=stated("FUV"))
    assert np.isnan(sky.value[[0, 1, 2], [0, 1, 2]]).all()
    assert np.isfinite(sky.value).sum() == data.size - 3
    # Magnitude zero would be a star; one pixel of it asks what it means.
    data[3, 3] = 0.0
    hdu = make_hdu(data, unit="AB mag/arcsec2")
    with pytest.raises(MapError, match=r'exactly zero.*maps\.probe\.zeros = "blank"'):
        read_map(hdu, tracer="FUV", noise=stated("FUV"))
    assert np.isnan(read_map(hdu, tracer="FUV", noise=stated("FUV"), zeros="blank").value[3, 3])


# --- What is told ------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("unit", "tracer", "changes", "words"),
    [
        ("JY/BEAM*M/S", "HI", {}, ("'Jy m / (beam s)'", "K km/s", "beam of", "GHz", "optical")),
        ("erg/s/cm2/A/pixel", "FUV", {}, ("1528 Angstrom", "Martin et al. 2005", "pixel of")),
        (
            "erg/s/cm2/A/pixel",
            "FUV",
            {"wavelength_um": 0.15386},
            ("1538.6 Angstrom", "recipe wavelength"),
        ),
        (
            "counts/s",
            "FUV",
            {"counts": COUNTS},
            (f"1 ct/s of a pixel is {COUNTS}", "recipe counts"),
        ),
        ("DN", "FUV", {"counts": "2 MJy/sr"}, ("1 DN is 2 MJy/sr", "recipe counts")),
        ("counts/s", "FUV", {"zero_point": 18.82}, ("AB magnitude 18.82", "recipe zero_point")),
        ("mag(AB)/arcsec2", "FUV", {}, ("'mag(AB / arcsec2)'", "magnitude 0 = ", "MJy/sr")),
        ("cm-2", "HI", {}, ("1.823e+18", "optically thin")),
    ],
)
def test_the_history_says_what_was_read_and_why(unit, tracer, changes, words) -> None:
    hdu = twin(np.ones(SHAPE), unit)
    sky = read_map(hdu, tracer=tracer, velocity_kms=VELOCITY, noise=stated(tracer), **changes)
    (told,) = [line for line in sky.history if line.startswith(f"unit {unit!r} from header BUNIT")]
    assert all(word in told for word in words)
    assert sky.facts["unit"] == told


def test_the_history_says_how_another_unit_of_the_noise_was_read() -> None:
    hdu = twin(np.ones(SHAPE), "K km/s")
    noise = NoiseRequest("value", 2.0, "mJy/beam km/s")
    (told,) = [
        line
        for line in read_map(hdu, velocity_kms=VELOCITY, noise=noise).history
        if line.startswith("noise")
    ]
    for word in ("unit 'mJy/beam km/s' from recipe", "Rayleigh-Jeans", "beam of"):
        assert word in told


def test_a_unit_typed_for_the_map_holds_for_a_noise_map_with_the_same_wrong_card() -> None:
    hdu, noise_hdu = (make_hdu(np.full(SHAPE, v), unit="M_sol pc^-2") for v in (3.0, 0.5))
    changes = {"tracer": "24um", "unit": "kJy/sr", "noise": IN_FILE}
    sky = read_map(hdu, noise_hdu=noise_hdu, **changes)
    np.testing.assert_allclose(sky.error, 0.5e-3, rtol=1e-12)
    # Another card is another unit, and is read.
    sky = read_map(hdu, noise_hdu=make_hdu(np.full(SHAPE, 0.5), unit="MJy/sr"), **changes)
    np.testing.assert_allclose(sky.error, 0.5, rtol=1e-12)


def test_noise_of_the_wrong_kind_names_its_own_key() -> None:
    with pytest.raises(UnitError, match=r"^\[maps\.probe\.noise\].*type maps\.probe\.noise = "):
        factor("MJy/sr", "24um", noise=NoiseRequest("value", 1.0, "Jy"))
