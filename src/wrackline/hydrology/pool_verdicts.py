"""What a pool's tests mean in words, and what to be warned of."""

from __future__ import annotations

import numpy as np

from wrackline.hydrology.growth_curves import Choice
from wrackline.hydrology.homogeneity import Heterogeneity, Parent
from wrackline.stats.anderson_darling import AndersonDarlingTest

FEW_GAUGES = 7
SKEWED = 0.23
"""L-skew above which rank tests find mixed pools better than L-moments do (Viglione, Laio and Claps, 2007)."""
ANDERSON_DARLING_LIMIT = 0.95


def describe_heterogeneity(
    independent: Heterogeneity,
    correlated: Heterogeneity | None = None,
    second_opinion: AndersonDarlingTest | None = None,
    after_selection: bool = False,
) -> str:
    """Say in words what H1 means (Hosking and Wallis, 1997): guide values, not significance levels."""
    h1, n_sim = float(independent.h[0]), independent.n_simulations
    if not np.isfinite(h1):
        return "not tested: one gauge alone"
    if h1 < -2:
        words = "homogeneous; H1 below -2 points to strong intersite correlation, not to strong homogeneity"
    else:
        words = _grade(h1)
        near = [limit for limit in (1, 2) if abs(h1 - limit) <= 2 * independent.h_se[0]]
        if near:
            words += f"; H1 is within two simulation errors of {near[0]} ({n_sim} simulations)"
        if correlated is not None and _grade(float(correlated.h[0])) != _grade(h1):
            words += f"; {_grade(float(correlated.h[0]))} once intersite correlation is allowed for"
    if second_opinion is not None:
        against = second_opinion.probability > ANDERSON_DARLING_LIMIT
        words += (
            f"; the Anderson-Darling test {'speaks against' if against else 'does not speak against'} one law "
            f"(probability {second_opinion.probability:.3f})"
        )
    return words + ("; after selection" if after_selection else "")


def warn_of_tests(heterogeneity: Heterogeneity, choice: Choice, parent: Parent, n_gauges: int) -> list[str]:
    """List what the analyst should know before the pool's growth curve is used."""
    warnings, h1 = [], heterogeneity.h[0]
    if h1 >= 2:
        warnings.append(
            f"the pool is definitely heterogeneous (H1 = {h1:.2f}); form other pools or read the interval as wide"
        )
    if h1 < -2:
        warnings.append(f"H1 = {h1:.2f} is below -2, which points to strong intersite correlation")
    if n_gauges < FEW_GAUGES:
        warnings.append(
            f"the pool has {n_gauges} gauge{'s' * (n_gauges > 1)}; heterogeneity tests are weak below {FEW_GAUGES}"
        )
    if parent.name == "GLO":
        warnings.append(
            "no kappa law has the pool's L-kurtosis; regions were simulated from the generalized logistic law"
        )
    if choice.pinned and choice.distribution != choice.by_evidence:
        warnings.append(
            f"the analyst fixed {choice.distribution}; the tests would now choose {choice.by_evidence}"
        )
    return warnings


def _grade(h1: float) -> str:
    return (
        "acceptably homogeneous"
        if h1 < 1
        else "possibly heterogeneous"
        if h1 < 2
        else "definitely heterogeneous"
    )
