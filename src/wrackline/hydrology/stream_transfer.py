"""Floods at a site on a gauged stream: the gauge's departure from the region, carried along the stream."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from wrackline.hydrology.records import FloatArray
from wrackline.hydrology.routes import RoutePredictions

AREA_LIMITS = (0.5, 1.5)


@dataclass(frozen=True)
class StreamGauge:
    """A gauge on the target's stream: its area, its flood and its regional estimate, (p,) log10 each."""

    area: float
    log10_flow: FloatArray
    variance: FloatArray
    regional: FloatArray


def transfer_share(area: float, gauge_area: float, limits: tuple[float, float] = AREA_LIMITS) -> float:
    """Return how much of a gauge's departure holds at another area: one at equal areas, zero at the limits and beyond.

    Examples
    --------
    >>> [transfer_share(a, 100.0) for a in (50.0, 75.0, 100.0, 125.0, 150.0)]
    [0.0, 0.5, 1.0, 0.5, 0.0]
    """
    ratio = area / gauge_area
    reach = limits[1] - 1.0 if ratio > 1 else 1.0 - limits[0]
    return max(0.0, 1.0 - abs(ratio - 1.0) / reach)


def transfer_factor(departure: ArrayLike, share: float) -> FloatArray:
    """Return the factor on the regional estimate: ``1 + share * (departure - 1)``.

    Parameters
    ----------
    departure : array_like
        The gauge's flood over its regional estimate.
    share : float
        From `transfer_share`.

    Notes
    -----
    Where the regional equation has area alone, a full share is the drainage-area ratio to the equation's exponent.

    Examples
    --------
    >>> [round(float(transfer_factor(1.2, transfer_share(a, 100.0))), 6) for a in (60.0, 75.0, 100.0, 125.0, 150.0)]
    [1.04, 1.1, 1.2, 1.1, 1.0]
    """
    return 1.0 + share * (np.asarray(departure, dtype=float) - 1.0)


def transfer_along_stream(
    area: float,
    regional: FloatArray,
    regional_variance: FloatArray,
    gauges: list[StreamGauge],
    degrees_of_freedom: int,
    limits: tuple[float, float] = AREA_LIMITS,
) -> RoutePredictions | None:
    """Estimate a site (1, p) from one or two gauges on its stream; None where their areas are beyond the limits.

    Parameters
    ----------
    area : float
    regional, regional_variance : (p,)
        The site's regional estimate, log10, and its variance of prediction.
    gauges : one or two of `StreamGauge`
        Of two, one smaller and one larger than the site, departures are interpolated in log area.
    degrees_of_freedom : int
        Of the regional estimate.

    Notes
    -----
    The errors of the regional estimates at site and gauge are taken to correlate by the share that is carried: the
    error left is that part of the regional error which the gauge does not know, plus the gauge's own. Between two
    gauges what their errors fail to share adds up along the stream.
    """
    near = [gauge for gauge in gauges if transfer_share(area, gauge.area, limits) > 0]
    if not near:
        return None
    smaller = [gauge for gauge in near if gauge.area <= area]
    larger = [gauge for gauge in near if gauge.area > area]
    if smaller and larger:
        low, high = max(smaller, key=lambda g: g.area), min(larger, key=lambda g: g.area)
        at = np.log(area / low.area) / np.log(high.area / low.area)
        parts = [(low, 1.0 - at), (high, at)]
    else:
        parts = [(min(near, key=lambda g: abs(np.log(g.area / area))), 1.0)]
    shift, own = np.zeros(len(regional)), np.zeros(len(regional))
    left = np.ones(len(regional))
    slopes, shares = [], []
    for gauge, weight in parts:
        part = 1.0 if len(parts) == 2 else transfer_share(area, gauge.area, limits)
        departure = 10 ** (gauge.log10_flow - gauge.regional)
        factor = transfer_factor(departure, part)
        shift += weight * np.log10(factor)
        slopes.append(weight * part * departure / factor)
        shares.append(transfer_share(area, gauge.area, limits))
        own += slopes[-1] ** 2 * gauge.variance
        left += slopes[-1] ** 2 - 2.0 * slopes[-1] * shares[-1]
    if len(parts) == 2:
        left += 2.0 * slopes[0] * slopes[1] * max(shares[0] + shares[1] - 1.0, 0.0)
    variance = np.maximum(left, 0.0) * regional_variance + own
    return RoutePredictions((regional + shift)[None], variance[None], degrees_of_freedom)
