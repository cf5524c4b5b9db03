"""Pixels, independent samples, residuals, and the numbers that sum them up."""

from kspipe.comparison.headline import Headline, headline
from kspipe.comparison.line import LineFit, fit_line
from kspipe.comparison.residuals import Residuals, predict_residuals
from kspipe.comparison.samples import LinearSamples, independent_beams, independent_samples

__all__ = [
    "Headline",
    "LineFit",
    "LinearSamples",
    "Residuals",
    "fit_line",
    "headline",
    "independent_beams",
    "independent_samples",
    "predict_residuals",
]
