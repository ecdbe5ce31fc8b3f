"""How much the true growth curves of a pool's sites differ: a posterior that never collapses to zero."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.homogeneity import SimulatedRatios, number_years
from wrackline.hydrology.records import FloatArray, IntArray

LCV_GRID = 0.8 * np.linspace(0.0, 1.0, 25) ** 1.5
"""Between-site standard deviation of L-CV over the pool's L-CV."""
LSKEW_GRID = 0.3 * np.linspace(0.0, 1.0, 19) ** 1.5
CORRELATION_GRID = np.array([0.25, 0.5, 0.75, 0.95])
SAME_LAW = 0.2
"""Prior probability that the sites of a pool do not differ at all."""
LCV_PRIOR_SCALE = 0.1
"""Scale of the gamma prior (shape 2) of the standard deviation of L-CV, over the pool's L-CV."""
LSKEW_PRIOR = (1.5, 0.6)
"""Standard deviation of L-skew over that of L-CV: its prior median, and the standard deviation of its logarithm."""
_LEAST = (0.002, 0.0015)
"""Stand-ins for zero where logarithms are taken, L-CV and L-skew."""


@dataclass(frozen=True)
class BetweenSites:
    """Posterior of the standard deviations of true L-CV and L-skew between the sites of a pool.

    Attributes
    ----------
    lcv_sd : (k,), lskew_sd : (m,), correlation : (r,)
        Grid values; the correlation is that of a site's departures in L-CV and in L-skew.
    probability : (k, m, r)
    """

    lcv_sd: FloatArray
    lskew_sd: FloatArray
    correlation: FloatArray
    probability: FloatArray

    @property
    def mean_lcv_sd(self) -> float:
        return float(self.probability.sum(axis=(1, 2)) @ self.lcv_sd)

    @property
    def mean_lskew_sd(self) -> float:
        return float(self.probability.sum(axis=(0, 2)) @ self.lskew_sd)

    def draw_departures(
        self, rng: np.random.Generator, n_simulations: int, n_sites: int
    ) -> tuple[FloatArray, FloatArray]:
        """Draw departures of L-CV and L-skew, each (s, sites), with the spread drawn anew for each region."""
        chosen = rng.choice(self.probability.size, size=n_simulations, p=self.probability.ravel())
        k, m, r = np.unravel_index(chosen, self.probability.shape)
        first, second = rng.standard_normal((2, n_simulations, n_sites))
        tie = self.correlation[r][:, None]
        both = tie * first + np.sqrt(1 - tie**2) * second
        return self.lcv_sd[k][:, None] * first, self.lskew_sd[m][:, None] * both


def estimate_between_sites(
    lcv: FloatArray,
    lskew: FloatArray,
    average_lcv: float,
    years: Sequence[IntArray],
    correlation: FloatArray | None,
    simulated: SimulatedRatios,
    answer: tuple[float, float] = (1.0, 1.0),
) -> BetweenSites:
    """Estimate the spread of true L-CV and L-skew between sites, net of sampling scatter.

    Parameters
    ----------
    lcv, lskew : (g,)
        Sample ratios of the gauges.
    average_lcv : float
        The pool's L-CV, the unit of the prior.
    years : sequence of g int arrays
        Water years of every record.
    correlation : (g, g) or None
        Correlation of concurrent peaks; None for independent gauges.
    simulated : SimulatedRatios
        Simulated homogeneous regions of these gauges, from which the sampling covariance is taken.
    answer : two floats
        Change of the mean sample L-CV and L-skew for a unit change of the true ones.

    Notes
    -----
    A two-variable random-effects model. The sample ratios of gauge ``i`` scatter about a common mean with
    covariance ``Sigma + K / n_i``: ``Sigma`` between sites, ``K`` from the simulation (average of ``n`` times the
    covariance of a record's sample L-CV and L-skew). Gauges that share floods share sampling error; the
    correlation of two sample ratios is taken as ``n_ij rho_ij^2 / sqrt(n_i n_j)``, exact for L-CV of
    near-normal data and slightly too strong for L-skew. All gauges then share one
    Kronecker structure, one eigendecomposition makes the likelihood a product of 2 x 2 blocks, and the
    common mean is integrated out (restricted likelihood).

    A sample L-skew answers a true one with a slope below one (``answer``), which counts in the likelihood.

    A point estimate of Sigma is zero by chance in many pools whose sites do differ. As for the model-error
    variance of regional skew (Reis, Stedinger and Martins, 2005, Water Resour. Res. 41) the posterior is used
    instead. The prior says with probability 0.2 that the sites share one law; otherwise the standard deviation
    of L-CV is gamma distributed with shape 2 and scale 0.1 of the pool's L-CV, and that of L-skew is log-normal about
    1.5 times it: in log-normal and log-Pearson floods the same differences between basins raise both, and
    short records say little about L-skew. The correlation is uniform over 0.25 to 0.95. The constants
    were set by the coverage of intervals in simulated regions (tests/benchmarks/coverage_growth.py).
    """
    sampling = _sampling_covariance(years, simulated)
    shared, vectors = np.linalg.eigh(shared_sampling(years, correlation))
    y = vectors.T @ np.column_stack([lcv, lskew])
    x = vectors.sum(axis=0)

    lcv_sd, lskew_sd = LCV_GRID * average_lcv, LSKEW_GRID
    sd2, sd3, tie = np.meshgrid(lcv_sd, lskew_sd, CORRELATION_GRID, indexing="ij")
    seen2, seen3 = answer[0] * sd2[..., None], answer[1] * sd3[..., None]
    a, c, b = seen2**2, seen3**2, tie[..., None] * seen2 * seen3
    likelihood = _log_restricted_likelihood(
        a + shared * sampling[0, 0], b + shared * sampling[0, 1], c + shared * sampling[1, 1], x, y
    )
    prior = _prior(lcv_sd, lskew_sd, average_lcv)[:, :, None] / len(CORRELATION_GRID)
    probability = np.exp(likelihood - likelihood.max()) * prior
    return BetweenSites(lcv_sd, lskew_sd, CORRELATION_GRID, probability / probability.sum())


def _prior(lcv_sd: FloatArray, lskew_sd: FloatArray, average_lcv: float) -> FloatArray:
    """Prior probability of the grid of standard deviations, (k, m)."""
    sd2, sd3 = (np.maximum(sd, least) for sd, least in zip((lcv_sd, lskew_sd), _LEAST, strict=True))
    of_lcv = sd2 * np.exp(-sd2 / (LCV_PRIOR_SCALE * average_lcv)) * _cell_widths(lcv_sd)
    away = np.log(sd3[None, :] / (LSKEW_PRIOR[0] * sd2[:, None])) / LSKEW_PRIOR[1]
    differing = of_lcv[:, None] * np.exp(-0.5 * away**2) / sd3 * _cell_widths(lskew_sd)
    prior = (1 - SAME_LAW) * differing / differing.sum()
    prior[0, 0] += SAME_LAW
    return np.asarray(prior)


def _sampling_covariance(years: Sequence[IntArray], simulated: SimulatedRatios) -> FloatArray:
    n = np.array([len(held) for held in years])
    t, t3 = simulated.lcv - simulated.lcv.mean(axis=0), simulated.lskew - simulated.lskew.mean(axis=0)
    covariance = np.array(
        [[(t * t).mean(axis=0), (t * t3).mean(axis=0)], [(t * t3).mean(axis=0), (t3 * t3).mean(axis=0)]]
    )
    return np.asarray((covariance * n).mean(axis=-1))


def shared_sampling(years: Sequence[IntArray], correlation: FloatArray | None) -> FloatArray:
    """Return what gauges share of the sampling error of their ratios: ``n_ij rho_ij^2 / (n_i n_j)``, (g, g)."""
    numbers, n_years = number_years(years)
    n = np.array([len(held) for held in years])
    if correlation is None:
        return np.diag(1.0 / n)
    held = np.zeros((len(years), n_years))
    for row, number in zip(held, numbers, strict=True):
        row[number] = 1.0
    return np.asarray((held @ held.T) * correlation**2 / np.outer(n, n))


def _log_restricted_likelihood(
    a: FloatArray, b: FloatArray, c: FloatArray, x: FloatArray, y: FloatArray
) -> FloatArray:
    """Restricted log likelihood of rotated pairs ``y`` with blocks ``[[a, b], [b, c]]`` and design ``x I``."""
    det = a * c - b**2
    i11, i12, i22 = c / det, -b / det, a / det
    y2, y3 = y.T
    q = (i11 * y2**2 + 2 * i12 * y2 * y3 + i22 * y3**2).sum(axis=-1)
    n11, n12, n22 = ((i * x**2).sum(axis=-1) for i in (i11, i12, i22))
    r2, r3 = ((i11 * y2 + i12 * y3) * x).sum(axis=-1), ((i12 * y2 + i22 * y3) * x).sum(axis=-1)
    n_det = n11 * n22 - n12**2
    explained = (n22 * r2**2 - 2 * n12 * r2 * r3 + n11 * r3**2) / n_det
    return np.asarray(-0.5 * (np.log(det).sum(axis=-1) + np.log(n_det) + q - explained))


def _cell_widths(grid: FloatArray) -> FloatArray:
    edges = np.concatenate([grid[:1], (grid[1:] + grid[:-1]) / 2, grid[-1:]])
    return np.diff(edges)
