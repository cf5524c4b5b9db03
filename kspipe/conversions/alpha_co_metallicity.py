"""alpha_CO constant, or as a function of metallicity and of numbers of a whole galaxy."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from kspipe.conversions.alpha_co import ALPHA_CO, AlphaCO, Inputs
from kspipe.conversions.metallicity import z_prime
from kspipe.conversions.record import Range
from kspipe.core.constants import HELIUM_FACTOR

Array = NDArray[np.float64]

# Extinction through a cloud, and the part of it that CO shares with H2 alone, as wolfire2010.
CLOUD_AV = 8.0


def _galactic(inputs: Inputs) -> Array:
    return np.full(np.broadcast_shapes(*(np.shape(array) for array in inputs.values())), 4.35)


def _sun2020(inputs: Inputs) -> Array:
    return 4.35 * z_prime(inputs["oh"]) ** -1.6


def _genzel2012(inputs: Inputs) -> Array:
    return np.asarray(10.0 ** (12.0 - 1.3 * inputs["oh"]))


def _genzel2015_exponential(inputs: Inputs) -> Array:
    return np.asarray(4.36 * 0.67 * np.exp(0.36 * 10.0 ** (8.67 - inputs["oh"])))


def _genzel2015_power(inputs: Inputs) -> Array:
    return np.asarray(4.36 * 10.0 ** (-1.27 * (inputs["oh"] - 8.67)))


def _genzel2015_mean(inputs: Inputs) -> Array:
    return np.sqrt(_genzel2015_exponential(inputs) * _genzel2015_power(inputs))


def _schruba2012(inputs: Inputs) -> Array:
    return np.asarray(8.0 * 10.0 ** (-2.0 * (inputs["oh"] - 8.7)))


def _hunt2015(inputs: Inputs) -> Array:
    return np.asarray(4.35 * np.minimum(z_prime(inputs["oh"]), 1.0) ** -1.96)


def _accurso2017(inputs: Inputs) -> Array:
    return np.asarray(10.0 ** (14.752 - 1.623 * inputs["oh"] + 0.062 * inputs["ms_offset_dex"]))


def _amorin2016(inputs: Inputs) -> Array:
    return np.asarray(10.0 ** (0.68 - 1.45 * (inputs["oh"] - 8.7)))


def _wolfire2010(inputs: Inputs) -> Array:
    ln_field = np.log(inputs["g0_over_n"])
    z = z_prime(inputs["oh"])
    dark_av = 0.53 - 0.045 * ln_field - 0.097 * np.log(z)
    dark_av_solar = 0.53 - 0.045 * ln_field
    return np.asarray(4.35 * np.exp(4.0 / CLOUD_AV * (dark_av / z - dark_av_solar)))


_DISCS = (Range("Z'", 0.2, 2.0, "z_prime"),)
_DISCS_NOTE = (
    "The range is that of discs where such slopes are used (common practice), not one printed in "
    "the paper."
)

ALPHA_CO.add(
    AlphaCO(
        key="bolatto2013_galactic",
        label=r"$\alpha_{\rm CO}$ = 4.35",
        cite="bolatto2013",
        where="Section 8, the value recommended for the Milky Way",
        formula="alpha_CO = 4.35  [Msun/pc2 per K km/s], X_CO = 2e20 cm-2 per K km/s",
        certainty="verified",
        scatter_dex=0.11,
        helium_factor=HELIUM_FACTOR,
        note="+-30 % (0.11 dex) in the Milky Way disc; too high in galaxy centres, too low at low "
        "metallicity.",
        function=_galactic,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="sun2020",
        label=r"$\alpha_{\rm CO} \propto Z'^{-1.6}$",
        cite="sun2020",
        where="alpha_CO prescription of the paper (equation number not confirmed)",
        formula="alpha_CO = 4.35 Z'^-1.6  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note="Z' on the scale 12+log(O/H) = 8.69; an offset of 0.2 dex between metallicity scales "
        "is 0.32 dex in alpha_CO. The range is that of discs where such slopes are used (common "
        "practice), not one printed in the paper.",
        needs=("oh",),
        function=_sun2020,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="genzel2012",
        label="Genzel et al. 2012",
        cite="genzel2012",
        where="Eq. 7",
        formula="log10 alpha_CO = 12.0 - 1.3 OH  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note=f"5.05 at OH = 8.69. {_DISCS_NOTE}",
        needs=("oh",),
        oh_scale="Denicolo",
        function=_genzel2012,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="genzel2015_exponential",
        label="Genzel et al. 2015, exponential",
        cite="genzel2015",
        where="Eq. 6",
        formula="alpha_CO = 4.36 x 0.67 exp(0.36 x 10^-(OH - 8.67))  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note=_DISCS_NOTE,
        needs=("oh",),
        function=_genzel2015_exponential,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="genzel2015_power",
        label="Genzel et al. 2015, power law",
        cite="genzel2015",
        where="Eq. 7",
        formula="alpha_CO = 4.36 x 10^(-1.27 (OH - 8.67))  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note=_DISCS_NOTE,
        needs=("oh",),
        function=_genzel2015_power,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="genzel2015_mean",
        label="Genzel et al. 2015, mean",
        cite="genzel2015",
        where="Eq. 8",
        formula="alpha_CO = 4.36 [0.67 exp(0.36 x 10^-(OH - 8.67)) x 10^(-1.27 (OH - 8.67))]^0.5  "
        "[Msun/pc2 per K km/s]",
        certainty="from memory",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note="The geometric mean of the two other forms of the paper; that it is the geometric "
        f"one is from memory. {_DISCS_NOTE}",
        needs=("oh",),
        function=_genzel2015_mean,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="schruba2012",
        label="Schruba et al. 2012",
        cite="schruba2012",
        where="Table 7, all galaxies",
        formula="alpha_CO = 8.0 x 10^(-2.0 (OH - 8.7))  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note="From a constant molecular depletion time; the steepest of the shelf, and 8.4 at "
        f"OH = 8.69. {_DISCS_NOTE}",
        needs=("oh",),
        function=_schruba2012,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="hunt2015",
        label="Hunt et al. 2015",
        cite="hunt2015",
        where="Section 5.1",
        formula="alpha_CO = 4.35 Z'^-1.96 below Z' = 1, 4.35 above  [Msun/pc2 per K km/s]",
        certainty="verified",
        ranges=_DISCS,
        helium_factor=HELIUM_FACTOR,
        note=_DISCS_NOTE,
        needs=("oh",),
        function=_hunt2015,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="accurso2017",
        label="Accurso et al. 2017",
        cite="accurso2017",
        where="the recommended relation (equation number not confirmed)",
        formula="log10 alpha_CO = 14.752 - 1.623 OH + 0.062 log10 Delta(MS)  [Msun/pc2 per K km/s]",
        certainty="from memory",
        ranges=(Range("OH", 7.9, 8.8, "oh"),),
        helium_factor=HELIUM_FACTOR,
        note="Delta(MS) is the galaxy's specific star-formation rate over that of the main "
        "sequence; a whole galaxy has one.",
        needs=("oh", "ms_offset_dex"),
        oh_scale="PP04 O3N2",
        function=_accurso2017,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="amorin2016",
        label="Amorin et al. 2016",
        cite="amorin2016",
        where="fit to star-forming galaxies and dwarfs (equation number not confirmed)",
        formula="log10 alpha_CO = 0.68 - 1.45 (OH - 8.7)  [Msun/pc2 per K km/s]",
        certainty="from memory",
        ranges=(Range("OH", 7.6, 8.9, "oh"),),
        helium_factor=HELIUM_FACTOR,
        note="The range is that of the galaxies fitted, from memory.",
        needs=("oh",),
        function=_amorin2016,
    )
)
ALPHA_CO.add(
    AlphaCO(
        key="wolfire2010",
        label="Wolfire et al. 2010, CO-dark layer",
        cite="wolfire2010",
        where="the extinction between H2 and CO (equation number not confirmed)",
        formula="alpha_CO = 4.35 exp(4 dAv(Z') / (8 Z') - 4 dAv(1) / 8), "
        "dAv = 0.53 - 0.045 ln(G0'/n) - 0.097 ln Z'  [Msun/pc2 per K km/s]",
        certainty="from memory",
        ranges=(*_DISCS, Range("G0'/n", math.exp(-7.0), 1.0, "g0_over_n")),
        helium_factor=HELIUM_FACTOR,
        note="Gas that is molecular but dark in CO, around clouds with a mean extinction of 8 mag "
        "at Z' = 1, scaled to the Milky Way's alpha_CO; used in this form by Krumholz, Leroy & "
        "McKee 2011. Both ranges are common practice.",
        needs=("oh", "g0_over_n"),
        function=_wolfire2010,
    )
)
