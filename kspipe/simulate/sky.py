"""A disc of gas and young stars on a plane much finer than any map."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from kspipe.kernels.geometry import disc_radius
from kspipe.simulate.blur import blur

__all__ = ["DiscModel", "FinePlane", "PaintedDisc", "paint_disc"]

Array = NDArray[np.float64]
# Sigma_SFR [Msun/yr/kpc2] of Sigma_gas [Msun/pc2] and 12 + log10(O/H).
SfrLaw = Callable[[Array, Array], Array]


@dataclass(frozen=True)
class FinePlane:
    """A square plane of pixels around the galaxy's centre, east to the right, north up.

    Attributes
    ----------
    pixel_arcsec : float
    n : int
        Pixels along a side, odd.
    """

    pixel_arcsec: float
    n: int

    @classmethod
    def around(cls, half_arcsec: float, pixel_arcsec: float) -> FinePlane:
        """Reach at least so far on each side of the centre."""
        return cls(pixel_arcsec, 2 * math.ceil(half_arcsec / pixel_arcsec) + 1)

    def offsets_arcsec(self) -> tuple[Array, Array]:
        """East and north of the centre, (n, n)."""
        along = (np.arange(self.n) - self.n // 2) * self.pixel_arcsec
        east, north = np.meshgrid(along, along)
        return east, north

    def pixels_of(self, east_arcsec: Array, north_arcsec: Array) -> tuple[Array, Array]:
        """Pixel positions (x, y) of offsets."""
        return (
            east_arcsec / self.pixel_arcsec + self.n // 2,
            north_arcsec / self.pixel_arcsec + self.n // 2,
        )


@dataclass(frozen=True)
class DiscModel:
    """A thin exponential disc with clumps.

    Attributes
    ----------
    inclination_deg, pa_deg : float
        How it is tilted.
    kpc_per_arcsec : float
    mol_centre_msun_pc2, mol_scale_kpc : float
        Molecular gas with helium, face-on: at the centre, and its exponential scale.
    atom_msun_pc2, atom_radius_kpc : float
        Atomic gas: its level, and the radius at which it has fallen by e (it falls as a Gaussian).
    star_centre_msun_pc2, star_scale_kpc : float
        Old stars.
    clump_dex, clump_kpc : float
        Standard deviation of log10 of the gas about its profile, and its FWHM of correlation.
    scatter_dex, scatter_kpc : float
        The same of star formation about the law.
    """

    inclination_deg: float
    pa_deg: float
    kpc_per_arcsec: float
    mol_scale_kpc: float
    atom_radius_kpc: float
    star_scale_kpc: float
    clump_kpc: float
    scatter_kpc: float
    mol_centre_msun_pc2: float = 80.0
    atom_msun_pc2: float = 8.0
    star_centre_msun_pc2: float = 500.0
    clump_dex: float = 0.25
    scatter_dex: float = 0.2


@dataclass(frozen=True)
class PaintedDisc:
    """What was painted, face-on, on the pixels of the plane; (n, n) each.

    Attributes
    ----------
    sigma_atom, sigma_mol, sigma_star : float64 array
        [Msun/pc2], gas with helium.
    sigma_sfr : float64 array
        [Msun/yr/kpc2].
    oh : float64 array
        12 + log10(O/H).
    radius_kpc : float64 array
        In the disc.
    """

    sigma_atom: Array
    sigma_mol: Array
    sigma_star: Array
    sigma_sfr: Array
    oh: Array
    radius_kpc: Array


def paint_disc(
    model: DiscModel,
    plane: FinePlane,
    oh_at: Callable[[Array], Array],
    law: SfrLaw,
    rng: np.random.Generator,
) -> PaintedDisc:
    """Paint gas, and the stars that a law makes of it, pixel by pixel of the plane.

    Parameters
    ----------
    model : DiscModel
    plane : FinePlane
    oh_at : callable
        12 + log10(O/H) of the radius [kpc].
    law : callable
        Median Sigma_SFR of Sigma_gas and 12 + log10(O/H).
    rng : numpy.random.Generator

    Notes
    -----
    Where the law gives no value (no gas) no stars form. The field of clumps is log-normal with
    the mean kept: 10^(s g - s^2 ln 10 / 2). The scatter about the law keeps its median.
    """
    east, north = plane.offsets_arcsec()
    radius = model.kpc_per_arcsec * disc_radius(
        east, north, inclination_deg=model.inclination_deg, pa_deg=model.pa_deg
    )
    oh = oh_at(radius)
    mean_kept = 0.5 * model.clump_dex**2 * math.log(10.0)
    clumps = 10.0 ** (model.clump_dex * _field(model, plane, model.clump_kpc, rng) - mean_kept)
    atomic = 0.3 * model.clump_dex
    clouds = 10.0 ** (
        atomic * _field(model, plane, model.clump_kpc, rng) - 0.5 * atomic**2 * math.log(10.0)
    )
    mol = model.mol_centre_msun_pc2 * np.exp(-radius / model.mol_scale_kpc) * clumps
    atom = model.atom_msun_pc2 * np.exp(-((radius / model.atom_radius_kpc) ** 2)) * clouds
    star = model.star_centre_msun_pc2 * np.exp(-radius / model.star_scale_kpc)
    scatter = 10.0 ** (model.scatter_dex * _field(model, plane, model.scatter_kpc, rng))
    with np.errstate(all="ignore"):
        sfr = law(atom + mol, oh) * scatter
    return PaintedDisc(atom, mol, star, np.where(np.isfinite(sfr), sfr, 0.0), oh, radius)


def _field(model: DiscModel, plane: FinePlane, fwhm_kpc: float, rng: np.random.Generator) -> Array:
    """Gaussian random field of unit variance, correlated over a FWHM in the plane of the sky."""
    sigma_pix = fwhm_kpc / math.sqrt(8.0 * math.log(2.0)) / model.kpc_per_arcsec
    # Noise smoothed with sigma has a correlation wider by sqrt(2).
    variance = 0.5 * (sigma_pix / plane.pixel_arcsec) ** 2
    white = rng.standard_normal((plane.n, plane.n))
    if variance < 0.1:
        return np.asarray(white)
    smooth = blur(white, variance * np.eye(2))
    return np.asarray(smooth / smooth.std())
