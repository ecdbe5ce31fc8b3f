"""Fit one gauge's peaks, without a study: what ``wrackline fit`` and ``wrackline.fit`` do."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.at_site import GAUGE_AEPS, fit_records
from wrackline.hydrology.plotting_positions import plot_positions
from wrackline.hydrology.quantile_limits import expected_probability, expected_probability_aep
from wrackline.hydrology.record_fits import RecordFits, SkewFit
from wrackline.stats.pearson3 import frequency_factor
from wrackline.study.config import StudyConfig
from wrackline.study.faults import Fault, StudyFaults
from wrackline.study.single_record import SingleRecord, read_single_record

_DIGITS = 15
"""Flows go to m3/s and back; this many digits undo the rounding of that and lose nothing else."""


@dataclass(frozen=True)
class GaugeFit:
    """The fit of one gauge, flows in `flow_unit`.

    Attributes
    ----------
    fits : RecordFits
        All results, m3/s.
    record : SingleRecord
        The record behind them, and what became of every row.
    flow_unit : str
    plotting_position : str
    low_flood_reason : str
        Why the analyst set the low-flood threshold; blank where the test decided.
    """

    fits: RecordFits
    record: SingleRecord
    flow_unit: str
    plotting_position: str
    low_flood_reason: str = ""

    @property
    def unit_m3s(self) -> float:
        """Cubic metres per second in one unit of flow."""
        return _unit_m3s(self.flow_unit)

    @property
    def weighted(self) -> bool:
        """True when the quantiles rest on the weighted skew."""
        return self.fits.weighted is not None

    def quantiles(self) -> pd.DataFrame:
        """Return `aep`, `flow`, `lower`, `upper`, `se_log10`, one row per annual exceedance probability."""
        best = self.fits.best
        return pd.DataFrame(
            {
                "aep": self.fits.aeps,
                "flow": self._out(best.flow[0]),
                "lower": self._out(best.lower[0]),
                "upper": self._out(best.upper[0]),
                "se_log10": best.log10_se[0],
            }
        )

    def expected_probability(self) -> pd.DataFrame:
        """Return, per nominal `aep`, `expected_aep` of its quantile and `flow_expected`.

        `expected_aep` is the exceedance probability of the fitted quantile averaged over what as many years could
        have shown; `flow_expected` the flow whose expected probability is the nominal one. Normal case (Beard, 1960).
        """
        n, aeps, moments = self.fits.record_years[0], self.fits.aeps, self.fits.best.moments
        nominal = expected_probability_aep(n, aeps)
        log10_flow = moments.mean[0] + moments.sd[0] * frequency_factor(nominal, moments.skew[0])
        return pd.DataFrame(
            {
                "aep": aeps,
                "expected_aep": expected_probability(n, aeps),
                "flow_expected": self._out(10**log10_flow),
            }
        )

    def plotting_positions(self) -> pd.DataFrame:
        """Return `water_year`, `flow`, `aep`, largest flood first; floods without a size of their own have none.

        A flood known as an interval stands at its geometric middle. Low floods have no position.
        """
        records = self.fits.fitted_records
        aep = plot_positions(records, self.plotting_position)
        plotted = np.flatnonzero(np.isfinite(aep))
        plotted = plotted[np.argsort(aep[plotted], kind="stable")]
        middle = np.where(
            records.exact[plotted],
            records.flow_low[plotted],
            np.sqrt(records.flow_low[plotted] * records.flow_high[plotted]),
        )
        return pd.DataFrame(
            {
                "water_year": records.water_year[plotted],
                "flow": self._out(middle),
                "aep": aep[plotted],
            }
        )

    def warnings(self) -> list[str]:
        """Return what is odd about the record and its fit, as text."""
        texts = [str(fault) for fault in self.record.warnings]
        accounting = self.record.accounting
        left_out = accounting[accounting["fate"] == "excluded"]
        if len(left_out):
            reasons = "; ".join(
                f"{int(count)} for: {reason}"
                for reason, count in left_out["reason"].value_counts().sort_index().items()
            )
            texts.append(f"{len(left_out)} of {len(accounting)} rows are left out ({reasons})")
        return texts + [warning.text for warning in self.fits.warnings[0]]

    def to_dict(self) -> dict[str, Any]:
        """Return everything, unrounded, as JSON takes it: None where a number does not exist.

        Logarithms are of base 10 of flows in `flow_unit`.
        """
        fits, low = self.fits, self.fits.low_floods
        station, weighted = fits.station, fits.weighted
        return {
            "flow_unit": self.flow_unit,
            "n_peaks": int(fits.n_peaks[0]),
            "n_historic": int(fits.n_historic[0]),
            "record_years": int(fits.record_years[0]),
            "low_outliers": {
                "threshold": self._one(low.threshold[0]),
                "count": int(low.count[0]),
                "zeros": int(low.zeros[0]),
                "accurate_count": int(low.accurate_count[0]),
                "p_outward": _number(low.p_outward[0]),
                "p_inward": _number(low.p_inward[0]),
                "set_by_analyst": bool(low.overridden[0]),
                "why": self.low_flood_reason,
            },
            "log10": self._moments(station),
            "station_skew_mse": _number(station.station_skew_mse[0]),
            "generalized_skew": _first(fits.generalized_skew),
            "generalized_skew_mse": _first(fits.generalized_skew_mse),
            "weighted_skew": None if weighted is None else _number(weighted.moments.skew[0]),
            "weighted_skew_mse": None if weighted is None else _number(weighted.skew_mse[0]),
            "log10_weighted": None if weighted is None else self._moments(weighted),
            "covariance": [[_number(v) for v in row] for row in fits.best.covariance[0]],
            "iterations": int(fits.best.moments.iterations[0]),
            "converged": bool(fits.best.moments.converged[0]),
            "confidence": fits.confidence,
            "source": "weighted_skew" if self.weighted else "station",
            "quantiles": _rows(self.quantiles()),
            "expected_probability": _rows(self.expected_probability()),
            "plotting_position": self.plotting_position,
            "plotting_positions": _rows(self.plotting_positions()),
            "accounting": _rows(self.record.accounting[["row", "water_year", "fate", "reason"]]),
            "warnings": self.warnings(),
        }

    def _moments(self, fit: SkewFit) -> dict[str, float | None]:
        moments = fit.moments
        shift = np.log10(self.unit_m3s)
        return {
            "mean": _number(moments.mean[0] - shift),
            "sd": _number(moments.sd[0]),
            "skew": _number(moments.skew[0]),
        }

    def _out(self, flows_m3s: np.ndarray) -> list[float]:
        return [float(f"{flow / self.unit_m3s:.{_DIGITS}g}") for flow in flows_m3s.tolist()]

    def _one(self, flow_m3s: float) -> float | None:
        return _number(self._out(np.array([flow_m3s]))[0])


def fit(
    peaks: str | Path | pd.DataFrame,
    thresholds: str | Path | pd.DataFrame | None = None,
    *,
    skew: float | None = None,
    skew_mse: float | None = None,
    flow_unit: str = "m3/s",
    confidence: float = 0.90,
    aeps: Sequence[float] = GAUGE_AEPS,
    low_flood_threshold: float | None = None,
    low_flood_reason: str = "",
    plotting_position: str = "weibull",
    water_year_starts: int = 10,
) -> GaugeFit:
    """Fit log-Pearson III to the peaks of one gauge by the expected moments algorithm.

    Parameters
    ----------
    peaks : path or DataFrame
        Columns `water_year`, `flow` and the optional ones of a study's peaks table.
    thresholds : path or DataFrame, optional
        Perception thresholds: `first_year`, `last_year`, `low` and optionally `high`.
    skew, skew_mse : float, optional
        Generalized skew and its mean square error; both or neither.
    flow_unit : {"m3/s", "ft3/s"}
        Unit of all flows, in and out.
    confidence : float
        Two-sided probability content of the limits.
    aeps : sequence of float
        Annual exceedance probabilities wanted.
    low_flood_threshold : float, optional
        Replaces the low-flood test: peaks below it count as below it; 0 keeps every positive peak.
    low_flood_reason : str
        Required with a threshold.
    plotting_position : {"weibull", "cunnane", "gringorten", "hazen"}
    water_year_starts : int
        First month of the water year; dates are checked against it.

    Returns
    -------
    GaugeFit

    Raises
    ------
    StudyFaults
        With every problem of the tables, or the reason why the record cannot be fitted.
    ValueError
        For arguments that cannot be used.

    Notes
    -----
    Bulletin 17C (England and others, 2019); see `wrackline.hydrology.at_site.fit_records`.
    """
    if not 0 < confidence < 1:
        raise ValueError("the confidence must lie between 0 and 1, both excluded")
    if not len(aeps) or any(not 0 < aep < 1 for aep in aeps):
        raise ValueError("annual exceedance probabilities must lie between 0 and 1, both excluded")
    if (skew is None) != (skew_mse is None):
        raise ValueError("a generalized skew needs its mean square error, and the other way round")
    if skew_mse is not None and not skew_mse >= 0:
        raise ValueError("the mean square error of the generalized skew cannot be negative")
    if low_flood_threshold is not None and not low_flood_threshold >= 0:
        raise ValueError("the low-flood threshold cannot be negative")
    if low_flood_threshold is not None and not low_flood_reason.strip():
        raise ValueError("a low-flood threshold needs its reason")
    record = read_single_record(peaks, thresholds, flow_unit, water_year_starts)
    fits = fit_records(
        record.records,
        skew,
        skew_mse,
        aeps=sorted(set(aeps), reverse=True),
        confidence=confidence,
        low_flood_thresholds=None
        if low_flood_threshold is None
        else [low_flood_threshold * _unit_m3s(flow_unit)],
    )
    if fits.refusal[0]:
        file = str(record.accounting["file"].iloc[0]) if len(record.accounting) else "peaks"
        refused = Fault("not_fitted", "problem", file, f"The record cannot be fitted: {fits.refusal[0]}.")
        raise StudyFaults([refused], list(record.warnings))
    return GaugeFit(fits, record, flow_unit, plotting_position, low_flood_reason)


def _unit_m3s(flow_unit: str) -> float:
    return StudyConfig.model_validate({"units": {"flow": flow_unit}}).flow_in_m3s


def _number(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None


def _first(values: np.ndarray | None) -> float | None:
    return None if values is None else _number(values[0])


def _rows(frame: pd.DataFrame) -> list[dict[str, Any]]:
    """Return rows of plain Python values; NaN and infinity become None."""
    rows: list[dict[str, Any]] = []
    for row in frame.to_dict("records"):
        plain = {str(k): v.item() if isinstance(v, np.generic) else v for k, v in row.items()}
        rows.append({k: _number(v) if isinstance(v, float) else v for k, v in plain.items()})
    return rows
