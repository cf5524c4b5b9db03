"""Pixels, independent samples, residuals, and the numbers that sum them up."""

from kspipe.comparison.circularity import Shared, shared_with_observed
from kspipe.comparison.headline import Headline, headline
from kspipe.comparison.inversion import Inversion, invert_atomic, predict_from_atomic
from kspipe.comparison.line import LineFit, fit_line
from kspipe.comparison.residuals import Known, Residuals, predict_residuals
from kspipe.comparison.samples import LinearSamples, independent_beams, independent_samples

__all__ = [
    "Headline",
    "Inversion",
    "Known",
    "LineFit",
    "LinearSamples",
    "Residuals",
    "Shared",
    "fit_line",
    "headline",
    "independent_beams",
    "independent_samples",
    "invert_atomic",
    "predict_from_atomic",
    "predict_residuals",
    "shared_with_observed",
]
