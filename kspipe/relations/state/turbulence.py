"""Efficiency per free-fall time where turbulence regulates: the share of gas dense enough."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Final

import numpy as np
from numpy.typing import NDArray
from scipy.special import erf

from kspipe.relations.state.mach import Mach1D, Mach3D, require_1d, require_3d

__all__ = [
    "Efficiency",
    "Forcing",
    "Threshold",
    "density_variance",
    "hennebelle_chabrier",
    "krumholz2005",
    "krumholz2005_fit",
    "krumholz_mckee",
    "multi_free_fall",
    "padoan2012",
    "padoan_nordlund",
    "single_free_fall",
]

Array = NDArray[np.float64]

# krumholz2005, also used where the fitted constants of federrath2012 would stand.
PHI_X: Final = 1.12
PHI_T: Final = 1.91
CORE_EFFICIENCY: Final = 0.5
# padoan2011: turbulent scale of the shocks over the size of the cloud.
THETA: Final = 0.35
# hennebelle2011: largest unstable scale over the size of the cloud.
Y_CUT: Final = 0.1


@dataclass(frozen=True)
class Efficiency:
    """Share of the gas that turns into stars in a free-fall time.

    Attributes
    ----------
    value : float64 array
    by_alpha, by_mach : float64 array
        Derivative with respect to the virial parameter, and to the Mach number that was given.
    """

    value: Array
    by_alpha: Array
    by_mach: Array


@dataclass(frozen=True)
class Forcing:
    """How a cloud is stirred.

    Attributes
    ----------
    b : float
        1/3 for solenoidal forcing, 1 for compressive, 0.4 for a natural mixture.
    beta : float
        Thermal over magnetic pressure; infinite without a field.
    efficiency : float
        Share of a core that ends in stars over phi_t, the ratio of the time in which gas is
        replenished to the free-fall time.
    """

    b: float = 0.4
    beta: float = math.inf
    efficiency: float = 0.5


@dataclass(frozen=True)
class Threshold:
    """Logarithm s_c of the critical over the mean density, and its logarithmic derivatives."""

    value: Array
    by_ln_alpha: Array
    by_ln_mach: Array


def density_variance(mach: Mach3D, forcing: Forcing) -> tuple[Array, Array]:
    """Variance of ln density, and its derivative by ln Mach.

    References
    ----------
    .. [1] federrath2012: s^2 = ln[1 + b^2 M^2 beta / (1 + beta)].
    """
    compression = forcing.b**2 * require_3d(mach) ** 2 / (1.0 + 1.0 / forcing.beta)
    return np.log1p(compression), 2.0 * compression / (1.0 + compression)


def krumholz_mckee(alpha_vir: Array, mach: Mach3D, forcing: Forcing) -> Threshold:
    """Critical density where the Jeans length is the sonic length.

    References
    ----------
    .. [1] federrath2012, Table 1: s_c = ln[(pi^2/5) phi_x^2 alpha M^2 / (1 + 1/beta)].
    """
    m = require_3d(mach)
    value = np.log(math.pi**2 / 5.0 * PHI_X**2 * alpha_vir * m**2 / (1.0 + 1.0 / forcing.beta))
    return Threshold(value, np.ones(()), np.full((), 2.0))


def padoan_nordlund(alpha_vir: Array, mach: Mach3D, forcing: Forcing) -> Threshold:
    """Critical density of shocked layers.

    References
    ----------
    .. [1] padoan2011; federrath2012, Table 1: s_c = ln[0.067 theta^-2 alpha M^2 f(beta)],
       f = (1 + 0.925 beta^-1.5)^(2/3) / (1 + 1/beta)^2.
    """
    m, inverse = require_3d(mach), 1.0 / forcing.beta
    magnetic = (1.0 + 0.925 * inverse**1.5) ** (2.0 / 3.0) / (1.0 + inverse) ** 2
    value = np.log(0.067 / THETA**2 * alpha_vir * m**2 * magnetic)
    return Threshold(value, np.ones(()), np.full((), 2.0))


def hennebelle_chabrier(
    alpha_vir: Array, mach: Mach3D, forcing: Forcing, *, turbulent: bool
) -> Threshold:
    """Critical density where the Jeans length is a share of the cloud.

    Parameters
    ----------
    alpha_vir : float64 array
    mach : Mach3D
    forcing : Forcing
    turbulent : bool
        Whether motions support the gas as well; the multi-free-fall variant leaves them out.

    References
    ----------
    .. [1] hennebelle2011; federrath2012, Table 1: s_c = ln[(pi^2/5) y^-2 alpha M^-2 (1 + 1/beta)
       + (pi^2/15) y^-1 alpha], y = 0.1.
    """
    m = require_3d(mach)
    thermal = math.pi**2 / 5.0 / Y_CUT**2 * alpha_vir / m**2 * (1.0 + 1.0 / forcing.beta)
    motions = math.pi**2 / 15.0 / Y_CUT * alpha_vir if turbulent else 0.0
    total = thermal + motions
    return Threshold(np.log(total), np.ones(()), -2.0 * thermal / total)


def multi_free_fall(alpha_vir: Array, mach: Mach3D, s_c: Threshold, forcing: Forcing) -> Efficiency:
    """Gas above the threshold, each density collapsing in its own free-fall time.

    References
    ----------
    .. [1] federrath2012, Table 1: (eps / (2 phi_t)) exp(3 s^2/8)
       {1 + erf[(s^2 - s_c) / (2 s^2)^0.5]}.
    """
    return _integral(alpha_vir, mach, s_c, forcing, (1.0, 2.0), (0.375, 0.0))


def single_free_fall(
    alpha_vir: Array, mach: Mach3D, s_c: Threshold, forcing: Forcing, *, at_threshold: bool = False
) -> Efficiency:
    """Gas above the threshold, all collapsing in one free-fall time.

    Parameters
    ----------
    alpha_vir : float64 array
    mach : Mach3D
    s_c : Threshold
    forcing : Forcing
    at_threshold : bool
        Whether the time is that of the critical density (padoan2011), not of the mean.

    References
    ----------
    .. [1] federrath2012, Table 1: (eps / (2 phi_t)) {1 + erf[(s^2 - 2 s_c) / (8 s^2)^0.5]}, times
       exp(s_c / 2) for the critical density.
    """
    return _integral(alpha_vir, mach, s_c, forcing, (2.0, 8.0), (0.0, 0.5 if at_threshold else 0.0))


def _integral(
    alpha_vir: Array,
    mach: Mach3D,
    s_c: Threshold,
    forcing: Forcing,
    argument: tuple[float, float],
    weight: tuple[float, float],
) -> Efficiency:
    """(eps/2) exp(p s^2 + q s_c) {1 + erf[(s^2 - k s_c) / (m s^2)^0.5]}, with derivatives."""
    s2, ds2 = density_variance(mach, forcing)
    value, by_s2, by_s_c = _collapsing_share(s2, s_c.value, argument, weight)
    half = 0.5 * forcing.efficiency
    return Efficiency(
        np.asarray(half * value),
        np.asarray(half * by_s_c * s_c.by_ln_alpha / alpha_vir),
        np.asarray(half * (by_s2 * ds2 + by_s_c * s_c.by_ln_mach) / require_3d(mach)),
    )


def _collapsing_share(
    s2: Array, s_c: Array, argument: tuple[float, float], weight: tuple[float, float]
) -> tuple[Array, Array, Array]:
    """exp(p s2 + q s_c) {1 + erf[(s2 - k s_c) / (m s2)^0.5]}; derivatives by s2 and s_c."""
    (k, m), (p, q) = argument, weight
    root = np.sqrt(m * s2)
    u = (s2 - k * s_c) / root
    growth = np.exp(p * s2 + q * s_c)
    share = growth * (1.0 + erf(u))
    bell = growth * 2.0 / math.sqrt(math.pi) * np.exp(-(u**2))
    return share, p * share + bell * (1.0 / root - 0.5 * u / s2), q * share - bell * k / root


def krumholz2005(alpha_vir: Array, mach: Mach1D) -> Efficiency:
    """Efficiency of Krumholz & McKee with a core efficiency of 0.5.

    References
    ----------
    .. [1] krumholz2005: (eps / (2 phi_t)) {1 + erf[(s^2 - 2 ln x_c) / (8 s^2)^0.5]},
       x_c = (pi^2/15) phi_x^2 alpha M^2, s^2 = ln(1 + 3 M^2/4), phi_x = 1.12, phi_t = 1.91.
    """
    m = require_1d(mach)
    compression = 0.75 * m**2
    s2, ds2 = np.log1p(compression), 2.0 * compression / (1.0 + compression)
    s_c = np.log(math.pi**2 / 15.0 * PHI_X**2 * alpha_vir * m**2)
    share, by_s2, by_s_c = _collapsing_share(s2, s_c, (2.0, 8.0), (0.0, 0.0))
    half = 0.5 * CORE_EFFICIENCY / PHI_T
    return Efficiency(
        np.asarray(half * share),
        np.asarray(half * by_s_c / alpha_vir),
        np.asarray(half * (by_s2 * ds2 + 2.0 * by_s_c) / m),
    )


def krumholz2005_fit(alpha_vir: Array, mach: Mach1D) -> Efficiency:
    """Power law through the full expression, within 6 % of it for alpha_vir 0.5 to 2.

    References
    ----------
    .. [1] krumholz2005: 0.014 (alpha / 1.3)^-0.68 (M / 100)^-0.32.
    """
    m, alpha = require_1d(mach), np.asarray(alpha_vir)
    value = np.asarray(0.014 * (alpha / 1.3) ** -0.68 * (m / 100.0) ** -0.32)
    return Efficiency(value, np.asarray(-0.68 * value / alpha), np.asarray(-0.32 * value / m))


def padoan2012(free_fall_over_dynamical: Array) -> tuple[Array, Array]:
    """Efficiency from t_ff / t_dyn, t_dyn = R / sigma_3D, and its derivative.

    References
    ----------
    .. [1] padoan2012: 0.5 exp(-1.6 t_ff / t_dyn).
    """
    value = np.asarray(0.5 * np.exp(-1.6 * np.asarray(free_fall_over_dynamical)))
    return value, np.asarray(-1.6 * value)
