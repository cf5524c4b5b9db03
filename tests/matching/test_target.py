"""The common beam: which widths are legal, and what a refusal says."""

from __future__ import annotations

import math
import re

import astropy.units as u
import numpy as np
import pytest
from helpers import SIGMA_PER_FWHM, make_hdu, make_wcs, open_source, round_beam
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from radio_beam import Beam
from radio_beam.utils import BeamError as DeconvolutionError

from kspipe.core.errors import BeamError
from kspipe.maps import MapSource
from kspipe.matching import choose_beam
from kspipe.matching.target import effective_beam, smallest_legal_fwhm

fixed = settings(derandomize=True, deadline=None, max_examples=30)


def source_with(beam, *, name="probe", pixel=2.0, averages=False) -> MapSource:
    hdu = make_hdu(np.ones((61, 61)), wcs=make_wcs((61, 61), pixel), beam_arcsec=beam)
    return open_source(hdu, averages_pixels=averages, name=name)


def legal_fwhm(message: str) -> float:
    found = re.search(r'grid\.beam = "([\d.]+) arcsec"', message)
    assert found
    return float(found[1])


@fixed
@given(
    major=st.floats(5.0, 30.0),
    ratio=st.floats(0.3, 1.0),
    pa=st.floats(0, 180),
    target=st.floats(4, 40),
)
def test_legal_targets_are_those_that_can_be_deconvolved(major, ratio, pa, target) -> None:
    # radio_beam as the reference: a target is legal where the map's beam comes out of it.
    assume(abs(target / major - 1) > 0.01)
    beam = Beam(major * u.arcsec, ratio * major * u.arcsec, pa * u.deg)
    try:
        Beam(target * u.arcsec).deconvolve(beam)
        is_legal = True
    except DeconvolutionError:
        is_legal = False
    assert is_legal == (target > major)
    source = source_with((major, ratio * major, pa), pixel=1.2)
    if is_legal:
        np.testing.assert_allclose(choose_beam([source], target), round_beam(target), rtol=1e-9)
    else:
        with pytest.raises(BeamError):
            choose_beam([source], target)


def test_a_refusal_names_the_map_and_the_smallest_legal_beam() -> None:
    sources = [
        source_with((13.4, 10.6, 35.0), name="hi"),
        source_with((11.5, 11.5, 0.0), name="co"),
        source_with((6.0, 6.0, 0.0), name="ir"),
    ]
    with pytest.raises(BeamError, match=r"maps\.hi.*map\.fits") as caught:
        choose_beam(sources, 11.0)
    message = str(caught.value)
    assert "maps.co" in message
    assert "maps.ir" not in message
    assert "13.4" in message
    assert "header BMAJ" in message
    # What it says to type is legal, and a hundredth less is not.
    smallest = legal_fwhm(message)
    assert smallest == pytest.approx(13.4, abs=0.0101)
    choose_beam(sources, smallest)
    with pytest.raises(BeamError):
        choose_beam(sources, smallest - 0.011)


@pytest.mark.parametrize("beam", [(12.0, 12.0, 0.0), (13.37, 9.1, 77.0)])
def test_the_smallest_is_the_major_axis(beam) -> None:
    source = source_with(beam)
    assert smallest_legal_fwhm(source) == pytest.approx(beam[0], abs=0.0101)
    assert smallest_legal_fwhm(source) >= beam[0] * (1 - 1e-9)


def test_equal_beams_are_legal() -> None:
    source = source_with((12.0, 12.0, 0.0))
    np.testing.assert_allclose(choose_beam([source], 12.0), round_beam(12.0), rtol=1e-9)


def test_the_common_beam_is_the_widest_axis_of_all() -> None:
    sources = [source_with((13.4, 10.6, 35.0)), source_with((11.5, 11.5, 0.0))]
    common = choose_beam(sources, None)
    np.testing.assert_allclose(common, round_beam(13.4), rtol=2e-3)
    np.testing.assert_array_equal(common, choose_beam(sources[::-1], None))


def test_detector_pixels_widen_the_beam() -> None:
    # A box of side p has the variance p^2 / 12 on each axis: a Gaussian of FWHM^2 = 8 ln 2 p^2/12.
    pixel = 5.0
    source = source_with((10.0, 10.0, 0.0), pixel=pixel, averages=True)
    widened = math.hypot(10.0, pixel / math.sqrt(12) / SIGMA_PER_FWHM)
    np.testing.assert_allclose(effective_beam(source), round_beam(widened), rtol=1e-4)
    assert smallest_legal_fwhm(source) == pytest.approx(widened, abs=0.011)
    with pytest.raises(BeamError, match="plus its pixels") as caught:
        choose_beam([source], 10.5)
    assert legal_fwhm(str(caught.value)) == pytest.approx(widened, abs=0.011)
