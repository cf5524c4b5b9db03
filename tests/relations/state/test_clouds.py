"""Linewidths, sonic lengths, virial parameters: worked values and definitions."""

import math

import numpy as np
import pytest

from kspipe.relations.state import LINEWIDTH_SIZE
from kspipe.relations.state.clouds import (
    linewidth_kms,
    sonic_length_at_pc,
    sonic_length_pc,
    virial_parameter,
)
from kspipe.relations.state.jeans import sound_speed_kms

FIVE_DIGITS = 5e-5


def test_worked_values() -> None:
    # Solomon et al. 1987 with the radius as size: 0.72 (R/pc)^0.5 (coefficients from memory).
    assert float(linewidth_kms(30.0, 0.72, 0.5)) == pytest.approx(3.9436, rel=FIVE_DIGITS)
    speed = sound_speed_kms(10.0, 2.33)
    assert float(sonic_length_pc(speed, 0.72, 0.5)) == pytest.approx(0.068301, rel=FIVE_DIGITS)
    # 5 sigma^2 R / (G M): 2 km/s, 20 pc, 1e5 Msun.
    assert float(virial_parameter(2.0, 20.0, 1e5)) == pytest.approx(0.93003, rel=FIVE_DIGITS)


@pytest.mark.parametrize("record", list(LINEWIDTH_SIZE), ids=lambda record: record.key)
def test_at_the_sonic_length_motions_are_as_fast_as_sound(record) -> None:
    size = sonic_length_pc(0.3, record.norm_kms, record.exponent)
    assert float(linewidth_kms(size, record.norm_kms, record.exponent)) == pytest.approx(0.3)
    # From the linewidth at any other size the same length follows.
    width = linewidth_kms(40.0, record.norm_kms, record.exponent)
    again = sonic_length_at_pc(0.3, width, 40.0, record.exponent)
    assert float(again) == pytest.approx(float(size), rel=1e-12)
    assert f"{record.norm_kms:g}" in record.formula or f"{record.norm_kms:.1f}" in record.formula
    assert f"{record.exponent:g}" in record.formula


def test_two_sizes_of_one_relation() -> None:
    # Solomon et al. 1987: the radius R = 1.92 S (from memory: R^2 = area / pi, S from rms sizes).
    radius, size = LINEWIDTH_SIZE.get("solomon1987"), LINEWIDTH_SIZE.get("solomon1987_size")
    assert (size.norm_kms / radius.norm_kms) ** 2 == pytest.approx(1.92, rel=0.02)


def test_virial_parameter_of_a_virialised_sphere() -> None:
    # 2 K = -W with K = (3/2) M sigma^2 and W = -(3/5) G M^2 / R is alpha = 1.
    g, m, r = 4.30092e-3, 3e5, 25.0
    sigma = math.sqrt(g * m / (5 * r))
    assert float(virial_parameter(np.array(sigma), r, m)) == pytest.approx(1.0, rel=1e-5)
