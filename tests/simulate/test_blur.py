"""Smoothing and sampling in real space against the Gaussian written out."""

from __future__ import annotations

import ast
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from kspipe.simulate import blur, sample, steps_of
from kspipe.simulate.blur import SAMPLING_SIGMA

SIMULATE = Path(__file__).resolve().parents[2] / "kspipe" / "simulate"


def gaussian(x, y, cov):
    inverse = np.linalg.inv(cov)
    exponent = inverse[0, 0] * x**2 + 2 * inverse[0, 1] * x * y + inverse[1, 1] * y**2
    return np.exp(-0.5 * exponent) / (2 * np.pi * np.sqrt(np.linalg.det(cov)))


@settings(max_examples=60, deadline=None)
@given(major=st.floats(0.5, 20), ratio=st.floats(0.1, 1), angle=st.floats(0, 3.2))
def test_steps_add_up_to_the_covariance(major, ratio, angle):
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    cov = turn @ np.diag([major**2, (ratio * major) ** 2]) @ turn.T
    steps = steps_of(cov)
    assert all(variance >= 0 for _, variance in steps)
    total = sum(variance * np.outer(step, step) for step, variance in steps)
    np.testing.assert_allclose(total, cov, atol=1e-9 * major**2)


@pytest.mark.parametrize("cov", [[[9.0, 0.0], [0.0, 9.0]], [[30.0, 12.0], [12.0, 15.0]]])
def test_point_becomes_the_gaussian(cov):
    cov = np.array(cov)
    image = np.zeros((101, 101))
    image[50, 50] = 1.0
    y, x = np.mgrid[-50:51, -50:51]
    expected = gaussian(x, y, cov)
    np.testing.assert_allclose(blur(image, cov), expected, atol=1e-7 * expected.max())
    positions = np.random.default_rng(1).uniform(35, 65, (2, 40))
    sampled = sample(blur(image, cov), *positions)
    wider = gaussian(positions[0] - 50, positions[1] - 50, cov + SAMPLING_SIGMA**2 * np.eye(2))
    np.testing.assert_allclose(sampled, wider, atol=1e-6 * wider.max())


def test_shares_no_smoothing_with_the_chain():
    forbidden = ("kspipe.matching", "scipy.fft", "reproject")
    kernels = {f"kspipe.kernels.{name}" for name in ("fourier", "regrid", "sampled", "coarse")}
    for path in SIMULATE.glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
            names = [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            names += [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            for name in names:
                assert not name.startswith(forbidden), f"{path.name} imports {name}"
                assert name not in kernels, f"{path.name} imports {name}"


def test_flat_covariance_is_refused():
    with pytest.raises(ValueError, match="positive definite"):
        steps_of(np.array([[1.0, 1.0], [1.0, 1.0]]))
