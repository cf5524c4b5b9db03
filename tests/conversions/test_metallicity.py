"""Metallicity gradients and Z'.

C501 numbers a worked check value of the project's reference sheet.
"""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.conversions import oh_from_gradient, z_prime

fixed = settings(derandomize=True, deadline=None)


def test_z_prime() -> None:
    # Z' = 10^(OH - 8.69) with the Sun of Asplund et al. 2009.
    assert float(z_prime(8.69)) == 1.0
    assert float(z_prime(8.5)) == pytest.approx(0.64565, rel=5e-5)  # C501
    # C919: a Sun of 8.76 makes Z' smaller by 1.1749.
    assert float(z_prime(8.5) / z_prime(8.5, oh_solar=8.76)) == pytest.approx(1.1749, rel=5e-5)


def test_a_gradient() -> None:
    # -0.10 dex per R_e (Sanchez et al. 2014; from memory): alpha with slope -1.6 grows by 0.16 dex.
    radius = np.array([0.0, 1.0, 2.0])
    np.testing.assert_allclose(oh_from_gradient(radius, 8.8, -0.10), [8.8, 8.7, 8.6], rtol=1e-14)
    ratio = z_prime(oh_from_gradient(radius, 8.8, -0.10)) ** -1.6
    assert math.log10(ratio[1] / ratio[0]) == pytest.approx(0.16, rel=1e-9)


@fixed
@given(radius=st.floats(0, 100), centre=st.floats(7.5, 9.3), slope=st.floats(-0.2, 0.1))
def test_a_gradient_in_other_units_of_radius(radius: float, centre: float, slope: float) -> None:
    # dex per kpc or per r25: a radius of 10 kpc is the unit of the second.
    kpc = oh_from_gradient(np.array([radius]), centre, slope)
    r25 = oh_from_gradient(np.array([radius / 10]), centre, slope * 10)
    np.testing.assert_allclose(kpc, r25, rtol=1e-12)


def test_blanks_stay_blank() -> None:
    assert np.isnan(z_prime(oh_from_gradient(np.array([np.nan]), 8.7, -0.1)))[0]
