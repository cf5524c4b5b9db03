"""Every map to one beam on one grid: a map goes in, a map comes out."""

from kspipe.matching.grid import Grid
from kspipe.matching.match import match_map
from kspipe.matching.noise import measure_noise, measure_noise_correlation
from kspipe.matching.target import choose_beam

__all__ = ["Grid", "choose_beam", "match_map", "measure_noise", "measure_noise_correlation"]
