"""Painted galaxies for the fits: a law with scatter at the final beam, seen faintly.

Nothing here uses kspipe's smoothing: the sky is made with scipy's own Gaussian filter.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import gaussian_filter

from kspipe.comparison.phases import Phase
from kspipe.comparison.samples import LinearSamples

PIXELS_PER_BEAM = 6.0
SIGMA_PIX = PIXELS_PER_BEAM / 2.3548200450309493
N_PIXELS = 144
CENTRE = ((N_PIXELS - 1) / 2, (N_PIXELS - 1) / 2)
PIVOT, LEVEL = 1.2, -2.2


@dataclass(frozen=True)
class MockGalaxy:
    """Maps of 144 x 144 pixels, 6 of them in a beam."""

    true_gas: np.ndarray
    true_mol: np.ndarray
    true_sfr: np.ndarray
    gas: np.ndarray
    sfr: np.ndarray
    gas_error: np.ndarray
    sfr_error: np.ndarray
    mol: np.ndarray
    mol_error: float
    radius: np.ndarray


def beam_noise(rng: np.random.Generator, n: int = N_PIXELS) -> np.ndarray:
    """Unit noise with the correlation of the beam, exp(-d^2 / 4 sigma^2)."""
    field = gaussian_filter(rng.normal(size=(n, n)), SIGMA_PIX, mode="wrap", truncate=6.0)
    return field * 2.0 * np.sqrt(np.pi) * SIGMA_PIX


def paint(
    rng: np.random.Generator, slope: float, scatter_dex: float, level: float = LEVEL
) -> MockGalaxy:
    """A disc with half its pixels below S/N 3 in CO and in star formation, no CO in a third.

    log10 Sigma_SFR = level + slope (log10 Sigma_gas - 1.2) + scatter, painted at the final beam.
    """
    y, x = np.indices((N_PIXELS, N_PIXELS))
    radius = np.hypot(x - CENTRE[0], y - CENTRE[1]) / (N_PIXELS / 8)
    structure = 10 ** (0.2 * beam_noise(rng))
    bright = 120.0 * np.exp(-radius) * structure
    mol = np.maximum(bright - np.quantile(bright, 1.0 / 3.0), 0.0)
    atom = 8.0 * np.exp(-radius / 4.0) * 10 ** (0.1 * beam_noise(rng))
    gas = atom + mol
    log_sfr = level + slope * (np.log10(gas) - PIVOT) + scatter_dex * beam_noise(rng)
    sfr = 10**log_sfr
    sfr_error, mol_error, atom_error = np.median(sfr) / 3.0, np.median(mol) / 3.0, 0.5
    co_noise = mol_error * beam_noise(rng)
    return MockGalaxy(
        true_gas=gas,
        true_mol=mol,
        true_sfr=sfr,
        gas=gas + co_noise + atom_error * beam_noise(rng),
        sfr=sfr + sfr_error * beam_noise(rng),
        gas_error=np.full(gas.shape, np.hypot(mol_error, atom_error)),
        sfr_error=np.full(gas.shape, sfr_error),
        mol=mol + co_noise,
        mol_error=float(mol_error),
        radius=radius,
    )


def samples_of(galaxy: MockGalaxy, mask: np.ndarray) -> LinearSamples:
    """Pixels of a lattice; gas and star formation share no noise."""
    return LinearSamples(
        galaxy.gas[mask],
        galaxy.sfr[mask],
        galaxy.gas_error[mask] ** 2,
        galaxy.sfr_error[mask] ** 2,
        np.zeros(int(mask.sum())),
    )


def phase_of(galaxy: MockGalaxy, mask: np.ndarray) -> Phase:
    """The same with positions."""
    y, x = np.nonzero(mask)
    return Phase(samples_of(galaxy, mask), np.stack([x, y], axis=1).astype(float))


def clouds(
    rng: np.random.Generator, slope: float, width_dex: float, n: int = 2_000_000
) -> tuple[np.ndarray, np.ndarray]:
    """Log-normal clouds in one beam, each forming stars by a power law."""
    gas = 10 ** (1.0 + width_dex * rng.normal(size=n))
    return gas, gas**slope
