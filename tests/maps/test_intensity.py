"""The door: every stored unit of one sky gives one canonical intensity.

Codes such as C110 number the worked check values of the project's reference sheet.
"""

from __future__ import annotations

import math
from typing import Any

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from helpers import ARCSEC2_SR, C_KM_S, assert_maps_close, make_hdu, make_wcs, open_source, read_map

from kspipe.core.errors import GridError, UnitError
from kspipe.core.tracers import TRACERS
from kspipe.maps.intensity import examples, open_door, read_stored_unit

# SI and CODATA 2018 exact values, kept apart from the constants of kspipe on purpose.
C_CM_S, K_ERG_K, H_ERG_S = 2.99792458e10, 1.380649e-16, 6.62607015e-27
NU_HI_GHZ = 1.420405751768
SHAPE = (40, 50)


def kelvin_per_jy_beam(ghz: float, major: float, minor: float) -> float:
    """T = c^2 / (2 k nu^2) S / Omega with Omega = pi / (4 ln 2) bmaj bmin (Rayleigh-Jeans)."""
    omega = math.pi / (4 * math.log(2)) * major * minor * ARCSEC2_SR
    return C_CM_S**2 / (2 * K_ERG_K * (ghz * 1e9) ** 2) * 1e-23 / omega


def factor(unit: str, tracer: str, *, beam: Any = 8.0, **changes: Any) -> float:
    """Canonical intensity of one stored unit."""
    hdu = make_hdu(np.ones(SHAPE), unit=unit, beam_arcsec=beam, pixel_arcsec=0.5)
    return open_source(hdu, tracer=tracer, **changes).door.factor


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
}


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


@pytest.mark.parametrize(
    ("tracer", "unit"),
    [
        # Words that nobody can read, or that have two meanings.
        *((t, w) for t in ("HI", "24um") for w in ("flux", "arbitrary", "MJY", "Jy//beam", "(Jy")),
        # Readable, but another quantity.
        ("HI", "K"),
        ("HI", "counts"),
        ("HI", "Jy/beam"),  # a channel, not an integral over velocity
        ("HI", "M_sol pc^-2"),
        ("HI", "MJy/sr"),
        ("CO(2-1)", "cm-2"),  # a column of what?
        ("CO(2-1)", "Jy"),
        ("24um", "Jy"),
        ("24um", "K km/s"),
        ("24um", "DN"),
        ("24um", "W/m2"),
        ("FUV", "erg/s/cm2/A"),
        ("FUV", "counts/s"),
        ("FUV", "mag"),
        ("Halpha", "M_sol pc^-2"),
        ("Halpha", "erg/s/cm2"),
        ("Halpha", "MJy/sr"),
    ],
)
@pytest.mark.parametrize("typed", [False, True], ids=["card", "typed"])
def test_a_wrong_kind_of_unit_is_refused(tracer, unit, typed) -> None:
    hdu = make_hdu(np.ones(SHAPE), unit=None if typed else unit)
    changes = {"unit": unit} if typed else {}
    with pytest.raises(UnitError, match=r"maps\.probe") as caught:
        open_source(hdu, tracer=tracer, velocity_kms=VELOCITY, **changes)
    message = str(caught.value)
    assert repr(unit) in message
    assert ("recipe" if typed else "header BUNIT") in message
    assert examples(TRACERS[tracer]) in message


@pytest.mark.parametrize("tracer", ["HI", "CO(1-0)", "24um", "FUV", "Halpha"])
def test_the_examples_in_messages_are_accepted(tracer) -> None:
    for unit in examples(TRACERS[tracer]).split(", "):
        assert factor(unit.strip("'"), tracer, velocity_kms=VELOCITY) > 0


def test_a_flux_per_wavelength_per_area_is_no_intensity_per_frequency() -> None:
    # erg/s/cm2/A/arcsec2 would need a wavelength: never converted silently.
    with pytest.raises(UnitError):
        factor("erg/s/cm2/A/arcsec2", "FUV")


def test_the_reason_says_what_was_read() -> None:
    source = open_source(twin(np.ones(SHAPE), "JY/BEAM*M/S"), velocity_kms=VELOCITY)
    for word in ("'JY/BEAM*M/S'", "header BUNIT", "K km/s", "beam of", "GHz", "optical"):
        assert word in source.door.reason
