"""Maps: what they are, and how they come from and go to FITS files."""

from kspipe.maps.request import MapRequest, NoiseRequest
from kspipe.maps.skymap import CommonError, NoiseTerm, SkyMap
from kspipe.maps.source import MapSource

__all__ = ["CommonError", "MapRequest", "MapSource", "NoiseRequest", "NoiseTerm", "SkyMap"]
