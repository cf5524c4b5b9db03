"""A painted sky seen through given headers; shares no smoothing or regridding with the chain."""

from kspipe.simulate.blur import blur, sample, steps_of
from kspipe.simulate.instrument import add_noise, look, look_at
from kspipe.simulate.sky import DiscModel, FinePlane, PaintedDisc, paint_disc

__all__ = [
    "DiscModel",
    "FinePlane",
    "PaintedDisc",
    "add_noise",
    "blur",
    "look",
    "look_at",
    "paint_disc",
    "sample",
    "steps_of",
]
