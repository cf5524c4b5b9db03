"""Published conversions from intensity to surface density, one record each."""

from kspipe.conversions.alpha_co import ALPHA_CO, AlphaCO
from kspipe.conversions.atomic import ATOMIC, AtomicGas
from kspipe.conversions.convert import Choices, Converted, Parameters, convert
from kspipe.conversions.extinction import EXTINCTION, Extinction
from kspipe.conversions.metallicity import oh_from_gradient, z_prime
from kspipe.conversions.star_formation import STAR_FORMATION, StarFormation
from kspipe.conversions.surface import Surface, make_surface

__all__ = [
    "ALPHA_CO",
    "ATOMIC",
    "EXTINCTION",
    "STAR_FORMATION",
    "AlphaCO",
    "AtomicGas",
    "Choices",
    "Converted",
    "Extinction",
    "Parameters",
    "StarFormation",
    "Surface",
    "convert",
    "make_surface",
    "oh_from_gradient",
    "z_prime",
]
