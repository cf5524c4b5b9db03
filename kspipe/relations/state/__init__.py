"""State of the gas that shielding implies: depths, temperatures, fragments, motions."""

from kspipe.relations.state.bonnor_ebert import critical_sphere
from kspipe.relations.state.clouds import LINEWIDTH_SIZE
from kspipe.relations.state.conditions import Conditions
from kspipe.relations.state.jeans import LENGTHS, MASSES
from kspipe.relations.state.mach import Mach1D, Mach3D
from kspipe.relations.state.pixels import gas_state
from kspipe.relations.state.quantities import QUANTITIES, Quantity
from kspipe.relations.state.record import STATE, StateRecord
from kspipe.relations.state.traced import Traced
from kspipe.relations.state.turbulence import Forcing
from kspipe.relations.state.turbulence_models import TURBULENCE, TurbulenceModel

__all__ = [
    "LENGTHS",
    "LINEWIDTH_SIZE",
    "MASSES",
    "QUANTITIES",
    "STATE",
    "TURBULENCE",
    "Conditions",
    "Forcing",
    "Mach1D",
    "Mach3D",
    "Quantity",
    "StateRecord",
    "Traced",
    "TurbulenceModel",
    "critical_sphere",
    "gas_state",
]
