"""Posterior of the model-error variance of a regression with known sampling covariance."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from wrackline.stats.gls import FloatArray, SpectralSystem, fit_trials

# Panels for a prior of mean 0.1; other priors stretch them. Narrow near zero, where the density turns fastest.
_PANELS = (
    0,
    2e-4,
    5e-4,
    0.001,
    0.0025,
    0.005,
    0.01,
    0.02,
    0.04,
    0.07,
    0.1,
    0.15,
    0.2,
    0.3,
    0.45,
    0.7,
    1,
    1.5,
    2.5,
    4,
    7,
)
_NODES_PER_PANEL = 24


@dataclass(frozen=True)
class VariancePosterior:
    """A posterior as nodes and weights of a quadrature.

    Attributes
    ----------
    mean, variance : float
    nodes, weights : (m,)
        Model-error variances and their probabilities, which add up to one.
    log_evidence : float
        Logarithm of the integral of prior times likelihood, up to a constant that depends only on
        the numbers of sites and coefficients: compares models of the same data.
    """

    mean: float
    variance: float
    nodes: FloatArray
    weights: FloatArray
    log_evidence: float


def posterior_of_model_variance(
    system: SpectralSystem, prior_rate: float, coefficients: FloatArray | None = None
) -> VariancePosterior:
    """Integrate the posterior of the model-error variance under an exponential prior.

    Parameters
    ----------
    system : SpectralSystem
    prior_rate : float
        The prior's rate; its mean is ``1 / prior_rate``, in squared units of the response.
    coefficients : (k,), optional
        Given: the posterior conditional on these coefficients (the hybrid procedure's second step).
        Otherwise the coefficients are integrated out under a flat prior.

    Notes
    -----
    Reis, Stedinger and Martins (2005, Water Resour. Res. 41, W10419). Composite Gauss-Legendre quadrature.
    """
    nodes, node_weights = quadrature(prior_rate)
    if coefficients is None:
        trials = fit_trials(system, nodes)
        log_density = -0.5 * (trials.log_det_cover + trials.log_det_information + trials.squares)
    else:
        residual = system.y - system.design @ coefficients
        cover = system.eigenvalues + nodes[:, None]
        log_density = -0.5 * (np.log(cover).sum(axis=1) + (residual**2 / cover).sum(axis=1))
    log_density -= prior_rate * nodes
    top = log_density.max()
    mass = node_weights * np.exp(log_density - top)
    weights = mass / mass.sum()
    mean = float(weights @ nodes)
    return VariancePosterior(
        mean=mean,
        variance=float(weights @ (nodes - mean) ** 2),
        nodes=nodes,
        weights=weights,
        log_evidence=float(top + np.log(prior_rate * mass.sum())),
    )


@lru_cache(maxsize=8)
def quadrature(prior_rate: float) -> tuple[FloatArray, FloatArray]:
    """Nodes and weights for integrals over the model-error variance under an exponential prior of this rate."""
    ends = np.array(_PANELS) * 10.0 / prior_rate
    x, w = np.polynomial.legendre.leggauss(_NODES_PER_PANEL)
    half = np.diff(ends) / 2
    nodes = (ends[:-1, None] + half[:, None] * (x + 1)).ravel()
    return nodes, (half[:, None] * w).ravel()
