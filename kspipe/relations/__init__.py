"""Published relations that predict the molecular fraction or the star-formation rate."""

from kspipe.relations import (  # noqa: F401 - fill the shelf
    empirical,
    equilibrium,
    hydrostatic,
    photodissociation,
    pressure,
    shielding,
    simulations,
)
from kspipe.relations.hydrostatic import SOLAR_SFR_MSUN_YR_KPC2
from kspipe.relations.inputs import LAW_INPUTS, LawInput
from kspipe.relations.law import LAWS, Direction, Law, Outcome, Prediction
from kspipe.relations.parameters import Parameter
from kspipe.relations.tracks import Track, track, tracks

__all__ = [
    "LAWS",
    "LAW_INPUTS",
    "SOLAR_SFR_MSUN_YR_KPC2",
    "Direction",
    "Law",
    "LawInput",
    "Outcome",
    "Parameter",
    "Prediction",
    "Track",
    "track",
    "tracks",
]
