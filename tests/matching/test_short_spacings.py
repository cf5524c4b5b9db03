"""Short spacings: conversions against astropy, and the words and numbers for each statement."""

from __future__ import annotations

import math

import astropy.units as u
import numpy as np
import pytest
from astropy.io import fits
from helpers import make_hdu, make_request, open_source

from kspipe.core.errors import MapError
from kspipe.matching.short_spacings import (
    Total,
    judge_short_spacings,
    jy_per_k_sr,
    read_total,
)

# 640 km/s, optical convention: nu = nu0 / (1 + v/c).
NU_HI_GHZ = 1.420405751768 / (1 + 640.0 / 299792.458)
KPC_PER_ARCSEC = 0.0417
IN_640 = {"velocity_kms": 640.0, "velocity_convention": "optical"}


def source_of(**changes):
    return open_source(make_hdu(np.ones((40, 50))), **changes)


def judged(ratio: float | None = None, **changes):
    """A map with 100 Jy km/s against a total of 100 / ratio."""
    request = make_request(**changes)
    if ratio is None:
        return judge_short_spacings(request, None, math.nan, math.nan)
    total = Total(100.0 / ratio, NU_HI_GHZ, f"{100 / ratio:g} Jy km/s")
    per = jy_per_k_sr(NU_HI_GHZ)
    return judge_short_spacings(request, total, 100.0 / per, 2.0 / per)


@pytest.mark.parametrize("frequency_ghz", [NU_HI_GHZ, 115.0, 230.0])
def test_rayleigh_jeans_as_astropy_has_it(frequency_ghz) -> None:
    kelvin = u.brightness_temperature(frequency_ghz * u.GHz)
    expected = (1 * u.K).to_value(u.Jy / u.sr, kelvin)
    assert jy_per_k_sr(frequency_ghz) == pytest.approx(expected, rel=1e-6)


def test_a_kelvin_in_a_beam_is_the_radio_astronomers_number() -> None:
    # T[K] = 1.222e6 S[Jy/beam] / (nu_GHz^2 bmaj bmin) (common practice).
    beam_sr = math.pi / (4 * math.log(2)) * 13.4 * 10.6 * math.radians(1 / 3600) ** 2
    jansky = jy_per_k_sr(1.417) * beam_sr
    assert jansky == pytest.approx(1.417**2 * 13.4 * 10.6 / 1.222e6, rel=1e-3)


def test_totals_are_read_in_flux_and_in_temperature() -> None:
    jansky = read_total(source_of(total_flux="230 Jy km/s"), **IN_640)
    assert jansky.jy_kms == pytest.approx(230.0)
    assert jansky.frequency_ghz == pytest.approx(NU_HI_GHZ, rel=1e-9)
    assert read_total(source_of(total_flux="2.3e5 Jy m/s"), **IN_640).jy_kms == pytest.approx(230)
    kelvin = 230.0 / jy_per_k_sr(NU_HI_GHZ) * (180 / math.pi * 3600) ** 2
    again = read_total(source_of(total_flux=f"{kelvin!r} K km/s arcsec2"), **IN_640)
    assert again.jy_kms == pytest.approx(230.0)
    assert read_total(source_of(), **IN_640) is None


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"total_flux": "230 Jy"}, "not the flux of a line"),
        ({"total_flux": "230 jellybeans"}, "cannot be read"),
        ({"tracer": "24um", "total_flux": "230 Jy km/s"}, "24um is not mapped by interferometers"),
        ({"tracer": "FUV", "short_spacings": "no"}, "maps.probe.short_spacings"),
        ({"tracer": "FUV", "largest_scale_arcsec": 60.0}, "maps.probe.largest_scale"),
    ],
)
def test_what_cannot_be_is_refused(changes, words) -> None:
    unit = "K km/s" if changes.get("tracer") is None else "MJy/sr"
    source = open_source(make_hdu(np.ones((40, 50)), unit=unit), **changes)
    with pytest.raises(MapError, match=words):
        read_total(source, **IN_640)


def test_without_velocity_the_header_must_tell_the_frequency() -> None:
    unknown = {"velocity_kms": None, "velocity_convention": "optical"}
    with pytest.raises(MapError, match=r"galaxy\.velocity"):
        read_total(source_of(total_flux="230 Jy km/s"), **unknown)
    hdu = make_hdu(np.ones((40, 50)))
    hdu = fits.PrimaryHDU(hdu.data[None], hdu.header)
    hdu.header.update({"CTYPE3": "FREQ", "CRVAL3": 1.4174e9, "CDELT3": 1e4, "CRPIX3": 1.0})
    total = read_total(open_source(hdu, total_flux="230 Jy km/s"), **unknown)
    assert total.frequency_ghz == pytest.approx(1.4174)


def test_not_stated_is_a_line_and_no_warning() -> None:
    found = judged()
    assert found.text(KPC_PER_ARCSEC) == "short spacings not stated"
    assert found.warning(KPC_PER_ARCSEC) == ""
    assert found.as_plain(KPC_PER_ARCSEC)["systematic"] is None
    assert judged(tracer="24um") is None


@pytest.mark.parametrize("stated", ["no", "unknown"])
def test_open_short_spacings_warn_with_scale_and_a_one_sided_systematic(stated) -> None:
    found = judged(short_spacings=stated, largest_scale_arcsec=246.0)
    warning = found.warning(KPC_PER_ARCSEC)
    assert "largest scale 246 arcsec = 10.3 kpc" in warning
    assert "10 to 50 %, scale dependent (common practice)" in warning
    plain = found.as_plain(KPC_PER_ARCSEC)
    assert plain["largest_scale_kpc"] == pytest.approx(246 * KPC_PER_ARCSEC)
    systematic = plain["systematic"]
    assert (systematic["least_fraction"], systematic["largest_fraction"]) == (0.1, 0.5)
    assert "not lower" in systematic["direction"]
    unknown_scale = judged(short_spacings=stated)
    assert "largest scale unknown" in unknown_scale.warning(KPC_PER_ARCSEC)


def test_a_total_sets_the_systematic() -> None:
    # 100 Jy km/s of 125: the flux may be higher by 25 %.
    found = judged(0.8, short_spacings="no")
    assert found.missing == pytest.approx((0.0, 0.25))
    assert "by up to 25%" in found.warning(KPC_PER_ARCSEC)
    assert found.as_plain(KPC_PER_ARCSEC)["map_over_total"] == pytest.approx(0.8)
    assert found.flux_error_jy_kms == pytest.approx(2.0)
    # A map above its total misses nothing.
    assert judged(1.1, short_spacings="unknown").missing == (0.0, 0.0)


@pytest.mark.parametrize(
    ("ratio", "warns"), [(0.84, True), (0.86, False), (1.14, False), (1.16, True)]
)
def test_with_short_spacings_only_a_real_difference_warns(ratio, warns) -> None:
    found = judged(ratio, short_spacings="yes")
    assert bool(found.warning(KPC_PER_ARCSEC)) is warns
    assert f"= {ratio:.3g}" in found.text(KPC_PER_ARCSEC)
    assert found.missing is None
