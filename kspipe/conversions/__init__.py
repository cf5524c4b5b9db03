"""Published conversions from intensity to surface density, one record each."""

from kspipe.conversions import (  # noqa: F401 - fill the shelves
    alpha_co_density,
    alpha_co_metallicity,
    star_formation_hybrid,
    star_formation_single,
)
from kspipe.conversions.alpha_co import ALPHA_CO, AlphaCO
from kspipe.conversions.atomic import ATOMIC, AtomicGas
from kspipe.conversions.balmer import BALMER, Balmer
from kspipe.conversions.choices import Choices, Parameters
from kspipe.conversions.convert import Converted, convert
from kspipe.conversions.extinction import EXTINCTION, Extinction
from kspipe.conversions.field import Field, combine
from kspipe.conversions.finished import FINISHED, FINISHED_SFR, Finished, finished_factor
from kspipe.conversions.gas_to_dust import (
    CIRCULARITY,
    GAS_TO_DUST,
    GasToDust,
    JointFit,
    fit_alpha_co_and_gas_to_dust,
)
from kspipe.conversions.imf import IMFS, Imf, imf_factor
from kspipe.conversions.inputs import INPUTS, Input
from kspipe.conversions.line_ratio import LINE_RATIO, LineRatio
from kspipe.conversions.mass_metallicity import MASS_METALLICITY, MassMetallicity
from kspipe.conversions.mass_to_light import MASS_TO_LIGHT, MassToLight
from kspipe.conversions.metallicity import oh_from_gradient, z_prime
from kspipe.conversions.midplane import midplane_density_msun_pc3, scale_height_from_length
from kspipe.conversions.nitrogen import NITROGEN, Nitrogen
from kspipe.conversions.oh_scales import OH_SCALES, USUAL_SHIFT_DEX, scale_shift_dex
from kspipe.conversions.own import GIVEN_ALPHA_CO, OwnForm, own_record
from kspipe.conversions.record import Range, Record
from kspipe.conversions.shifts import Shifts, parameter_shifts
from kspipe.conversions.solar import SOLAR_ANCHORS, anchor_shift_dex, oh_of_z_prime
from kspipe.conversions.star_formation import STAR_FORMATION, StarFormation
from kspipe.conversions.stars import STARS, Stars
from kspipe.conversions.strong_lines import STRONG_LINES, StrongLine
from kspipe.conversions.surface import Ratio, Surface, bend_errors, carry_noise, make_surface
from kspipe.conversions.total_infrared import TOTAL_INFRARED, TotalInfrared

__all__ = [
    "ALPHA_CO",
    "ATOMIC",
    "BALMER",
    "CIRCULARITY",
    "EXTINCTION",
    "FINISHED",
    "FINISHED_SFR",
    "GAS_TO_DUST",
    "GIVEN_ALPHA_CO",
    "IMFS",
    "INPUTS",
    "LINE_RATIO",
    "MASS_METALLICITY",
    "MASS_TO_LIGHT",
    "NITROGEN",
    "OH_SCALES",
    "SOLAR_ANCHORS",
    "STARS",
    "STAR_FORMATION",
    "STRONG_LINES",
    "TOTAL_INFRARED",
    "USUAL_SHIFT_DEX",
    "AlphaCO",
    "AtomicGas",
    "Balmer",
    "Choices",
    "Converted",
    "Extinction",
    "Field",
    "Finished",
    "GasToDust",
    "Imf",
    "Input",
    "JointFit",
    "LineRatio",
    "MassMetallicity",
    "MassToLight",
    "Nitrogen",
    "OwnForm",
    "Parameters",
    "Range",
    "Ratio",
    "Record",
    "Shifts",
    "StarFormation",
    "Stars",
    "StrongLine",
    "Surface",
    "TotalInfrared",
    "anchor_shift_dex",
    "bend_errors",
    "carry_noise",
    "combine",
    "convert",
    "finished_factor",
    "fit_alpha_co_and_gas_to_dust",
    "imf_factor",
    "make_surface",
    "midplane_density_msun_pc3",
    "oh_from_gradient",
    "oh_of_z_prime",
    "own_record",
    "parameter_shifts",
    "scale_height_from_length",
    "scale_shift_dex",
    "z_prime",
]
