"""The usual distributions beside log-Pearson III, fitted to the same records with the same censoring."""

from __future__ import annotations

from dataclasses import dataclass
from types import ModuleType

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.distributions import gev, glo, pe3
from wrackline.stats.expected_lmoments import fit_expected_lmoments

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

GUMBEL_LSKEW = float(np.log(9 / 8) / np.log(2))


@dataclass(frozen=True)
class Family:
    """A family of distributions of annual floods.

    Attributes
    ----------
    name, title : str
    law : module
        One of `wrackline.stats.distributions`.
    logarithmic : bool
        True where the law is that of the base-10 logarithms of flow.
    lskew : float or None
        L-skewness of the law where the family has no shape of its own.
    """

    name: str
    title: str
    law: ModuleType
    logarithmic: bool
    lskew: float | None

    def in_space(self, flow: ArrayLike) -> FloatArray:
        """Return flows in the space of the law; a lower end of zero is minus infinity in both.

        What is known as 'below a level' may be of any size below it: a law of flows that allows negative ones
        keeps its tail.
        """
        flow = np.asarray(flow, dtype=float)
        if self.logarithmic:
            with np.errstate(divide="ignore"):
                return np.asarray(np.log10(flow))
        return np.where(flow == 0, -np.inf, flow)

    def quantile(self, parameters: FloatArray, probability: ArrayLike) -> FloatArray:
        """Return flows not exceeded with a probability, m3/s; not below zero."""
        value = self.law.quantile(parameters, probability)
        return np.asarray(10.0**value) if self.logarithmic else np.maximum(value, 0.0)

    def cdf(self, parameters: FloatArray, flow: ArrayLike) -> FloatArray:
        """Return the probability that a flow is not exceeded; 0 below zero flow."""
        value = self.in_space(flow)
        at_end = ~np.isfinite(value)
        inside = self.law.cdf(parameters, np.where(at_end, 0.0, value))
        return np.where(at_end, np.where(value > 0, 1.0, 0.0), inside)

    def density(self, parameters: FloatArray, log10_flow: ArrayLike) -> FloatArray:
        """Return the probability density per log10 cycle of flow, as a histogram of logarithms shows it."""
        log10_flow = np.asarray(log10_flow, dtype=float)
        if self.logarithmic:
            return np.asarray(self.law.density(parameters, log10_flow))
        flow = 10.0**log10_flow
        return np.asarray(self.law.density(parameters, flow) * flow * np.log(10))


NORMAL = Family("normal", "normal", pe3, False, 0.0)
LOGNORMAL = Family("lognormal", "lognormal", pe3, True, 0.0)
GUMBEL = Family("gumbel", "Gumbel", gev, False, GUMBEL_LSKEW)
GEV = Family("gev", "generalized extreme value", gev, False, None)
PEARSON3 = Family("pearson3", "Pearson III", pe3, False, None)
GENERALIZED_LOGISTIC = Family("generalized_logistic", "generalized logistic", glo, False, None)
LOG_PEARSON3 = Family("log_pearson3", "log-Pearson III", pe3, True, None)
ALTERNATIVES = (NORMAL, LOGNORMAL, GUMBEL, GEV, PEARSON3, GENERALIZED_LOGISTIC)


@dataclass(frozen=True)
class FamilyFits:
    """One family fitted to the records of all gauges.

    Attributes
    ----------
    family : Family
    parameters : float array (g, 3)
        Of the family's law, in m3/s or in log10 of it; NaN where there is no fit.
    converged : bool array (g,)
    """

    family: Family
    parameters: FloatArray
    converged: BoolArray

    @property
    def fitted(self) -> BoolArray:
        return np.asarray(np.isfinite(self.parameters).all(axis=1), dtype=bool)

    def flow(self, aeps: ArrayLike) -> FloatArray:
        """Return flood quantiles in m3/s, shape (g, a)."""
        return self.family.quantile(self.parameters[:, None, :], 1 - np.asarray(aeps, dtype=float)[None, :])


def fit_families(fits: RecordFits, families: tuple[Family, ...] = ALTERNATIVES) -> tuple[FamilyFits, ...]:
    """Fit families to the records behind log-Pearson III fits; the latter stand first in the result.

    Parameters
    ----------
    fits : RecordFits
        Their records, low floods set apart, are the ones fitted. A gauge without a log-Pearson III fit gets no
        other fit either.
    families : tuple of Family

    Notes
    -----
    The alternatives are fitted by expected L-moments (`wrackline.stats.expected_lmoments`); log-Pearson III
    keeps its fit by expected moments.
    """
    usable = np.array([not reason for reason in fits.refusal], dtype=bool)
    moments = fits.best.moments
    parameters = np.stack([moments.mean, moments.sd, moments.skew], axis=-1)
    first = FamilyFits(
        LOG_PEARSON3, np.where(usable[:, None], parameters, np.nan), moments.converged & usable
    )
    return (first, *(_fit_family(family, fits.fitted_records, usable) for family in families))


def _fit_family(family: Family, records: PeakRecords, usable: BoolArray) -> FamilyFits:
    own = records.gauge_index
    kept = usable[own] & (records.flow_high > 0)
    offsets = np.concatenate([[0], np.cumsum(np.bincount(own[kept], minlength=records.n_gauges))])
    parameters, converged = fit_expected_lmoments(
        family.law,
        family.in_space(records.flow_low[kept]),
        family.in_space(records.flow_high[kept]),
        offsets,
        family.lskew,
    )
    return FamilyFits(family, parameters, converged)
