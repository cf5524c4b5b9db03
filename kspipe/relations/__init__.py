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
from kspipe.relations.inputs import LAW_INPUTS, LawInput
from kspipe.relations.law import LAWS, Direction, Law, Outcome, Prediction
from kspipe.relations.parameters import Parameter
from kspipe.relations.tracks import track

__all__ = [
    "LAWS",
    "LAW_INPUTS",
    "Direction",
    "Law",
    "LawInput",
    "Outcome",
    "Parameter",
    "Prediction",
    "track",
]
