"""Published relations that predict the molecular fraction or the star-formation rate."""

from kspipe.relations import shielding  # noqa: F401 - fills the shelf
from kspipe.relations.law import LAWS, Law, Parameter, Prediction
from kspipe.relations.tracks import track

__all__ = ["LAWS", "Law", "Parameter", "Prediction", "track"]
