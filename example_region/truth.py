"""The truth of the example: parent distributions, what they depend on, and how years go together.

Floods of site ``i`` have log10 quantiles ``parents.log10_quantile(non_exceedance)``. Two kinds exist:
``lp3``, where all the study's models hold, and ``misspecified``, where none of them does.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from scipy.special import gammainccinv, gammaincinv, ndtr, ndtri

from example_region.sites import Sites
from example_region.terrain import REGION_NAMES, FloatArray
from wrackline.stats.streams import random_stream

# Log-Pearson III truth by region, in the order of REGION_NAMES.
REGION_SD_LOG10 = (0.19, 0.24, 0.31)
REGION_SKEW_LOG10 = (-0.20, 0.0, 0.25)
SITE_SD_OF_SD_LOG10 = 0.010
SITE_SD_OF_SKEW = 0.05
# mean_log10 = INTERCEPT + AREA_EXPONENT log10 area + PRECIPITATION_EXPONENT log10 precipitation + error
INTERCEPT, AREA_EXPONENT, PRECIPITATION_EXPONENT = -3.90, 0.80, 1.30
MODEL_ERROR_SD_LOG10 = 0.11
# Correlation of concurrent floods: RHO_NEAR exp(-distance / RHO_RANGE_KM), plus what nested basins share.
RHO_NEAR, RHO_RANGE_KM = 0.75, 120.0
# Correlation of departures from the regional truth: what nested basins share, and a little over distance.
ERROR_SMOOTH, ERROR_RANGE_KM = 0.25, 40.0


class Parents(Protocol):
    """Parent distributions of n sites."""

    def log10_quantile(self, non_exceedance: FloatArray) -> FloatArray:
        """Return log10 flows (m3/s) for probabilities of shape (n, k)."""


@dataclass(frozen=True)
class LogPearsonParents:
    """Log-Pearson III parents; arrays of shape (n,)."""

    mean_log10: FloatArray
    sd_log10: FloatArray
    skew_log10: FloatArray

    def log10_quantile(self, non_exceedance: FloatArray) -> FloatArray:
        skew = np.broadcast_to(self.skew_log10[:, None], non_exceedance.shape)
        factor = pearson_factor(non_exceedance, skew)
        return self.mean_log10[:, None] + self.sd_log10[:, None] * factor


@dataclass(frozen=True)
class MixtureParents:
    """Log-normal floods of which a share belongs to a second, larger and more variable kind; shape (n,)."""

    mean_log10: FloatArray
    sd_log10: FloatArray
    share: FloatArray
    rise_log10: FloatArray
    second_sd_log10: FloatArray

    def non_exceedance(self, log10_flow: FloatArray) -> FloatArray:
        """Return probabilities of log10 flows of shape (n, k)."""
        first = ndtr((log10_flow - self.mean_log10[:, None]) / self.sd_log10[:, None])
        second_mean = (self.mean_log10 + self.rise_log10)[:, None]
        second = ndtr((log10_flow - second_mean) / self.second_sd_log10[:, None])
        return first + self.share[:, None] * (second - first)

    def log10_quantile(self, non_exceedance: FloatArray) -> FloatArray:
        wide = 8 * np.maximum(self.sd_log10, self.second_sd_log10)[:, None] + np.abs(self.rise_log10)[:, None]
        low = np.broadcast_to(self.mean_log10[:, None] - wide, non_exceedance.shape).copy()
        high = np.broadcast_to(self.mean_log10[:, None] + wide, non_exceedance.shape).copy()
        for _ in range(45):
            middle = 0.5 * (low + high)
            below = self.non_exceedance(middle) < non_exceedance
            low, high = np.where(below, middle, low), np.where(below, high, middle)
        return 0.5 * (low + high)


def pearson_factor(non_exceedance: FloatArray, skew: FloatArray) -> FloatArray:
    """Return the standardised Pearson III quantile; both arrays of one shape."""
    shape = 4 / np.maximum(np.abs(skew), 1e-3) ** 2
    # The inverse that keeps digits in the tail it is asked for: a negative skew is the mirror image.
    gamma = np.where(skew > 0, gammaincinv(shape, non_exceedance), gammainccinv(shape, non_exceedance))
    factor = np.sign(skew) * (gamma - shape) / np.sqrt(shape)
    normal = ndtri(non_exceedance)
    # Close to zero skew the first term of the Cornish-Fisher expansion is exact to 1e-6.
    return np.where(np.abs(skew) < 1e-3, normal + skew / 6 * (normal**2 - 1), factor)


def draw_parents(sites: Sites, kind: str, seed: int) -> Parents:
    """Draw the parents of all sites: ``lp3`` or ``misspecified``."""
    if kind == "lp3":
        return _log_pearson_parents(sites, seed)
    if kind == "misspecified":
        return _mixture_parents(sites, seed)
    raise ValueError(f"kind is 'lp3' or 'misspecified', not {kind!r}")


def _log_pearson_parents(sites: Sites, seed: int) -> LogPearsonParents:
    sd = np.array(REGION_SD_LOG10)[sites.region] + SITE_SD_OF_SD_LOG10 * site_noise(sites, seed, "sd")
    skew = np.array(REGION_SKEW_LOG10)[sites.region] + SITE_SD_OF_SKEW * site_noise(sites, seed, "skew")
    mean = _index_relation(sites) + MODEL_ERROR_SD_LOG10 * site_noise(sites, seed, "index")
    return LogPearsonParents(mean, sd, skew)


def _mixture_parents(sites: Sites, seed: int) -> MixtureParents:
    """Mixtures; an attribute relation curved in log area; spread by region and area."""
    log_area = np.log10(sites.area_km2)
    from_middle = log_area - 2.3
    mean = _index_relation(sites) - 0.09 * from_middle**2
    mean += MODEL_ERROR_SD_LOG10 * site_noise(sites, seed, "index")
    uneven = np.array([0.008, 0.016, 0.030])[sites.region] * (1.2 - 0.3 * np.clip(from_middle, -1.3, 1.3))
    sd = (
        np.array([0.15, 0.19, 0.24])[sites.region]
        - 0.025 * from_middle
        + uneven * site_noise(sites, seed, "sd")
    )
    share = np.array([0.12, 0.18, 0.25])[sites.region]
    rise = np.array([0.25, 0.32, 0.38])[sites.region] + 0.05 * site_noise(sites, seed, "rise")
    sd = np.maximum(sd, 0.08)
    return MixtureParents(mean, sd, share, rise, 1.15 * sd)


def _index_relation(sites: Sites) -> FloatArray:
    log_rain = np.log10(sites.attributes["precipitation"])
    return INTERCEPT + AREA_EXPONENT * np.log10(sites.area_km2) + PRECIPITATION_EXPONENT * log_rain


def error_correlation(sites: Sites) -> FloatArray:
    """Correlation of the sites' departures from the regional truth, shape (n, n)."""
    smooth = np.exp(-sites.distances_km() / ERROR_RANGE_KM)
    return (1 - ERROR_SMOOTH) * sites.shared + ERROR_SMOOTH * smooth


def flood_correlation(sites: Sites) -> FloatArray:
    """Correlation of concurrent floods in normal space, shape (n, n)."""
    by_distance = RHO_NEAR * np.exp(-sites.distances_km() / RHO_RANGE_KM)
    return by_distance + (1 - RHO_NEAR) * sites.shared


def site_noise(sites: Sites, seed: int, name: str) -> FloatArray:
    """Return one standard normal departure per site, alike where basins are."""
    noise = random_stream(seed, "example truth", name).standard_normal(len(sites))
    return _root(error_correlation(sites)) @ noise


def draw_years(sites: Sites, seed: int, n_years: int) -> FloatArray:
    """Draw standard normal floods of shape (n, n_years) with the correlation of `flood_correlation`."""
    noise = random_stream(seed, "example years").standard_normal((len(sites), n_years))
    return _root(flood_correlation(sites)) @ noise


def draw_flows(parents: Parents, normal: FloatArray) -> FloatArray:
    """Return flows in m3/s of shape (n, n_years) for standard normal floods."""
    return 10 ** parents.log10_quantile(ndtr(normal))


def _root(correlation: FloatArray) -> FloatArray:
    return np.asarray(np.linalg.cholesky(correlation + 1e-10 * np.eye(len(correlation))), dtype=np.float64)


def describe_truth(seed: int) -> dict[str, object]:
    """Return the truth of the ``lp3`` kind as a table of numbers for ``truth.yaml``."""
    regions = zip(REGION_NAMES, REGION_SD_LOG10, REGION_SKEW_LOG10, strict=True)
    return {
        "seed": seed,
        "regions": {name: {"sd_log10": sd, "skew_log10": skew} for name, sd, skew in regions},
        "between_sites": {
            "sd_of_sd_log10": SITE_SD_OF_SD_LOG10,
            "sd_of_skew_log10": SITE_SD_OF_SKEW,
            "model_error_sd_log10": MODEL_ERROR_SD_LOG10,
        },
        "mean_log10": {
            "intercept": INTERCEPT,
            "log10_area_km2": AREA_EXPONENT,
            "log10_precipitation_mm": PRECIPITATION_EXPONENT,
        },
        "flood_correlation": {
            "formula": "near * exp(-distance_km / range_km) + (1 - near) * shared; 1 for a site with itself",
            "near": RHO_NEAR,
            "range_km": RHO_RANGE_KM,
        },
        "departure_correlation": {
            "formula": "smooth * exp(-distance_km / range_km) + (1 - smooth) * shared; 1 with itself",
            "smooth": ERROR_SMOOTH,
            "range_km": ERROR_RANGE_KM,
        },
        "shared": "shared basin area over the root of the product of the two areas; 0 for basins that are not nested",
    }
