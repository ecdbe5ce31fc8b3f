"""Regional growth curves: the law of floods divided by the index flood, shared by the gauges of a pool."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise
from typing import Any, Literal, NamedTuple

import numpy as np
from numpy.typing import ArrayLike

from wrackline.hydrology.homogeneity import LARGEST_ACCEPTED_Z, FitMeasures
from wrackline.hydrology.law_fits import fit_law
from wrackline.hydrology.records import FloatArray, IntArray
from wrackline.stats import distributions

Statistic = Literal["median", "mean"]
SMALLEST_FACTOR = 1e-3
"""Growth factors are held at or above this share of the index flood where logarithms are taken."""


class Ratios(NamedTuple):
    """L-CV, L-skew, L-kurtosis and the fifth ratio: of a pool (floats) or of many simulated ones (arrays)."""

    lcv: Any
    lskew: Any
    lkurtosis: Any
    l5: Any


@dataclass(frozen=True)
class GrowthCurve:
    """A growth curve: a law with mean one, divided by ``scale`` so that it is one at the index flood.

    Attributes
    ----------
    distribution : str
        Short name of the law.
    parameters : (p,)
        Of the law with mean one.
    scale : float
        The law's median where the index flood is the median, else one.
    """

    distribution: str
    parameters: FloatArray
    scale: float

    def factor(self, aep: ArrayLike) -> FloatArray:
        """Return growth factors for annual exceedance probabilities."""
        aep = np.asarray(aep, dtype=float)
        law = distributions.BY_NAME[self.distribution]
        return np.reshape(law.quantile(self.parameters, 1 - np.atleast_1d(aep)) / self.scale, aep.shape)

    @property
    def upper_bound(self) -> float:
        """Largest growth factor the law allows; infinite for most laws of floods."""
        return float(self.factor(0.0))

    @property
    def density_at_median(self) -> float:
        """Probability density of the scaled curve at its median."""
        law = distributions.BY_NAME[self.distribution]
        return float(law.density(self.parameters, self.scale * self.factor(0.5)) * self.scale)

    def coefficient_of_variation(self) -> float:
        """Standard deviation over mean, by quadrature over the normal score of the probability.

        Infinite variance (a very heavy tail) gives the value up to a probability of one in a billion.
        """
        from scipy.special import ndtr

        score = np.linspace(-6.0, 6.0, 2001)
        x = np.asarray(distributions.BY_NAME[self.distribution].quantile(self.parameters, ndtr(score)))
        weight = np.exp(-(score**2) / 2)
        weight /= weight.sum()
        mean = float(weight @ x)
        return float(np.sqrt(weight @ (x - mean) ** 2) / mean)


@dataclass(frozen=True)
class Choice:
    """Which law a pool's growth curve takes, and why.

    Attributes
    ----------
    distribution : str
        The law used.
    by_evidence : str
        The law that the tests would choose now; differs from ``distribution`` only where one is pinned.
    reason : str
        One clause for the report.
    pinned : bool
    """

    distribution: str
    by_evidence: str
    reason: str
    pinned: bool


def choose_distribution(fit: FitMeasures, h1: float, pinned: str | None = None, why: str = "") -> Choice:
    """Choose a pool's law from its fit measures and its heterogeneity.

    The smallest ``|Z|`` among the accepted three-parameter laws; the kappa law when none is accepted or when
    ``H1 >= 2``, because Z means little in a heterogeneous pool (Hosking and Wallis, 1997, section 5.2).
    """
    best = int(np.argmin(np.abs(fit.z)))
    if h1 >= 2:
        evidence, reason = (
            "KAP",
            f"H1 is {h1:.2f}, 2 or more, where Z means little; a four-parameter law is used",
        )
    elif not fit.accepted[best]:
        evidence, reason = "KAP", f"no three-parameter law has |Z| of {LARGEST_ACCEPTED_Z} or less"
    else:
        evidence = fit.names[best]
        reason = f"the smallest |Z| ({abs(fit.z[best]):.2f}) among those of {LARGEST_ACCEPTED_Z} or less"
    if pinned is None:
        return Choice(evidence, evidence, reason, False)
    return Choice(pinned, evidence, f"fixed by the analyst: {why}", True)


def fit_curve(distribution: str, ratios: Ratios, statistic: Statistic) -> GrowthCurve:
    """Fit a growth curve to a pool's average L-moment ratios.

    Where no kappa law exists (L-kurtosis at or above the generalized logistic's) that law, its limit, is fitted.

    Raises
    ------
    ValueError
        When the law cannot have these ratios, or its median is not positive.
    """
    law = distributions.BY_NAME[distribution]
    parameters = fit_law(distribution, *ratios)
    if not np.isfinite(parameters).all() and distribution == "KAP":
        return fit_curve("GLO", ratios, statistic)
    if not np.isfinite(parameters).all():
        raise ValueError(f"the {distribution} law cannot have the pool's L-moment ratios {ratios}")
    scale = float(law.quantile(parameters, np.array([0.5]))[0]) if statistic == "median" else 1.0
    if not scale > 0:
        raise ValueError(f"the {distribution} curve has a median of {scale:.3g} times the mean")
    return GrowthCurve(distribution, parameters, scale)


def growth_factors(distribution: str, ratios: Ratios, aep: FloatArray, statistic: Statistic) -> FloatArray:
    """Fit one law to many sets of ratios (s,) and return growth factors (s, a); NaN where it cannot be fitted.

    The kappa law falls back to the generalized logistic as in `fit_curve`.
    """
    law = distributions.BY_NAME[distribution]
    parameters = np.asarray(law.fit(1.0, *ratios), dtype=float)
    p = 1 - np.asarray(aep, dtype=float)
    factor = np.array(law.quantile(parameters[:, None, :], p[None, :]), dtype=float)
    if statistic == "median":
        factor /= np.asarray(law.quantile(parameters, 0.5))[:, None]
    failed = ~np.isfinite(parameters).all(axis=-1)
    if distribution == "KAP" and failed.any():
        rest = Ratios(*(np.asarray(ratio)[failed] for ratio in ratios))
        factor[failed] = growth_factors("GLO", rest, aep, statistic)
    return factor


def check_curve(curve: GrowthCurve, aep: FloatArray, largest_scaled_flood: float) -> list[str]:
    """List what makes a growth curve doubtful: negative factors, or a bound below a flood that has occurred.

    Parameters
    ----------
    curve : GrowthCurve
    aep : (a,)
        The probabilities in use.
    largest_scaled_flood : float
        Largest flood of the pool over its gauge's index flood.
    """
    doubts = []
    negative = [p for p, factor in zip(aep, curve.factor(aep), strict=True) if factor < 0]
    if negative:
        listed = ", ".join(f"{p:g}" for p in negative)
        doubts.append(f"the {curve.distribution} curve gives negative floods at AEP {listed}")
    if curve.upper_bound < largest_scaled_flood:
        doubts.append(
            f"the {curve.distribution} curve ends at {curve.upper_bound:.3g} times the index flood, below the largest "
            f"flood of the pool ({largest_scaled_flood:.3g} times)"
        )
    return doubts


def largest_scaled_floods(flow: FloatArray, offsets: IntArray, statistic: Statistic) -> FloatArray:
    """Return the largest peak of every gauge over that gauge's own index flood, (g,); zero without an index."""
    largest = np.zeros(len(offsets) - 1)
    for i, (begin, end) in enumerate(pairwise(offsets.tolist())):
        record = flow[begin:end]
        index = float(np.median(record) if statistic == "median" else record.mean()) if len(record) else 0.0
        if index > 0:
            largest[i] = float(record.max()) / index
    return largest
