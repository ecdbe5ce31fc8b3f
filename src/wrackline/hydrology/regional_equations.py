"""The index flood and the floods of all probabilities regressed on the same gauges: fits, diagnostics, left-out."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from wrackline.hydrology.attributes import AttributeSpace, DesignPlan
from wrackline.hydrology.quantile_regression import QuantileRegression, standard_error_percent
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.stats.gls import GlsFit, fit_gls, spread
from wrackline.stats.spatial_structure import MoranTest, measure_spatial_structure


@dataclass(frozen=True)
class EquationDiagnostics:
    """How one equation does.

    Attributes
    ----------
    model_variance, average_prediction_variance : float, log10 squared
    model_error_percent, prediction_error_percent : float
    pseudo_r2 : float
        Share of the constant-only model-error variance that the attributes explain.
    error_variance_ratio : float
        Average sampling variance over model-error variance; above 0.2 ordinary least squares will not do.
    largest_leverage, largest_influence : float
    spatial : MoranTest
        Of standardised residuals.
    """

    model_variance: float
    average_prediction_variance: float
    model_error_percent: float
    prediction_error_percent: float
    pseudo_r2: float
    error_variance_ratio: float
    largest_leverage: float
    largest_influence: float
    spatial: MoranTest


def diagnose_equation(
    fit: GlsFit, y: FloatArray, sampling: FloatArray, distance: FloatArray, rng: np.random.Generator
) -> EquationDiagnostics:
    """Diagnose one equation; ``sampling`` and ``distance`` (n, n) are those of its gauges."""
    average = float(fit.prediction_variance.mean())
    constant = fit_gls(y, np.ones((len(y), 1)), sampling, fit.method).model_variance
    standardised = fit.residuals / np.sqrt(fit.model_variance + fit.sampling_variance)
    mean_sampling = float(fit.sampling_variance.mean())
    return EquationDiagnostics(
        model_variance=fit.model_variance,
        average_prediction_variance=average,
        model_error_percent=float(standard_error_percent(fit.model_variance)),
        prediction_error_percent=float(standard_error_percent(average)),
        pseudo_r2=1.0 - fit.model_variance / constant if constant > 0 else float("nan"),
        error_variance_ratio=mean_sampling / fit.model_variance if fit.model_variance > 0 else float("inf"),
        largest_leverage=float(fit.leverage.max()),
        largest_influence=float(fit.influence.max()),
        spatial=measure_spatial_structure(standardised, distance, rng),
    )


@dataclass(frozen=True)
class SavedEquations:
    """Equations of one or more responses on the same columns, as they are saved and applied to new sites.

    Attributes
    ----------
    plan : DesignPlan
    coefficients : (p, k)
    coefficient_covariance : (p, k, k)
    model_variance : (p,)
    degrees_of_freedom : int
    space : AttributeSpace
    """

    plan: DesignPlan
    coefficients: FloatArray
    coefficient_covariance: FloatArray
    model_variance: FloatArray
    degrees_of_freedom: int
    space: AttributeSpace

    def predict(self, design: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return log10 floods and their variances of prediction, each (m, p)."""
        grown = np.column_stack([spread(design, covariance) for covariance in self.coefficient_covariance])
        return design @ self.coefficients.T, self.model_variance + grown

    def notes(self, transformed: FloatArray, design: FloatArray) -> list[list[str]]:
        """What to know of every site's place among the gauges; the first response stands for all."""
        return self.space.notes(transformed, spread(design, self.coefficient_covariance[0]))

    def to_dict(self) -> dict[str, Any]:
        """Content for a saved model."""
        return {
            "attributes": list(self.plan.names),
            "transforms": list(self.plan.transforms),
            "regions": list(self.plan.regions),
            "separate": self.plan.separate,
            "columns": list(self.plan.columns),
            "coefficients": self.coefficients.tolist(),
            "coefficient_covariance": self.coefficient_covariance.tolist(),
            "model_variance": self.model_variance.tolist(),
            "degrees_of_freedom": self.degrees_of_freedom,
            "space": self.space.to_dict(),
        }

    @classmethod
    def from_dict(cls, saved: dict[str, Any]) -> SavedEquations:
        """Read back what `to_dict` gave."""
        return cls(
            DesignPlan(
                tuple(saved["attributes"]),
                tuple(saved["transforms"]),
                tuple(saved["regions"]),
                bool(saved["separate"]),
            ),
            np.array(saved["coefficients"], dtype=float),
            np.array(saved["coefficient_covariance"], dtype=float),
            np.array(saved["model_variance"], dtype=float),
            int(saved["degrees_of_freedom"]),
            AttributeSpace.from_dict(saved["space"]),
        )


def save_index_equation(plan: DesignPlan, fit: GlsFit, space: AttributeSpace) -> SavedEquations:
    """The index-flood equation as a set of one."""
    return SavedEquations(
        plan,
        fit.coefficients[None],
        fit.coefficient_covariance[None],
        np.array([fit.model_variance]),
        fit.degrees_of_freedom,
        space,
    )


def save_quantile_equations(
    plan: DesignPlan, regression: QuantileRegression, space: AttributeSpace
) -> SavedEquations:
    """The quantile equations as they are applied."""
    return SavedEquations(
        plan,
        regression.coefficients,
        regression.coefficient_covariance,
        regression.model_variance,
        regression.degrees_of_freedom,
        space,
    )


def spread_to_all(values: FloatArray, used: BoolArray) -> FloatArray:
    """Put values of used gauges (n, ...) among all (g, ...), NaN elsewhere."""
    everywhere = np.full((len(used), *values.shape[1:]), np.nan)
    everywhere[used] = values
    return everywhere
