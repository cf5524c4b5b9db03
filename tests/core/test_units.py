"""Unit strings as archives write them, against astropy units put together by hand."""

import astropy.units as u
import pytest

from kspipe.core.units import UnitReadingError, read_unit

JY_BEAM_KMS = u.Jy * u.km / (u.beam * u.s)
JY_BEAM_MS = u.Jy * u.m / (u.beam * u.s)
K_KMS = u.K * u.km / u.s
MJY_SR = u.MJy / u.sr
SURFACE = u.erg / u.s / u.cm**2 / u.arcsec**2

# A slash divides by the next factor only: common practice in BUNIT cards, where the velocity of
# "Jy/beam km/s" always stands in the numerator.
SPELLINGS = {
    JY_BEAM_KMS: (
        "Jy/beam km/s", "Jy/beam.km/s", "Jy/beam*km/s", "Jy/beam * km/s", "Jy beam-1 km s-1",
        "Jy beam^-1 km s^-1", "Jy beam**-1 km s**-1", "Jy km/s/beam", "Jy.km/s/beam",
        "JY/BEAM.KM/S", "JY/BEAM KM/S", "JY/B*KM/S", "jy/beam km/s", "(Jy/beam) (km/s)",
        "Jy km s-1 beam-1", "  Jy/beam km/s  ",
    ),
    JY_BEAM_MS: (
        "JY/BEAM*M/S", "JY/BEAM.M/S", "JY/B*M/S", "Jy/beam*m/s", "Jy/beam m/s", "Jy/beam m s-1",
    ),
    u.mJy * u.km / (u.beam * u.s): ("mJy/beam km/s", "mJy beam-1 km s-1"),
    K_KMS: (
        "K km/s", "K.KM/S", "K*km/s", "K km s-1", "K km s^-1", "K km s**-1", "K km s**(-1)",
        "K.km.s-1", "K.KM.S-1", "K KM/S", "(K km/s)", "K*(km/s)",
    ),
    u.mK * u.km / u.s: ("mK km/s", "mK.km.s-1"),
    u.K * u.m / u.s: ("K m/s", "K.M/S"),
    MJY_SR: (
        "MJy/sr", "MJy sr-1", "MJy.sr-1", "MJy*sr^-1", "MJy sr**-1", "MJY/SR", "MJY SR-1",
        "MJY.SR**-1",
    ),
    u.Jy / u.sr: ("Jy/sr", "JY/SR"),
    u.mJy / u.arcsec**2: ("mJy/arcsec2", "mJy/arcsec^2", "mJy arcsec**-2"),
    u.Jy / u.pix: ("Jy/pixel", "JY/PIXEL", "Jy/pix", "Jy pixel-1", "JY/PIX"),
    u.Jy / u.beam: ("Jy/beam", "JY/BEAM", "Jy/bm", "Jy beam-1"),
    SURFACE: (
        "erg/s/cm2/arcsec2", "erg/s/cm**2/arcsec**2", "erg/s/cm^2/arcsec^2",
        "erg s-1 cm-2 arcsec-2", "erg s^-1 cm^-2 arcsec^-2", "erg s**-1 cm**-2 arcsec**-2",
        "ERG/S/CM2/ARCSEC2", "erg/(s cm2 arcsec2)", "erg/(s.cm2.arcsec2)",
        "erg/(s cm**2 arcsec**2)", "erg/(s cm^2 arcsec^2)", "(erg/s)/cm2/arcsec2",
    ),
    1e-17 * SURFACE: (
        "1e-17 erg/s/cm2/arcsec2", "1E-17 erg/s/cm2/arcsec2", "1.0e-17 erg/s/cm^2/arcsec^2",
        "10**-17 erg/s/cm2/arcsec2", "10**(-17) erg/s/cm2/arcsec2",
        "10^-17 erg s^-1 cm^-2 arcsec^-2", "10^(-17) erg s-1 cm-2 arcsec-2",
        "10**-17*erg/s/cm**2/arcsec**2",
        "(10**-17) erg/s/cm2/arcsec2",
    ),
    u.erg / u.s / u.cm**2 / u.sr: ("erg/s/cm2/sr", "erg s-1 cm-2 sr-1", "ERG/S/CM2/SR"),
    u.R: ("Rayleigh", "R", "rayleigh", "RAYLEIGH", "Rayleighs"),
    0.1 * u.R: ("0.1 Rayleigh", "0.1 R", "dR", ".1 Rayleigh", "1e-1 Rayleigh"),
    u.cm**-2: ("cm-2", "cm^-2", "cm**-2", "1/cm2", "1/cm^2", "CM-2"),
    1e20 * u.cm**-2: ("1e20 cm-2", "10^20 cm^-2", "10**20 cm**-2"),
    u.Msun / u.pc**2: ("M_sol pc^-2", "Msun/pc2", "Msun pc-2", "solMass/pc2", "M_sun pc**-2"),
}  # fmt: skip


@pytest.mark.parametrize(
    ("text", "expected"), [(text, unit) for unit, texts in SPELLINGS.items() for text in texts]
)
def test_a_spelling_is_read_as_its_unit(text: str, expected: u.UnitBase | u.Quantity) -> None:
    # Rounding of a product of at most five scales.
    assert read_unit(text).to(u.Unit(expected)) == pytest.approx(1.0, rel=1e-14)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"),
        ("   ", "empty"),
        ("counts per second", "per"),
        ("Jy/baem km/s", '"baem" is not a known unit'),
        ("arbitrary", '"arbitrary" is not a known unit'),
        ("MJY/BEAM", "milli or mega"),
        ("MJY/BEAM KM/S", "milli or mega"),
        ("MK KM/S", "milli or mega"),
        ("K km/", "ends with a slash"),
        ("Jy/beam km//s", "two slashes"),
        ("(K km/s", "bracket"),
        ("K km/s)", "bracket"),
        ("erg/(s cm2", "bracket"),
        ("K km s^(-1", ""),
        # What a bracket closes must have been opened before it; nothing may be dropped silently.
        ("erg/s/cm2)/(arcsec2", "bracket"),
        # Powers that are not whole numbers of one word have no place in an intensity.
        ("cm^2.5", ""),
        ("(erg/s)**2", ""),
        ("K - km/s", "cannot be read"),
        ("[K km/s]", "cannot be read"),
        ("0 K km/s", ""),
    ],
)
def test_what_cannot_be_read_in_one_way_is_refused(text: str, says: str) -> None:
    with pytest.raises(UnitReadingError) as caught:
        read_unit(text)
    assert says in str(caught.value)


def test_capitals_are_read_only_where_they_have_one_meaning() -> None:
    # "MJY" is mega only per steradian, where milli is never used (common practice).
    assert read_unit("MJY/SR").to(MJY_SR) == pytest.approx(1.0, rel=1e-14)
    assert read_unit("mJy/sr").to(MJY_SR) == pytest.approx(1e-9, rel=1e-14)
    with pytest.raises(UnitReadingError):
        read_unit("MJY")
