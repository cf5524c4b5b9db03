"""Maps: what they are, and how they come from and go to FITS files."""

from kspipe.maps.skymap import CommonError, NoiseTerm, SkyMap
from kspipe.maps.source import MapRequest, MapSource, NoiseRequest

__all__ = ["CommonError", "MapRequest", "MapSource", "NoiseRequest", "NoiseTerm", "SkyMap"]
