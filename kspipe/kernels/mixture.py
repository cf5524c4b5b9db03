"""A sum of Gaussians as the population of a latent quantity, with its derivatives."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.special import logsumexp

__all__ = ["GaussianMixture"]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class GaussianMixture:
    """Density sum_k w_k N(means_k, widths_k).

    Its free parameters, in this order, are the logits of all weights but the last (relative to
    it), the means, and p of the widths hypot(`least_width`, exp(p)).

    Attributes
    ----------
    weights, means, widths : (k,) float64 array
    least_width : float
        Below the narrowest of the widths; keeps a component from closing in on one point.
    """

    weights: Array
    means: Array
    widths: Array
    least_width: float = 0.0

    @property
    def size(self) -> int:
        """Number of components."""
        return int(self.means.size)

    @classmethod
    def from_parameters(cls, parameters: Array, least_width: float = 0.0) -> GaussianMixture:
        """Read a mixture off its 3 k - 1 free parameters."""
        k = (parameters.size + 1) // 3
        logits = np.append(parameters[: k - 1], 0.0)
        return cls(
            np.exp(logits - logsumexp(logits)),
            parameters[k - 1 : 2 * k - 1],
            np.hypot(least_width, np.exp(parameters[2 * k - 1 :])),
            least_width,
        )

    @property
    def parameters(self) -> Array:
        """The 3 k - 1 free parameters."""
        logits = np.log(self.weights / self.weights[-1])[:-1]
        log_free = 0.5 * np.log(self.widths**2 - self.least_width**2)
        return np.concatenate([logits, self.means, log_free])

    @property
    def _per_parameter(self) -> Array:
        """Derivative of ln(width) with respect to its parameter."""
        return np.asarray(1.0 - (self.least_width / self.widths) ** 2)

    def log_parts(self, x: Array) -> Array:
        """Log of each weighted component at x, (k, ...)."""
        shape = (-1,) + (1,) * x.ndim
        u = (x - self.means.reshape(shape)) / self.widths.reshape(shape)
        scale = np.log(self.weights / (self.widths * math.sqrt(2.0 * math.pi)))
        return np.asarray(scale.reshape(shape) - 0.5 * u**2)

    def log_density(self, x: Array) -> Array:
        """Log of the density at x."""
        parts = self.log_parts(x)
        top = parts.max(axis=0)
        return np.asarray(top + np.log(np.exp(parts - top).sum(axis=0)))

    def local_precision(self, x: Array) -> Array:
        """Inverse variance of the component that dominates at x, averaged over the components."""
        parts = self.log_parts(x)
        share = np.exp(parts - parts.max(axis=0))
        inverse = (self.widths**-2.0).reshape((-1,) + (1,) * x.ndim)
        return np.asarray((share * inverse).sum(axis=0) / share.sum(axis=0))

    def sample(self, n: int, rng: np.random.Generator) -> Array:
        """Draw n values."""
        which = rng.choice(self.size, size=n, p=self.weights)
        return np.asarray(rng.normal(self.means[which], self.widths[which]))

    def complete_scores(self, x: Array) -> tuple[Array, Array]:
        """Scores if the component of each value were known.

        Parameters
        ----------
        x : (...) float64 array

        Returns
        -------
        responsibilities : (k, ...) float64 array
            Probability of each component given x.
        scores : (k, 3 k - 1, ...) float64 array
            Derivative of log(w_k N_k) with respect to the free parameters.
        """
        parts = self.log_parts(x)
        top = parts.max(axis=0)
        share = np.exp(parts - top)
        share /= share.sum(axis=0)
        k = self.size
        scores = np.zeros((k, 3 * k - 1, *x.shape))
        for j in range(k):
            u = (x - self.means[j]) / self.widths[j]
            for other in range(k - 1):
                scores[j, other] = float(other == j) - self.weights[other]
            scores[j, k - 1 + j] = u / self.widths[j]
            scores[j, 2 * k - 1 + j] = (u**2 - 1.0) * self._per_parameter[j]
        return share, scores

    def complete_information(self, x: Array, posterior: Array) -> Array:
        """Minus the second derivatives if components were known, summed over `posterior`.

        Parameters
        ----------
        x, posterior : (n, nodes) float64 array
            Values, and the probability of each; rows of the latter sum to one.

        Returns
        -------
        (3 k - 1, 3 k - 1) float64 array
        """
        k, parts = self.size, self.log_parts(x)
        top = parts.max(axis=0)
        share = np.exp(parts - top)
        share *= posterior / share.sum(axis=0)
        out = np.zeros((3 * k - 1, 3 * k - 1))
        w = self.weights[:-1]
        out[: k - 1, : k - 1] = posterior.shape[0] * (np.diag(w) - np.outer(w, w))
        for j in range(k):
            u = (x - self.means[j]) / self.widths[j]
            mean, width = k - 1 + j, 2 * k - 1 + j
            out[mean, mean] = share[j].sum() / self.widths[j] ** 2
            slope = self._per_parameter[j]
            bend = 2.0 * slope * (1.0 - slope)
            cross = 2.0 * slope * (share[j] * u).sum() / self.widths[j]
            out[mean, width] = out[width, mean] = cross
            out[width, width] = (share[j] * (2.0 * (slope * u) ** 2 - bend * (u**2 - 1.0))).sum()
        return out
