"""How strongly annual peaks of two gauges go together: correlation as a smooth function of distance."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from wrackline.hydrology.distances import great_circle_km
from wrackline.hydrology.records import PeakRecords
from wrackline.stats.correlation import IDENTICAL, PairBins, bin_pairs, list_pairs

FloatArray = NDArray[np.float64]
Form = Literal["exponential", "box_cox", "independent"]

ENOUGH_PAIRS = 30
FEWEST_PAIRS = 10
NO_CORRELATION = -1000.0
"""The coefficient ``a`` of the independent model: ``exp(a)`` is zero."""
CLEARLY_BETTER = 2.71
"""What the Box-Cox form must gain; the 10 % point of chi-square with one degree of freedom.

In 150 simulated regions each of 20, 50, 100 and 200 gauges whose correlation is exponential, 0, 1, 2 and 9 % gained
more, at a cost of a twentieth in the error of the curve; where correlation falls on two scales, the form halves that
error."""
LISTED_PAIRS = 50_000
"""Up to this many pairs of gauges every pair is fitted; beyond, the means of narrow bins of distance."""
NARROW_BINS = 4000
EXPONENTS = np.round(np.arange(0.1, 2.01, 0.1), 1)


@dataclass(frozen=True)
class DistanceModel:
    """Correlation of concurrent log peaks as a function of the distance between basin centroids.

    ``Z = exp(a - b D)``, or ``Z = exp(a - b (D^exponent - 1) / exponent)`` in the Box-Cox form; the correlation is
    ``tanh Z``. In the independent form the correlation is zero.

    Attributes
    ----------
    a, b, exponent : float
        D in km; ``exponent`` is 1 in the exponential form, where it is not used.
    form : {"exponential", "box_cox", "independent"}
    minimum_common_years : int
        Shared years of the pairs that were fitted.
    n_pairs : int
    weighted_sse : float
        Sum of ``(n - 3)(z - Z)^2`` over the pairs.
    reduced_chi2 : float
        The same over ``n_pairs`` less the number of coefficients; NaN where nothing was fitted. It need not be
        near 1: the pairs share gauges.
    pseudo_r2 : float
        One less ``weighted_sse`` over that of the weighted mean z.
    """

    a: float
    b: float
    form: Form
    minimum_common_years: int
    n_pairs: int
    exponent: float = 1.0
    weighted_sse: float = np.nan
    reduced_chi2: float = np.nan
    pseudo_r2: float = np.nan

    def correlation(self, distance_km: ArrayLike) -> FloatArray:
        """Return the correlation at the given distances, in km; the shape is kept."""
        d = np.asarray(distance_km, dtype=float)
        if self.form == "independent":
            return np.zeros(d.shape)
        if self.form == "box_cox":
            d = (d**self.exponent - 1) / self.exponent
        return np.asarray(np.tanh(np.exp(self.a - self.b * d)), dtype=float)

    def to_dict(self) -> dict[str, Any]:
        """Return what a later stage needs to rebuild the model; without NaN."""
        return {
            "a": self.a,
            "b": self.b,
            "form": self.form,
            "exponent": self.exponent,
            "minimum_common_years": self.minimum_common_years,
            "pairs": self.n_pairs,
            "weighted_sse": _or_none(self.weighted_sse),
            "reduced_chi2": _or_none(self.reduced_chi2),
            "pseudo_r2": _or_none(self.pseudo_r2),
        }

    @classmethod
    def from_dict(cls, content: dict[str, Any]) -> DistanceModel:
        """Rebuild a model from `to_dict`; other keys are ignored."""
        fits = {name: content.get(name) for name in ("weighted_sse", "reduced_chi2", "pseudo_r2")}
        return cls(
            a=float(content["a"]),
            b=float(content["b"]),
            form=content["form"],
            minimum_common_years=int(content["minimum_common_years"]),
            n_pairs=int(content["pairs"]),
            exponent=float(content.get("exponent", 1.0)),
            **{name: np.nan if value is None else float(value) for name, value in fits.items()},
        )


@dataclass(frozen=True)
class Dependence:
    """The fitted model, what it was fitted to, and what to tell the reader.

    Attributes
    ----------
    model : DistanceModel
    rejected : DistanceModel or None
        The form that was fitted too and not taken.
    average_correlation : float
        Mean of the model's correlation over all pairs of gauges; 0 for fewer than two gauges.
    bins : PairBins
        Fisher z in narrow bins of distance; what figures and tables are drawn from.
    n_zero : int
        Zero flows, which have no logarithm and were left out.
    warnings : tuple of (code, text)
    """

    model: DistanceModel
    rejected: DistanceModel | None
    average_correlation: float
    bins: PairBins
    n_zero: int
    warnings: tuple[tuple[str, str], ...]


def log_peak_matrix(records: PeakRecords) -> tuple[FloatArray, int]:
    """Lay the exact systematic peaks out by gauge and year.

    Returns
    -------
    log10_peak : float array (g, t)
        NaN where a gauge has no exact positive peak; the first column is the earliest year of any gauge.
    n_zero : int
        Zero flows left out.
    """
    exact = records.systematic_exact
    used = exact & (records.flow_low > 0)
    n_zero = int((exact & (records.flow_low <= 0)).sum())
    if not used.any():
        return np.full((records.n_gauges, 1), np.nan), n_zero
    year = records.water_year[used]
    log10_peak = np.full((records.n_gauges, year.max() - year.min() + 1), np.nan)
    log10_peak[records.gauge_index[used], year - year.min()] = np.log10(records.flow_low[used])
    return log10_peak, n_zero


def fit_dependence(
    records: PeakRecords,
    latitude: ArrayLike,
    longitude: ArrayLike,
    minimum_common_years: int = 25,
    fallback_common_years: int = 15,
) -> Dependence:
    """Fit correlation against distance to the concurrent log peaks of all pairs of gauges.

    Parameters
    ----------
    records : PeakRecords
    latitude, longitude : float arrays (g,), degrees
        Of the basin centroids.
    minimum_common_years, fallback_common_years : int
        Shared years a pair needs; the fallback, with a warning, when fewer than 30 pairs share that many. With
        fewer than 10 pairs even so, gauges are taken as independent, with a warning.
    """
    latitude, longitude = np.asarray(latitude, dtype=float), np.asarray(longitude, dtype=float)
    log10_peak, n_zero = log_peak_matrix(records)
    g = records.n_gauges

    def distance(first: NDArray[np.int64], second: NDArray[np.int64]) -> FloatArray:
        return great_circle_km(
            latitude[first][:, None], longitude[first][:, None], latitude[second], longitude[second]
        )

    edges = np.linspace(0.0, _reach_km(latitude, longitude), NARROW_BINS + 1)
    warnings: list[tuple[str, str]] = []
    minimum = minimum_common_years
    bins = bin_pairs(log10_peak, distance, edges, minimum)
    if bins.pairs.sum() < ENOUGH_PAIRS and fallback_common_years < minimum:
        warnings.append(
            (
                "few_common_years",
                f"Only {bins.pairs.sum()} pairs of gauges share {minimum} years of peaks; "
                f"pairs that share {fallback_common_years} were used.",
            )
        )
        minimum = fallback_common_years
        bins = bin_pairs(log10_peak, distance, edges, minimum)
    if bins.identical:
        warnings.append(
            (
                "identical_records",
                f"{bins.identical} pair(s) of gauges have records that are copies of each other; "
                "they were left out of the correlation.",
            )
        )
    n_pairs = int(bins.pairs.sum())
    rejected = None
    if n_pairs < FEWEST_PAIRS:
        warnings.append(
            (
                "gauges_taken_as_independent",
                f"Only {n_pairs} pairs of gauges share {minimum} years of peaks, too few to fit a correlation; "
                "gauges are taken as independent, which makes regional uncertainty look smaller than it is.",
            )
        )
        model = DistanceModel(NO_CORRELATION, 0.0, "independent", minimum, n_pairs)
    elif g * (g - 1) // 2 <= LISTED_PAIRS:
        pairs = list_pairs(log10_peak, minimum)
        keep = np.abs(pairs.correlation) <= IDENTICAL
        first, second = pairs.first[keep], pairs.second[keep]
        model, rejected = fit_distance_model(
            great_circle_km(latitude[first], longitude[first], latitude[second], longitude[second]),
            np.arctanh(pairs.correlation[keep]),
            pairs.common[keep] - 3.0,
            g,
            minimum,
        )
    else:
        model, rejected = _fit_to_bins(bins, g, minimum)
    if n_pairs >= FEWEST_PAIRS and model.b == 0:
        warnings.append(
            (
                "correlation_does_not_fall",
                "The correlation of peaks does not fall with distance; one correlation is used for all pairs.",
            )
        )
    return Dependence(model, rejected, _average(model, bins), bins, n_zero, tuple(warnings))


def fit_distance_model(
    distance_km: ArrayLike,
    fisher_z: ArrayLike,
    weight: ArrayLike,
    n_gauges: int,
    minimum_common_years: int,
    n_pairs: int | None = None,
    within_sse: float = 0.0,
) -> tuple[DistanceModel, DistanceModel]:
    """Fit ``Z = exp(a - b D)`` and its Box-Cox form by weighted nonlinear least squares.

    The exponential form is taken unless the Box-Cox form is clearly better: ``n_gauges`` times the logarithm of the
    ratio of their weighted squares exceeds 2.71, the 10 % point of chi-square with one degree of freedom. Gauges,
    not pairs, count as observations, because the pairs of a gauge are no independent evidence.

    Parameters
    ----------
    distance_km, fisher_z, weight : float arrays (n,)
        One entry per pair, or per bin of pairs (then with their mean z and summed weight).
    n_gauges : int
    minimum_common_years : int
        Noted in the result.
    n_pairs : int, optional
        Pairs that the entries stand for; their number where left out.
    within_sse : float
        Weighted squares within the bins, added to those about the curve.

    Returns
    -------
    chosen, other : DistanceModel

    Notes
    -----
    Fisher (1921) for z and its variance ``1/(n - 3)``; the exponential and Box-Cox forms as in regional-skew
    studies after Gruber and Stedinger (2008) and Veilleux (2011). ``b`` is never negative: where the best
    correlation rises with distance, a constant is fitted and ``b`` is zero.
    """
    d, z, w = (np.asarray(a, dtype=float) for a in (distance_km, fisher_z, weight))
    pairs = len(d) if n_pairs is None else n_pairs
    total = within_sse + float((w * (z - np.average(z, weights=w)) ** 2).sum())

    def described(form: Form, a: float, b: float, exponent: float) -> DistanceModel:
        shape = (d**exponent - 1) / exponent if form == "box_cox" else d
        sse = within_sse + float((w * (z - np.exp(a - b * shape)) ** 2).sum())
        k = 3 if form == "box_cox" else 2
        return DistanceModel(
            float(a),
            float(b),
            form,
            minimum_common_years,
            pairs,
            exponent,
            sse,
            sse / (pairs - k),
            1 - sse / total,
        )

    exponential = described("exponential", *_fit_exponential(d, z, w), 1.0)
    fits = [described("box_cox", *_fit_exponential((d**e - 1) / e, z, w), float(e)) for e in EXPONENTS]
    box_cox = min(fits, key=lambda fit: fit.weighted_sse)
    gain = n_gauges * np.log(max(exponential.weighted_sse, 1e-300) / max(box_cox.weighted_sse, 1e-300))
    return (box_cox, exponential) if gain > CLEARLY_BETTER else (exponential, box_cox)


def repair_correlation(matrix: ArrayLike, smallest: float = 1e-8) -> tuple[FloatArray, bool]:
    """Return the matrix itself when it can be factored, else the nearest correlation matrix that can.

    Parameters
    ----------
    matrix : float array (n, n)
        Symmetric with unit diagonal.
    smallest : float
        Smallest eigenvalue accepted.

    Returns
    -------
    matrix : float array (n, n)
    repaired : bool

    Notes
    -----
    Alternating projections with Dykstra's correction (Higham, 2002, IMA J. Numer. Anal. 22), then a last
    clipping of eigenvalues and a rescaling to unit diagonal.
    """
    given = np.asarray(matrix, dtype=float)
    if len(given) == 0 or np.linalg.eigvalsh(given)[0] >= smallest:
        return given, False
    y, correction = given.copy(), np.zeros_like(given)
    for _ in range(200):
        shifted = y - correction
        x = _clip_eigenvalues(shifted, 0.0)
        correction = x - shifted
        previous, y = y, x.copy()
        np.fill_diagonal(y, 1.0)
        if np.abs(y - previous).max() < 1e-9:
            break
    # Scaling to unit diagonal divides by at most about 1 + n * floor, so twice the floor is enough.
    y = _clip_eigenvalues(y, 2 * smallest)
    scale = 1 / np.sqrt(np.diag(y))
    y = y * scale[:, None] * scale
    np.fill_diagonal(y, 1.0)
    return (y + y.T) / 2, True


def _fit_exponential(shape: FloatArray, z: FloatArray, w: FloatArray) -> tuple[float, float]:
    """Minimise sum w (z - exp(a - b shape))^2 with b >= 0.

    For a given b the best ``exp(a)`` is a ratio of sums, which leaves one coefficient to search: coarse first,
    then Gauss-Newton steps in both.
    """
    origin = shape.min()
    x = shape - origin
    reach = float(x.max())
    if reach <= 0:
        return float(np.log(max(np.average(z, weights=w), 1e-9))), 0.0
    best = (np.inf, 0.0, 0.0)
    for b in np.concatenate([[0.0], np.geomspace(1e-3, 1e3, 60) / reach]):
        curve = np.exp(-b * x)
        c = max(float((w * z * curve).sum() / (w * curve * curve).sum()), 1e-9)
        best = min(best, (float((w * (z - c * curve) ** 2).sum()), float(np.log(c)), float(b)))
    sse, a, b = best
    for _ in range(100):
        curve = np.exp(a - b * x)
        slope = np.stack([curve, -x * curve])
        normal = (slope * w) @ slope.T
        pull = (slope * w) @ (z - curve)
        step = np.linalg.lstsq(normal, pull, rcond=None)[0]
        if b == 0 and step[1] <= 0:
            # A curve that fell to nothing has no slope left to follow.
            step = np.array([pull[0] / normal[0, 0] if normal[0, 0] > 0 else 0.0, 0.0])
        for share in 0.5 ** np.arange(12):
            trial_a, trial_b = a + share * step[0], max(b + share * step[1], 0.0)
            trial = float((w * (z - np.exp(trial_a - trial_b * x)) ** 2).sum())
            # Squares are flat at the minimum: the last digits of the coefficients lie below their rounding.
            if trial <= sse * (1 + 1e-13):
                break
        else:
            break
        moved = abs(trial_a - a) + abs(trial_b - b) * reach
        sse, a, b = trial, float(trial_a), float(trial_b)
        if moved < 1e-13 * (1 + abs(a) + b * reach):
            break
    return a + b * origin, b


def _fit_to_bins(bins: PairBins, n_gauges: int, minimum: int) -> tuple[DistanceModel, DistanceModel]:
    filled = bins.weight > 0
    w = bins.weight[filled]
    z = bins.z[filled] / w
    within = float((bins.z_squared[filled] - w * z**2).sum())
    pairs = int(bins.pairs.sum())
    return fit_distance_model(bins.distance[filled] / w, z, w, n_gauges, minimum, pairs, within)


def _average(model: DistanceModel, bins: PairBins) -> float:
    filled = bins.all_pairs > 0
    if not filled.any():
        return 0.0
    count = bins.all_pairs[filled]
    return float(np.average(model.correlation(bins.all_distance[filled] / count), weights=count))


def _reach_km(latitude: FloatArray, longitude: FloatArray) -> float:
    """A distance that no two of the places exceed by much, for the edges of bins; at least 1 km."""
    if len(latitude) < 2:
        return 1.0
    low, high = latitude.min(), latitude.max()
    nearest_equator = float(np.clip(0.0, low, high))
    width = great_circle_km(nearest_equator, longitude.min(), nearest_equator, longitude.max())
    return max(float(np.hypot(width, great_circle_km(low, 0.0, high, 0.0))), 1.0)


def _clip_eigenvalues(matrix: FloatArray, floor: float) -> FloatArray:
    values, vectors = np.linalg.eigh(matrix)
    return np.asarray((vectors * np.maximum(values, floor)) @ vectors.T)


def _or_none(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
