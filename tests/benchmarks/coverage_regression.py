"""Monte Carlo of generalized least squares for flood quantiles: is what it reports what happens?

    python tests/benchmarks/coverage_regression.py --g4 [--replicates 1000]

Log10 floods of AEP 0.01 at n invented gauges: 2.3 + 0.65 log10 area plus model error, records of 10 to 79 years
that end together, normal logarithms with standard deviation 0.28, cross-correlation 0.9 exp(-d / L), everything in
the sampling covariance known but the standard deviation, which is pooled. Printed for GLS and WLS: mean model-error
variances by every method, the slope, the constant's Monte Carlo variance over the reported one, coverage of 90 %
intervals at a new site, and reported and actual variance of prediction. ``--own``: records of 10 to 39 years, with
pooled and with every gauge's own standard deviation in its weight, which biases the fitted line low.
"""

from __future__ import annotations

import argparse
from dataclasses import dataclass

import numpy as np
from scipy.special import stdtrit

from wrackline.hydrology.quantile_covariance import QuantileErrorModel, quantile_sampling_covariance
from wrackline.stats.gls import fit_gls
from wrackline.stats.pearson3 import frequency_factor

AEP, SD, SLOPE, CONSTANT = 0.01, 0.28, 0.65, 2.3
DESIGNS = ((60, 100.0, 0.015), (60, 300.0, 0.015), (25, 100.0, 0.03))


@dataclass(frozen=True)
class Replicate:
    """One set of records and the fits to it: numbers named as they are printed."""

    moments_gls: float
    reml: float
    ml: float
    moments_wls: float
    slope: float
    constant: float
    constant_variance: float
    constant_wls: float
    constant_wls_variance: float
    covered: float
    covered_wls: float
    reported: float
    squared_error: float
    line_error: float


def draw(
    rng: np.random.Generator, n: int, length: float, model_variance: float, longest: int, own: bool
) -> Replicate:
    """Draw places, records and floods, and fit them."""
    place = rng.uniform(0, 400, (n, 2))
    distance = np.hypot(*(place[:, None] - place).transpose(2, 0, 1))
    rho = 0.9 * np.exp(-distance / length)
    np.fill_diagonal(rho, 1.0)
    years = rng.integers(10, longest + 1, n)
    log_area = rng.uniform(1.0, 3.5, n)
    k = float(frequency_factor(AEP, 0.0))
    truth = CONSTANT + SLOPE * log_area + rng.normal(0, np.sqrt(model_variance), n)
    logs = rng.standard_normal((years.max(), n)) @ np.linalg.cholesky(rho).T
    mean, sd = np.empty(n), np.empty(n)
    for i, m in enumerate(years):
        mean[i], sd[i] = logs[:m, i].mean(), logs[:m, i].std(ddof=1)
    y = truth + SD * mean + k * (SD * sd - SD)
    pooled = np.sqrt(np.average((SD * sd) ** 2, weights=years - 1))
    common = np.minimum(years[:, None], years).astype(float)
    none = np.zeros((n, n))
    errors = QuantileErrorModel(
        SD * sd if own else np.full(n, pooled),
        np.zeros(n),
        years.astype(float),
        common,
        rho,
        np.zeros(n),
        none,
        none,
    )
    sampling = quantile_sampling_covariance(errors, AEP)
    x = np.column_stack([np.ones(n), log_area])
    gls = fit_gls(y, x, sampling, "moments")
    wls = fit_gls(y, x, np.diagonal(sampling).copy(), "moments")
    new = np.array([[1.0, rng.uniform(1.0, 3.5)]])
    at_new = float(CONSTANT + SLOPE * new[0, 1] + rng.normal(0, np.sqrt(model_variance)))
    t = float(stdtrit(n - 2, 0.95))
    (estimate,), (variance,) = gls.predict(new)
    (estimate_wls,), (variance_wls,) = wls.predict(new)
    middle = np.array([[1.0, 2.25]])
    return Replicate(
        gls.model_variance,
        fit_gls(y, x, sampling, "reml").model_variance,
        fit_gls(y, x, sampling, "ml").model_variance,
        wls.model_variance,
        gls.coefficients[1],
        gls.coefficients[0],
        gls.coefficient_covariance[0, 0],
        wls.coefficients[0],
        wls.coefficient_covariance[0, 0],
        float(abs(estimate - at_new) <= t * np.sqrt(variance)),
        float(abs(estimate_wls - at_new) <= t * np.sqrt(variance_wls)),
        variance,
        (estimate - at_new) ** 2,
        float(gls.predict(middle)[0][0]) - (CONSTANT + SLOPE * 2.25),
    )


def run_design(
    design: tuple[int, float, float], replicates: int, longest: int = 79, own: bool = False
) -> None:
    """Print one line for GLS and WLS of a design."""
    n, length, model_variance = design
    rng = np.random.default_rng([20_260, n, int(length), int(1000 * model_variance)])
    found = [draw(rng, n, length, model_variance, longest, own) for _ in range(replicates)]
    mean = {name: np.array([getattr(r, name) for r in found]) for name in Replicate.__dataclass_fields__}
    se = {name: values.std(ddof=1) / np.sqrt(replicates) for name, values in mean.items()}
    print(
        f"n {n}, L {length:g} km, model-error variance {model_variance:g}{', own standard deviations' if own else ''}; {replicates} replicates"
    )
    for name in ("moments_gls", "reml", "ml", "moments_wls"):
        print(f"  {name:<12} {mean[name].mean():.5f} ({se[name]:.5f})")
    print(
        f"  slope {mean['slope'].mean():.4f}; constant, Monte Carlo over reported variance: GLS "
        f"{mean['constant'].var(ddof=1) / mean['constant_variance'].mean():.2f}, WLS "
        f"{mean['constant_wls'].var(ddof=1) / mean['constant_wls_variance'].mean():.2f}"
    )
    print(
        f"  90 % intervals at a new site hold: GLS {mean['covered'].mean():.3f}, WLS {mean['covered_wls'].mean():.3f} ({se['covered']:.3f})"
    )
    print(
        f"  variance of prediction, reported {mean['reported'].mean():.5f}, actual {mean['squared_error'].mean():.5f} ({se['squared_error']:.5f})"
    )
    print(f"  bias of the line in the middle: {mean['line_error'].mean():+.4f} ({se['line_error']:.4f})")


def main() -> None:
    parser = argparse.ArgumentParser(
        description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--g4", action="store_true", help="the three designs with pooled standard deviations")
    parser.add_argument(
        "--own",
        action="store_true",
        help="own standard deviations in the weights, 40 gauges of 10 to 39 years",
    )
    parser.add_argument("--replicates", type=int, default=1000)
    arguments = parser.parse_args()
    if arguments.g4 or not arguments.own:
        for design in DESIGNS:
            run_design(design, arguments.replicates)
    if arguments.own:
        for own in (False, True):
            run_design((40, 100.0, 0.015), arguments.replicates, 39, own)


if __name__ == "__main__":
    main()
