"""Physical constants as plain floats, each with unit in its name and its source beside it."""

from __future__ import annotations

import math
from typing import Final

# CODATA 2018 and SI 2019 exact values, https://physics.nist.gov/cuu/Constants
C_CM_S: Final = 2.99792458e10
C_KM_S: Final = 2.99792458e5
K_ERG_K: Final = 1.380649e-16
H_ERG_S: Final = 6.62607015e-27
G_CGS: Final = 6.67430e-8

# Mass of the hydrogen atom: CODATA 2018 proton and electron masses less 13.6 eV.
M_H_G: Final = 1.6735328e-24
# Nominal solar mass: IAU 2015 Resolution B3 (GM_sun) over CODATA 2018 G.
M_SUN_G: Final = 1.98841e33
# Parsec: IAU 2015 Resolution B2.
PC_CM: Final = 3.0856775814913673e18
MSUN_PC2_IN_G_CM2: Final = M_SUN_G / PC_CM**2

ARCSEC_RAD: Final = math.pi / 648000.0
ARCSEC2_SR: Final = ARCSEC_RAD**2
DEG_ARCSEC: Final = 3600.0

# FWHM = sqrt(8 ln 2) sigma for a Gaussian; its solid angle is pi FWHM^2 / (4 ln 2).
FWHM_PER_SIGMA: Final = math.sqrt(8.0 * math.log(2.0))

# 1 Jy = 1e-23 erg/s/cm2/Hz (definition).
JY_CGS: Final = 1e-23

# One Rayleigh is 1e6/(4 pi) photons/s/cm2/sr (Hunten, Roach & Chamberlain 1956, J. Atmos. Terr.
# Phys. 8, 345; source from memory).
RAYLEIGH_PHOTONS_S_CM2_SR: Final = 1e6 / (4.0 * math.pi)
# H-alpha in air: 6562.8 Angstrom (common practice).
HALPHA_CM: Final = 6562.8e-8

# Helium and metals by mass relative to hydrogen: the convention of the project for every total.
HELIUM_FACTOR: Final = 1.36

# 12 + log10(O/H) of the Sun: Asplund et al. 2009, ARA&A 47, 481.
OH_SOLAR: Final = 8.69

# H atoms per cm2 for 1 K km/s of optically thin 21 cm emission: (4/3) 8 pi k nu^2 / (h c^3 A10)
# gives 1.8224e18 with A10 = 2.869e-15 /s; the observational papers use 1.823e18. The literature
# spans 1.813 to 1.823e18 (0.6 %), after the A10 adopted.
HI_COLUMN_PER_K_KMS: Final = 1.823e18
