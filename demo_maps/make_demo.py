"""Paint the demonstration sky: maps of Orrinda, an invented spiral galaxy, in five tracers.

The galaxy is a sum of Gaussians laid out in its own plane: a smooth disc, two logarithmic spiral
arms, and star-forming knots strung along them. Inclined, projected and smoothed with a Gaussian
beam, a Gaussian stays a Gaussian, so the true intensity under any beam is known exactly
(`true_intensity`). The maps look at that one sky through five different instruments, each with
its own unit, projection, pixel, beam and noise (`paint`).

Running this file writes the maps beside it; the same seed gives the same bytes.
"""

import argparse
from collections.abc import Iterator
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import Literal

import numpy as np
from astropy.coordinates import SkyCoord
from astropy.io import fits
from astropy.wcs import WCS
from numpy.typing import ArrayLike, NDArray
from scipy import fft

Array = NDArray[np.float64]

# --- The galaxy --------------------------------------------------------------------------------

NAME = "Orrinda"
CENTRE_DEG = (48.1, -27.31)  # ICRS, 03h12m24.0s -27d18m36s
DISTANCE_MPC = 8.6
INCLINATION_DEG = 41.0
POSITION_ANGLE_DEG = 128.0  # of the major axis, north through east
R25_ARCMIN = 2.6
VELOCITY_KM_S = 640.0  # optical convention
OXYGEN_CENTRE = 8.75  # 12 + log10(O/H)
OXYGEN_GRADIENT_DEX_KPC = -0.045

COS_I = np.cos(np.radians(INCLINATION_DEG))
ARCSEC_PER_KPC = np.degrees(1e-3 / DISTANCE_MPC) * 3600.0

# --- From surface density to intensity ---------------------------------------------------------
# Each coefficient is surface density over intensity for a face-on disc; a disc seen at
# inclination i is brighter by 1/cos i. They only choose how bright the sky is: the intensities
# are the truth, whatever coefficients a later reduction prefers.

# Msun/pc2 per K km/s, with helium: 1.823e18 cm^-2 (optically thin 21 cm) x 1.36 m_H.
ATOM_PER_HI = 0.019868
# Msun/pc2 per K km/s, with helium: alpha_CO = 4.35 (Bolatto et al. 2013, ARA&A 51, 207) over
# CO(2-1)/CO(1-0) = 0.65 (Leroy et al. 2022, ApJ 927, 149).
MOL_PER_CO21 = 4.35 / 0.65
# Msun/yr/kpc2 per MJy/sr: Leroy et al. 2008, AJ 136, 2782, appendix D (from memory).
SFR_PER_FUV = 8.1e-2
SFR_PER_24UM = 3.2e-3
# Msun/yr/kpc2 per erg/s/cm2/sr and per MJy/sr: Leroy et al. 2012, AJ 144, 3 (from memory).
SFR_PER_HALPHA = 634.0
SFR_PER_24UM_WITH_HALPHA = 2.5e-3

DEPLETION_YR = 2.0e9  # molecular gas over star formation, median of the knots
# Outer discs form stars far more slowly than 2 Gyr; 1e11 yr: Bigiel et al. 2010, AJ 140, 1194
# (from memory).
ATOMIC_DEPLETION_YR = 8.0e10
PC2_PER_KPC2 = 1e6

# --- Units and constants -----------------------------------------------------------------------

LIGHT_SPEED_M_S = 2.99792458e8  # exact, SI
BOLTZMANN_J_K = 1.380649e-23  # exact, SI
HI_REST_HZ = 1420405751.768  # hyperfine line of hydrogen
HI_OBSERVED_HZ = HI_REST_HZ / (1.0 + 1e3 * VELOCITY_KM_S / LIGHT_SPEED_M_S)
SR_PER_ARCSEC2 = np.radians(1.0 / 3600.0) ** 2
FWHM_PER_SIGMA = np.sqrt(8.0 * np.log(2.0))

# The filter holds H-alpha and both [NII] lines: 6583 is 0.3 of H-alpha, and 6548 is 6583/3.05
# (ratio of the transition rates, from memory).
NII_6583_OVER_HALPHA = 0.3
FILTER_OVER_HALPHA = 1.0 + NII_6583_OVER_HALPHA * (1.0 + 1.0 / 3.05)


# --- Instruments -------------------------------------------------------------------------------


@dataclass(frozen=True)
class Instrument:
    """One map: what it measures, how it sees the sky, and how noisy it is.

    Attributes
    ----------
    tracer : str
        The intensity painted, as `true_intensity` calls it.
    unit : str or None
        BUNIT, or None for a file that does not say.
    per_intensity : float
        Map value per unit of true intensity.
    beam : (major, minor, position angle)
        FWHM [arcsec] and angle [deg], north through east.
    beam_in_header : bool
        Whether the file states its beam.
    axes : (longitude, latitude)
        CTYPE of the two celestial axes.
    pointing_deg : (longitude, latitude)
        Sky position of the map's centre, in the map's own frame.
    shape : (ny, nx)
        Pixels.
    pixel_arcsec : float
        Pixel size.
    rotation_deg : float
        Turn of the pixel grid on the sky.
    averaged : bool
        True for a detector, whose pixels average the sky; False for samples at points.
    sigma : float
        Noise, 1 sigma of a pixel, in the unit of the map, where it is deepest.
    pattern : {"flat", "primary beam", "scan legs"}
        How the noise varies over the map.
    correlated : bool
        True if the noise is smooth on the scale of the beam, False if it is white.
    statement : {"map", "card", "none"}
        Where the noise is stated: a second file, the card NOISE, or nowhere.
    """

    tracer: str
    unit: str | None
    per_intensity: float
    beam: tuple[float, float, float]
    beam_in_header: bool
    axes: tuple[str, str]
    pointing_deg: tuple[float, float]
    shape: tuple[int, int]
    pixel_arcsec: float
    rotation_deg: float
    averaged: bool
    sigma: float
    pattern: Literal["flat", "primary beam", "scan legs"]
    correlated: bool
    statement: Literal["map", "card", "none"]

    @property
    def beam_cov_arcsec2(self) -> Array:
        """Covariance of the beam on the east and north axes [arcsec2]."""
        return beam_cov(*self.beam)

    @property
    def pixel_cov_arcsec2(self) -> Array:
        """Covariance of a square pixel, the same however it is turned [arcsec2]."""
        return self.averaged * self.pixel_arcsec**2 / 12.0 * np.eye(2)


def beam_cov(major_arcsec: float, minor_arcsec: float, angle_deg: float) -> Array:
    """Covariance of an elliptical Gaussian beam on the east and north axes [arcsec2]."""
    angle = np.radians(angle_deg)
    along = np.array([np.sin(angle), np.cos(angle)])
    across = np.array([np.cos(angle), -np.sin(angle)])
    cov = major_arcsec**2 * np.outer(along, along) + minor_arcsec**2 * np.outer(across, across)
    return cov / FWHM_PER_SIGMA**2


def jy_beam_per_kelvin(frequency_hz: float, major_arcsec: float, minor_arcsec: float) -> float:
    """Flux density in a Gaussian beam per kelvin of Rayleigh-Jeans brightness [Jy/beam/K]."""
    # S = 2 k T nu^2/c^2 Omega, Omega = pi/(4 ln 2) bmaj bmin; 1 Jy = 1e-26 W/m2/Hz. The inverse is
    # T[K] = 1.22212e6 S[Jy/beam] / (nu_GHz^2 bmaj bmin).
    solid_angle_sr = np.pi / (4 * np.log(2)) * major_arcsec * minor_arcsec * SR_PER_ARCSEC2
    return 2e26 * BOLTZMANN_J_K * (frequency_hz / LIGHT_SPEED_M_S) ** 2 * solid_angle_sr


HI_BEAM = (13.4, 10.6, 35.0)

INSTRUMENTS: dict[str, Instrument] = {
    "hi": Instrument(
        tracer="HI",
        unit="JY/BEAM*M/S",
        per_intensity=1e3 * jy_beam_per_kelvin(HI_OBSERVED_HZ, *HI_BEAM[:2]),  # m/s per km/s
        beam=HI_BEAM,
        beam_in_header=True,
        axes=("RA---SIN", "DEC--SIN"),
        pointing_deg=(48.1065, -27.3065),
        shape=(150, 150),
        pixel_arcsec=4.0,
        rotation_deg=0.0,
        averaged=False,
        sigma=9.5,
        pattern="primary beam",
        correlated=True,
        statement="map",
    ),
    "co": Instrument(
        tracer="CO(2-1)",
        unit="K km/s",
        per_intensity=1.0,
        beam=(11.5, 11.5, 0.0),
        beam_in_header=True,
        axes=("RA---TAN", "DEC--TAN"),
        pointing_deg=(48.096, -27.3125),
        shape=(156, 162),
        pixel_arcsec=3.5,
        rotation_deg=30.0,
        averaged=False,
        sigma=0.24,
        pattern="flat",
        correlated=True,
        statement="none",
    ),
    "fuv": Instrument(
        tracer="FUV",
        unit=None,
        per_intensity=1.0,
        beam=(4.6, 4.6, 0.0),
        beam_in_header=False,
        axes=("RA---TAN", "DEC--TAN"),
        pointing_deg=(48.104, -27.3155),
        shape=(276, 280),
        pixel_arcsec=2.0,
        rotation_deg=0.0,
        averaged=True,
        sigma=5.0e-3,
        pattern="flat",
        correlated=False,
        statement="card",
    ),
    "mir24": Instrument(
        tracer="24um",
        unit="MJy/sr",
        per_intensity=1.0,
        beam=(6.4, 6.4, 0.0),
        beam_in_header=True,
        axes=("GLON-TAN", "GLAT-TAN"),
        pointing_deg=(221.525, -58.765),
        shape=(232, 228),
        pixel_arcsec=2.5,
        rotation_deg=0.0,
        averaged=True,
        sigma=0.08,
        pattern="scan legs",
        correlated=False,
        statement="map",
    ),
    "halpha": Instrument(
        tracer="Halpha",
        unit="erg/s/cm2/arcsec2",
        per_intensity=FILTER_OVER_HALPHA * SR_PER_ARCSEC2,
        beam=(2.4, 2.4, 0.0),
        beam_in_header=True,
        axes=("RA---ZEA", "DEC--ZEA"),
        pointing_deg=(48.0965, -27.307),
        shape=(274, 274),
        pixel_arcsec=2.0,
        rotation_deg=0.0,
        averaged=True,
        sigma=1.5e-17,
        pattern="flat",
        correlated=False,
        statement="card",
    ),
}

PRIMARY_BEAM_FWHM_ARCSEC = 720.0
PRIMARY_BEAM_CUT = 0.6  # nothing is kept where the primary beam is lower
CO_RAGGED_ROWS = 3
CO_RAGGED_CORNER_PIXELS = 28


# --- The sky: Gaussians in the plane of the disc -----------------------------------------------


@dataclass(frozen=True)
class Component:
    """One Gaussian of the face-on galaxy.

    Attributes
    ----------
    position_kpc : (2,) array
        Along the major axis and along the minor axis of the disc plane.
    cov_kpc2 : (2, 2) array
        Covariance on the same axes.
    atom_msun_pc2, mol_msun_pc2, sfr_msun_yr_kpc2 : float
        Peak surface densities, gas with helium.
    dust_share : float
        Fraction of the star formation seen at 24 um; the rest escapes as FUV.
    """

    position_kpc: Array
    cov_kpc2: Array
    atom_msun_pc2: float = 0.0
    mol_msun_pc2: float = 0.0
    sfr_msun_yr_kpc2: float = 0.0
    dust_share: float = 0.0


ARM_PITCH_DEG = 19.0
ARM_ANGLES_DEG = (20.0, 195.0)  # where each arm crosses 1 kpc; not quite opposite
ARM_STRENGTHS = (1.0, 0.85)
ARM_RANGE_KPC = (0.7, 8.6)
SEGMENTS_PER_ARM = 26
KNOTS_PER_ARM = 26
KNOT_RANGE_KPC = (0.9, 7.8)
SKY_SEED = 9  # of the knots; the noise has its own


def _mol_to_sfr(mol_msun_pc2: float) -> float:
    """Star formation that uses up molecular gas in the median depletion time."""
    return mol_msun_pc2 * PC2_PER_KPC2 / DEPLETION_YR


def _dust_share(radius_kpc: float) -> float:
    """Dusty in the centre, nearly bare outside, as metals and gas thin out."""
    return 0.10 + 0.80 / (1.0 + (radius_kpc / 3.6) ** 2)


def _atomic_arm(radius_kpc: float) -> float:
    """Strength of the HI arms: rising from the centre to one at 4.5 kpc, then fading."""
    return (radius_kpc / 4.5) ** 2 * np.exp(1.0 - (radius_kpc / 4.5) ** 2)


def _round_cov(sigma_kpc: float) -> Array:
    return sigma_kpc**2 * np.eye(2)


def _exponential(scale_kpc: float) -> Iterator[tuple[float, float]]:
    """Peaks and sigmas [kpc] of Gaussians that add up to exp(-r/scale)."""
    # exp(-a) = integral of exp(-t - a^2/4t) / sqrt(pi t) dt from 0 to infinity; the trapezium rule
    # in ln t converges so fast that seven Gaussians follow the profile within 1 % from 0.5 to 4
    # scale lengths. Starting at t = 0.03 rounds off the cusp, as real discs do.
    step = 0.75
    for t in 0.03 * np.exp(step * np.arange(7)):
        yield step * np.sqrt(t / np.pi) * np.exp(-t), scale_kpc * np.sqrt(2.0 * t)


def _molecular_disc() -> Iterator[Component]:
    """Lay out the smooth disc of molecular gas, its nucleus, and the stars they form."""
    disc = [(50.0 * weight, sigma_kpc) for weight, sigma_kpc in _exponential(scale_kpc=1.6)]
    nucleus = (35.0, 0.35)
    for mol, sigma_kpc in (*disc, nucleus):
        yield Component(
            position_kpc=np.zeros(2),
            cov_kpc2=_round_cov(sigma_kpc),
            mol_msun_pc2=mol,
            sfr_msun_yr_kpc2=_mol_to_sfr(mol),
            dust_share=_dust_share(sigma_kpc),
        )


def _atomic_disc() -> Iterator[Component]:
    """Lay out a broad disc with faint star formation, less a narrow one: the central hollow."""
    for atom, sigma_kpc in ((10.7, 4.5), (-6.0, 2.5)):
        yield Component(
            position_kpc=np.zeros(2),
            cov_kpc2=_round_cov(sigma_kpc),
            atom_msun_pc2=atom,
            sfr_msun_yr_kpc2=max(atom, 0.0) * PC2_PER_KPC2 / ATOMIC_DEPLETION_YR,
            dust_share=0.1,
        )


def _arm_frame(radius_kpc: float, angle_at_1kpc_deg: float) -> tuple[Array, Array]:
    """Position on an arm [kpc], and unit vectors along and across it as columns."""
    pitch = np.radians(ARM_PITCH_DEG)
    angle = np.radians(angle_at_1kpc_deg) + np.log(radius_kpc) / np.tan(pitch)
    heading = angle + np.pi / 2 - pitch
    along = np.array([np.cos(heading), np.sin(heading)])
    across = np.array([np.sin(heading), -np.cos(heading)])
    position_kpc = radius_kpc * np.array([np.cos(angle), np.sin(angle)])
    return position_kpc, np.column_stack([along, across])


def _stretched_cov(axes: Array, along_kpc: float, across_kpc: float) -> Array:
    return axes @ np.diag([along_kpc**2, across_kpc**2]) @ axes.T


def _ridge(angle_deg: float, strength: float, rng: np.random.Generator) -> Iterator[Component]:
    """Draw the ridge of an arm in overlapping dashes, narrow in CO and light, broad in HI."""
    radii_kpc = np.geomspace(*ARM_RANGE_KPC, SEGMENTS_PER_ARM)
    spacing = np.log(radii_kpc[1] / radii_kpc[0]) / np.sin(np.radians(ARM_PITCH_DEG))
    for radius_kpc in radii_kpc:
        position_kpc, axes = _arm_frame(radius_kpc, angle_deg)
        position_kpc = position_kpc + axes[:, 1] * 0.03 * radius_kpc * rng.standard_normal()
        along_kpc = 0.65 * spacing * radius_kpc
        # Dashes that overlap add up: this keeps the crest at the height asked for.
        crest = strength * spacing * radius_kpc / (np.sqrt(2.0 * np.pi) * along_kpc)
        brightness, efficiency = 10.0 ** (rng.standard_normal(2) * [0.12, 0.3])
        crest *= brightness
        mol = 70.0 * crest * np.exp(-radius_kpc / 1.8)
        yield Component(
            position_kpc,
            _stretched_cov(axes, along_kpc, across_kpc=0.12 + 0.045 * radius_kpc),
            mol_msun_pc2=mol,
            sfr_msun_yr_kpc2=_mol_to_sfr(mol) * efficiency,
            dust_share=_dust_share(radius_kpc),
        )
        yield Component(
            position_kpc,
            _stretched_cov(axes, along_kpc, across_kpc=0.25 + 0.06 * radius_kpc),
            atom_msun_pc2=3.2 * crest * _atomic_arm(radius_kpc),
        )


def _knots(angle_deg: float, strength: float, rng: np.random.Generator) -> Iterator[Component]:
    """Strew star-forming knots along an arm, each in a wider cloud of HI."""
    for radius_kpc in rng.uniform(*KNOT_RANGE_KPC, KNOTS_PER_ARM):
        position_kpc, axes = _arm_frame(radius_kpc, angle_deg)
        position_kpc = position_kpc + axes @ rng.normal(0.0, [0.1, 0.12 + 0.03 * radius_kpc])
        along_kpc, across_kpc = np.sort(rng.uniform(0.12, 0.35, 2))[::-1]
        # Off the trend by 0.25 dex in gas, and by 0.3 dex in stars per gas.
        brightness, efficiency, opacity = 10.0 ** (rng.standard_normal(3) * [0.25, 0.3, 0.08])
        mol = 66.0 * strength * brightness * np.exp(-radius_kpc / 2.3)
        yield Component(
            position_kpc,
            _stretched_cov(axes, along_kpc, across_kpc),
            mol_msun_pc2=mol,
            sfr_msun_yr_kpc2=_mol_to_sfr(mol) * efficiency,
            dust_share=min(0.95, _dust_share(radius_kpc) * opacity),
        )
        yield Component(
            position_kpc,
            _stretched_cov(axes, 2.0 * along_kpc, 2.0 * across_kpc),
            atom_msun_pc2=1.6 * np.sqrt(brightness) * _atomic_arm(radius_kpc),
        )


@cache
def components() -> tuple[Component, ...]:
    """All Gaussians of the galaxy, the same at every call."""
    rng = np.random.default_rng(SKY_SEED)
    parts = [*_molecular_disc(), *_atomic_disc()]
    for angle_deg, strength in zip(ARM_ANGLES_DEG, ARM_STRENGTHS, strict=True):
        parts += [*_ridge(angle_deg, strength, rng), *_knots(angle_deg, strength, rng)]
    return tuple(parts)


# --- The sky: intensity under any beam ---------------------------------------------------------


def _peak_intensity(part: Component, tracer: str) -> float:
    """Intensity at the peak of one component, on the inclined disc, before any beam."""
    sfr_24um = part.dust_share * part.sfr_msun_yr_kpc2
    intensity_24um = sfr_24um / SFR_PER_24UM
    match tracer:
        case "HI":
            face_on = part.atom_msun_pc2 / ATOM_PER_HI
        case "CO(2-1)":
            face_on = part.mol_msun_pc2 / MOL_PER_CO21
        case "24um":
            face_on = intensity_24um
        case "FUV":
            face_on = (part.sfr_msun_yr_kpc2 - sfr_24um) / SFR_PER_FUV
        case "Halpha":
            # What the H-alpha and 24 um sum needs to give the same star formation as FUV and 24 um.
            seen = part.sfr_msun_yr_kpc2 - SFR_PER_24UM_WITH_HALPHA * intensity_24um
            face_on = seen / SFR_PER_HALPHA
        case _:
            known = sorted({instrument.tracer for instrument in INSTRUMENTS.values()})
            raise ValueError(f"no tracer {tracer!r} on this sky; there are {', '.join(known)}")
    return face_on / COS_I


def _disc_to_sky() -> Array:
    """Matrix from the disc plane (major, minor axis) [kpc] to (east, north) [arcsec]."""
    angle = np.radians(POSITION_ANGLE_DEG)
    major = np.array([np.sin(angle), np.cos(angle)])
    minor = np.array([np.cos(angle), -np.sin(angle)]) * COS_I
    return ARCSEC_PER_KPC * np.column_stack([major, minor])


def _tangent_offsets(ra_deg: Array, dec_deg: Array) -> tuple[Array, Array]:
    """East and north offsets [arcsec] in the gnomonic plane that touches the galaxy's centre."""
    ra, dec = np.radians(ra_deg), np.radians(dec_deg)
    ra_0, dec_0 = np.radians(CENTRE_DEG)
    cos_distance = np.sin(dec_0) * np.sin(dec) + np.cos(dec_0) * np.cos(dec) * np.cos(ra - ra_0)
    east = np.cos(dec) * np.sin(ra - ra_0) / cos_distance
    north = np.cos(dec_0) * np.sin(dec) - np.sin(dec_0) * np.cos(dec) * np.cos(ra - ra_0)
    return np.degrees(east) * 3600.0, np.degrees(north / cos_distance) * 3600.0


@cache
def _on_sky(tracer: str) -> tuple[Array, Array, Array]:
    """Peaks, centres [arcsec] and covariances [arcsec2] of the projected components."""
    to_sky = _disc_to_sky()
    peaks = np.array([_peak_intensity(part, tracer) for part in components()])
    centres = np.array([to_sky @ part.position_kpc for part in components()])
    covs = np.array([to_sky @ part.cov_kpc2 @ to_sky.T for part in components()])
    seen = peaks != 0.0
    return peaks[seen], centres[seen], covs[seen]


def true_intensity(
    tracer: str, ra_deg: ArrayLike, dec_deg: ArrayLike, beam_cov_arcsec2: ArrayLike
) -> Array:
    """Return the true intensity of the sky under a Gaussian beam.

    Parameters
    ----------
    tracer : {"HI", "CO(2-1)", "FUV", "24um", "Halpha"}
        What to look at.
    ra_deg, dec_deg : array
        ICRS positions [deg], of any one shape.
    beam_cov_arcsec2 : (2, 2) array
        Covariance of the beam on the east and north axes [arcsec2]; zeros for no beam.

    Returns
    -------
    intensity : array
        In K km/s (HI, CO), MJy/sr (FUV, 24 um) or erg/s/cm2/sr (H-alpha, without [NII]).

    Raises
    ------
    ValueError
        If the sky has no such tracer.
    """
    ra, dec = np.broadcast_arrays(np.asarray(ra_deg, float), np.asarray(dec_deg, float))
    east, north = _tangent_offsets(ra.ravel(), dec.ravel())
    peaks, centres, covs = _on_sky(tracer)
    smoothed = covs + np.asarray(beam_cov_arcsec2, float)
    # The flux of a Gaussian is its peak times sqrt(det cov), and a beam keeps the flux.
    peaks = peaks * np.sqrt(np.linalg.det(covs) / np.linalg.det(smoothed))
    total = np.zeros_like(east)
    for peak, (east_0, north_0), cov in zip(peaks, centres, smoothed, strict=True):
        # Beyond seven sigmas a Gaussian is down by 2e-11: there its points are left alone.
        reach_east, reach_north = 7.0 * np.sqrt(np.diag(cov))
        near = np.abs(east - east_0) < reach_east
        near &= np.abs(north - north_0) < reach_north
        near = np.flatnonzero(near)
        x, y = east[near] - east_0, north[near] - north_0
        (a, b), (_, c) = np.linalg.inv(cov)
        total[near] += peak * np.exp(-0.5 * (a * x**2 + 2.0 * b * x * y + c * y**2))
    return total.reshape(ra.shape)


# --- The maps ----------------------------------------------------------------------------------


def _pixel_to_sky_deg(instrument: Instrument) -> Array:
    """Matrix from pixel steps (x, y) to sky steps (longitude, latitude) [deg]: the CD matrix."""
    angle = np.radians(instrument.rotation_deg)
    turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    # Longitude grows to the left.
    return turn @ np.diag([-1.0, 1.0]) * instrument.pixel_arcsec / 3600.0


def _celestial_cards(instrument: Instrument) -> Iterator[tuple]:
    ny, nx = instrument.shape
    sides = zip(instrument.axes, instrument.pointing_deg, (nx, ny), strict=True)
    for axis, (ctype, centre_deg, size) in enumerate(sides, start=1):
        yield f"CTYPE{axis}", ctype
        yield f"CRVAL{axis}", centre_deg
        yield f"CRPIX{axis}", (size + 1) / 2
        yield f"CUNIT{axis}", "deg"
    matrix = _pixel_to_sky_deg(instrument)
    if instrument.rotation_deg:
        for row, column in np.ndindex(2, 2):
            yield f"CD{row + 1}_{column + 1}", matrix[row, column]
    else:
        yield "CDELT1", matrix[0, 0]
        yield "CDELT2", matrix[1, 1]
    if instrument.axes[0].startswith("RA"):
        yield "RADESYS", "ICRS"


def _hi_cards() -> Iterator[tuple]:
    """Describe the two axes of length one, and the line."""
    yield from (("CTYPE3", "FREQ"), ("CRVAL3", HI_OBSERVED_HZ), ("CRPIX3", 1.0))
    yield from (("CDELT3", -1.9e6), ("CUNIT3", "Hz"))
    yield from (("CTYPE4", "STOKES"), ("CRVAL4", 1.0), ("CRPIX4", 1.0), ("CDELT4", 1.0))
    yield "RESTFRQ", HI_REST_HZ, "[Hz]"
    yield "SPECSYS", "BARYCENT"


def _header(stem: str) -> fits.Header:
    instrument = INSTRUMENTS[stem]
    header = fits.Header()
    header["OBJECT"] = NAME, "an invented galaxy"
    if instrument.unit:
        header["BUNIT"] = instrument.unit
    header.extend(_celestial_cards(instrument))
    if stem == "hi":
        header.extend(_hi_cards())
    if instrument.beam_in_header:
        major_arcsec, minor_arcsec, angle_deg = instrument.beam
        header["BMAJ"] = major_arcsec / 3600.0, "[deg] FWHM"
        header["BMIN"] = minor_arcsec / 3600.0, "[deg] FWHM"
        header["BPA"] = angle_deg, "[deg] north through east"
    if instrument.statement == "card":
        header["NOISE"] = instrument.sigma, "1 sigma of a pixel, unit of the map"
    return header


def _sky_positions(instrument: Instrument, wcs: WCS, shift: tuple[float, float]) -> Array:
    """ICRS positions [deg], stacked, of points `shift` (x, y) pixels from the pixel centres."""
    y, x = np.indices(instrument.shape, float)
    longitude, latitude = wcs.wcs_pix2world(x + shift[0], y + shift[1], 0)
    if instrument.axes[0].startswith("RA"):
        return np.stack([longitude, latitude])
    icrs = SkyCoord(longitude, latitude, unit="deg", frame="galactic").icrs
    return np.stack([icrs.ra.deg, icrs.dec.deg])


def _samples(instrument: Instrument) -> Iterator[tuple[float, tuple[float, float]]]:
    """Weights and shifts [pixel] of the points that stand for one pixel."""
    # Three Gauss-Legendre nodes a side: on the sharpest knot, whose sigma is a pixel, they give
    # the mean over the pixel to a few parts in a million.
    nodes, weights = np.polynomial.legendre.leggauss(3) if instrument.averaged else ([0.0], [2.0])
    for i, j in np.ndindex(len(nodes), len(nodes)):
        yield weights[i] * weights[j] / 4.0, (nodes[i] / 2.0, nodes[j] / 2.0)


@cache
def _clean_image(stem: str) -> Array:
    """Paint a map without noise, in its own unit; kept, because every noise seed needs it."""
    instrument = INSTRUMENTS[stem]
    wcs = WCS(_header(stem)).celestial
    image = np.zeros(instrument.shape)
    for weight, shift in _samples(instrument):
        ra_deg, dec_deg = _sky_positions(instrument, wcs, shift)
        image += weight * true_intensity(
            instrument.tracer, ra_deg, dec_deg, instrument.beam_cov_arcsec2
        )
    image *= instrument.per_intensity
    image.setflags(write=False)
    return image


def _primary_beam(instrument: Instrument) -> Array:
    """Response of the dish at each pixel: one at the pointing, falling outwards."""
    ny, nx = instrument.shape
    y, x = np.indices(instrument.shape, float)
    pixels = np.hypot(x - (nx - 1) / 2, y - (ny - 1) / 2)
    sigma_arcsec = PRIMARY_BEAM_FWHM_ARCSEC / FWHM_PER_SIGMA
    return np.exp(-0.5 * (pixels * instrument.pixel_arcsec / sigma_arcsec) ** 2)


def _scan_legs(instrument: Instrument) -> Array:
    """Noise relative to its lowest: deeper where legs overlap, shallower where they turn."""
    ny, nx = instrument.shape
    y, x = np.indices(instrument.shape, float)
    overlap = 1.0 + 0.2 * np.cos(2.0 * np.pi * 4.0 * (x / nx - 0.5))
    turning = 1.0 / (1.0 + np.exp(-(np.minimum(y, ny - 1 - y) - 8.0) / 4.0))
    exposure = overlap * (0.6 + 0.4 * turning)
    return np.sqrt(exposure.max() / exposure)


def _stated_sigma(instrument: Instrument) -> Array:
    """Noise of each pixel, 1 sigma, in the unit of the map."""
    match instrument.pattern:
        case "primary beam":
            return instrument.sigma / _primary_beam(instrument)
        case "scan legs":
            return instrument.sigma * _scan_legs(instrument)
        case "flat":
            return np.full(instrument.shape, instrument.sigma)


def _unit_noise(instrument: Instrument, rng: np.random.Generator) -> Array:
    """Noise of rms one: white, or white seen through the beam."""
    if not instrument.correlated:
        return rng.standard_normal(instrument.shape)
    sky_to_pixel = np.linalg.inv(_pixel_to_sky_deg(instrument) * 3600.0)
    cov_pixel2 = sky_to_pixel @ instrument.beam_cov_arcsec2 @ sky_to_pixel.T
    # The transform is periodic: the margin keeps opposite edges from sharing noise.
    margin = int(np.ceil(8.0 * np.sqrt(cov_pixel2.diagonal().max())))
    ny, nx = (fft.next_fast_len(size + margin, real=True) for size in instrument.shape)
    ky, kx = np.meshgrid(fft.fftfreq(ny), fft.rfftfreq(nx), indexing="ij")
    (a, b), (_, c) = (2.0 * np.pi) ** 2 * cov_pixel2
    transfer = np.exp(-0.5 * (a * kx**2 + 2.0 * b * kx * ky + c * ky**2))
    # The mean square of the filtered noise is the sum of squares of the kernel.
    kernel = fft.irfft2(transfer, s=(ny, nx))
    noise = fft.irfft2(fft.rfft2(rng.standard_normal((ny, nx))) * transfer, s=(ny, nx))
    height, width = instrument.shape
    return noise[:height, :width] / np.sqrt(np.sum(kernel**2))


def _is_blank(stem: str) -> NDArray[np.bool_]:
    """Pixels that were never observed."""
    instrument = INSTRUMENTS[stem]
    y, x = np.indices(instrument.shape)
    if stem == "hi":
        return _primary_beam(instrument) < PRIMARY_BEAM_CUT
    if stem == "co":
        return (y < CO_RAGGED_ROWS) | (x + y < CO_RAGGED_CORNER_PIXELS)
    return np.zeros(instrument.shape, bool)


def _hdu(stem: str, image: Array) -> fits.PrimaryHDU:
    data = np.where(_is_blank(stem), np.nan, image).astype(np.float32)
    return fits.PrimaryHDU(data[None, None] if stem == "hi" else data, _header(stem))


def paint(noise_seed: int = 1, noise: bool = True) -> dict[str, fits.PrimaryHDU]:
    """Observe the sky with every instrument.

    Parameters
    ----------
    noise_seed : int
        Seed of the noise; the sky stays the same.
    noise : bool
        False leaves the noise out of the maps, but not out of what the files say of it.

    Returns
    -------
    dict
        One HDU per file, by file stem.
    """
    hdus = {}
    for index, (stem, instrument) in enumerate(INSTRUMENTS.items()):
        sigma = _stated_sigma(instrument)
        image = _clean_image(stem)
        if noise:
            # A stream per instrument: changing one map leaves the others' noise alone.
            seeds = np.random.SeedSequence(noise_seed, spawn_key=(index,))
            image = image + sigma * _unit_noise(instrument, np.random.default_rng(seeds))
        hdus[stem] = _hdu(stem, image)
        if instrument.statement == "map":
            hdus[f"{stem}_noise"] = _hdu(stem, sigma)
    return hdus


def write(folder: str | Path, noise_seed: int = 1, noise: bool = True) -> None:
    """Write every map to `folder` as FITS, replacing what is there."""
    folder = Path(folder)
    folder.mkdir(parents=True, exist_ok=True)
    for stem, hdu in paint(noise_seed, noise).items():
        hdu.writeto(folder / f"{stem}.fits", overwrite=True)


def main() -> None:
    """Write the maps from the command line."""
    parser = argparse.ArgumentParser(description=f"Paint the maps of {NAME}, an invented galaxy.")
    parser.add_argument("--out", type=Path, default=Path(__file__).parent, help="folder to write")
    parser.add_argument("--seed", type=int, default=1, help="seed of the noise")
    parser.add_argument("--no-noise", action="store_true", help="paint the sky without noise")
    arguments = parser.parse_args()
    write(arguments.out, arguments.seed, noise=not arguments.no_noise)
    print(f"{NAME} painted in {arguments.out}")


if __name__ == "__main__":
    main()
