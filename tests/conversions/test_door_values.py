"""From stored units to canonical intensities: published factors.

Codes such as C110 number the worked check values of the project's reference sheet; five printed
digits are worth 5e-5.
"""

import math

import pytest

from kspipe.core.constants import HI_COLUMN_PER_K_KMS
from kspipe.core.errors import UnitError
from kspipe.core.tracers import TRACERS
from kspipe.maps.intensity import Door, open_door, read_stored_unit

GAUSSIAN = math.pi / (4 * math.log(2))  # solid angle of a Gaussian over bmaj bmin, 1.13309
FIVE_DIGITS = 5e-5


def door(
    unit: str,
    tracer: str,
    *,
    beam: tuple[float, float] | None = None,
    pixel_arcsec: float = 2.0,
    frequency_ghz: float | None = None,
) -> Door:
    kind = TRACERS[tracer]
    return open_door(
        read_stored_unit(unit, None, kind, "maps.test"),
        kind,
        frequency_ghz=frequency_ghz or kind.frequency_ghz,
        beam_area_arcsec2=GAUSSIAN * beam[0] * beam[1] if beam else None,
        pixel_area_arcsec2=pixel_arcsec**2,
        where="maps.test",
    )


@pytest.mark.parametrize(
    ("tracer", "beam", "kelvin"),
    [
        # T = 1.222e6 S / (nu_GHz^2 bmaj bmin), Rayleigh-Jeans (common practice).
        pytest.param("HI", (10, 10), 6057.4, id="C110"),
        pytest.param("CO(1-0)", (6, 5), 3.0659, id="C111"),
        pytest.param("CO(2-1)", (1.5, 1.5), 10.220, id="C112"),
    ],
)
def test_jansky_per_beam_in_kelvin(tracer: str, beam: tuple[float, float], kelvin: float) -> None:
    factor = door("Jy/beam km/s", tracer, beam=beam).factor
    assert factor == pytest.approx(kelvin, rel=FIVE_DIGITS)
    # C109: the coefficient by itself.
    nu = TRACERS[tracer].frequency_ghz
    assert factor * nu**2 * beam[0] * beam[1] == pytest.approx(1.2221e6, rel=FIVE_DIGITS)
    # The same stored number in m/s is a thousandth, in mJy again.
    assert door("JY/BEAM*M/S", tracer, beam=beam).factor == pytest.approx(factor / 1e3, rel=1e-12)
    assert door("mJy/beam m/s", tracer, beam=beam).factor == pytest.approx(factor / 1e6, rel=1e-12)


def test_the_observed_frequency_counts() -> None:
    # At 3000 km/s (optical) the rest frequency would be 2 percent off: (1 + z)^2.
    nu, z = TRACERS["CO(2-1)"].frequency_ghz, 3000 / 299792.458
    rest = door("Jy/beam km/s", "CO(2-1)", beam=(5, 5)).factor
    seen = door("Jy/beam km/s", "CO(2-1)", beam=(5, 5), frequency_ghz=nu / (1 + z)).factor
    assert seen / rest == pytest.approx((1 + z) ** 2, rel=1e-12)


def test_hi_column_of_a_jansky_per_beam() -> None:
    # C113: 1 Jy/beam km/s in a round 10" beam is 1.1043e22 H per cm2.
    factor = door("Jy/beam km/s", "HI", beam=(10, 10)).factor
    assert factor * HI_COLUMN_PER_K_KMS == pytest.approx(1.1043e22, rel=FIVE_DIGITS)


def test_a_stored_column_is_the_intensity_it_came_from() -> None:
    # C102: 100 K km/s is 1.8230e20 per cm2, N = 1.823e18 I (optically thin).
    assert 1.8230e20 * door("cm-2", "HI").factor == pytest.approx(100.0, rel=FIVE_DIGITS)
    with pytest.raises(UnitError):
        door("cm-2", "CO(1-0)")


def test_megajansky_per_steradian_in_kelvin() -> None:
    # C114: c^2 / (2 k nu^2) at 115.27 GHz.
    assert door("MJy/sr km/s", "CO(1-0)").factor == pytest.approx(0.0024496, rel=FIVE_DIGITS)


def test_flux_per_pixel_in_surface_brightness() -> None:
    # C329: 1 mJy per pixel of 1.5" is 18.909 MJy/sr.
    got = door("mJy/pixel", "24um", pixel_arcsec=1.5)
    assert got.factor == pytest.approx(18.909, rel=FIVE_DIGITS)
    assert got.per_pixel
    assert not door("MJy/sr", "24um").per_pixel
    wide = door("mJy/pixel", "24um", pixel_arcsec=6.0)
    assert got.factor / wide.factor == pytest.approx(16.0, rel=1e-12)


def test_a_rayleigh_of_halpha() -> None:
    # C330: 2.4087e-7 erg/s/cm2/sr at 6562.8 Angstrom.
    assert door("Rayleigh", "Halpha").factor == pytest.approx(2.4087e-7, rel=FIVE_DIGITS)
    assert door("0.1 Rayleigh", "Halpha").factor == pytest.approx(2.4087e-8, rel=FIVE_DIGITS)
    # 1 R is 5.66e-18 erg/s/cm2/arcsec2 (common practice; three digits).
    per_arcsec2 = door("Rayleigh", "Halpha").factor / door("erg/s/cm2/arcsec2", "Halpha").factor
    assert per_arcsec2 == pytest.approx(5.66e-18, abs=0.005e-18)


@pytest.mark.parametrize("distance_mpc", [3.0, 10.0])
def test_total_masses_and_luminosities_of_a_jansky(distance_mpc: float) -> None:
    # A beam that holds S Jy km/s covers Omega D^2: its sum must not depend on the beam.
    # HI: M = 2.356e5 D^2 S (from memory, hydrogen only; C108), four digits.
    # CO: L' = 3.25e7 S nu^-2 D^2 (Solomon & Vanden Bout 2005; from memory; C116), three digits.
    arcsec_pc = distance_mpc * 1e6 * math.pi / 648000
    for beam in ((6.0, 5.0), (40.0, 40.0)):
        area_pc2 = GAUSSIAN * beam[0] * beam[1] * arcsec_pc**2
        hi = door("Jy/beam km/s", "HI", beam=beam).factor * area_pc2
        solar_mass_pc2 = 1.98841e33 / 3.0856776e18**2
        mass = hi * HI_COLUMN_PER_K_KMS * 1.6735328e-24 / solar_mass_pc2
        assert mass / distance_mpc**2 == pytest.approx(2.356e5, abs=0.001e5)
        co = door("Jy/beam km/s", "CO(1-0)", beam=beam).factor * area_pc2
        assert co / distance_mpc**2 == pytest.approx(2.4459e7 / 100 / 100, rel=0.005 / 3.25)


@pytest.mark.parametrize(
    ("unit", "tracer"),
    [
        ("K", "CO(2-1)"),  # no velocity: a cube's plane or a peak map
        ("Jy/beam", "HI"),
        ("MJy/sr", "CO(1-0)"),
        ("K km/s", "24um"),
        ("MJy/sr", "Halpha"),
        ("erg/s/cm2/sr", "FUV"),
        ("counts", "FUV"),
        ("Rayleigh", "HI"),
        ("Jy/beam2 km/s", "HI"),
    ],
)
def test_what_is_no_intensity_of_the_tracer_is_refused(unit: str, tracer: str) -> None:
    with pytest.raises(UnitError, match=r"not an intensity of|cannot be read"):
        door(unit, tracer, beam=(10, 10))


def test_a_unit_per_beam_needs_the_beam() -> None:
    with pytest.raises(UnitError, match="needs a beam"):
        door("Jy/beam km/s", "HI")
