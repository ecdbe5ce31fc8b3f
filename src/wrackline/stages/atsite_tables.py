"""Tables of the stage `atsite`."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.hydrology.alternatives import FamilyFits
from wrackline.hydrology.goodness_of_fit import Agreement
from wrackline.hydrology.plotting_positions import plot_positions
from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import BoolArray, FloatArray, PeakRecords
from wrackline.stats.skew_variance import station_skew_mse
from wrackline.study.tables import Column, Table

NO_REGION = "(none)"
MOMENT_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("used", "true/false", "the regional analysis uses the gauge"),
    Column("n_peaks", "count", "exactly known systematic peaks, low floods included"),
    Column("n_historic", "count", "exactly known historic peaks"),
    Column("record_years", "years", "years in the fit, known exactly or as intervals"),
    Column("n_low_outliers", "count", "potentially influential low floods, fitted as below the threshold"),
    Column("low_outlier_threshold", "flow", "smallest peak that is fitted with its size; 0: no low floods"),
    Column("mean_log10", "log10 of flow", "mean of the logarithms, expected moments"),
    Column("sd_log10", "log10 cycles", "standard deviation of the logarithms"),
    Column("station_skew", "1", "skew of the logarithms from the record alone"),
    Column("station_skew_mse", "1", "its mean square error (Griffis and Stedinger; times the asymptotic effect of censoring)"),
    Column("generalized_skew", "1", "generalized skew at the gauge; blank without one"),
    Column("generalized_skew_mse", "1", "its mean square error"),
    Column("weighted_skew", "1", "the two weighted by their mean square errors"),
    Column("weighted_skew_mse", "1", "its mean square error"),
    Column("iterations", "count", "iterations of the expected moments algorithm"),
    Column("converged", "true/false", "the moments settled"),
    Column("reasons", "text", "why there is no fit, or what to know of it"),
)  # fmt: skip
ESTIMATE_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("source", "text", "what the estimate rests on: station: the record with its own skew"),
    Column("flow", "flow", "flood quantile"),
    Column("lower", "flow", "lower confidence limit"),
    Column("upper", "flow", "upper confidence limit"),
    Column("se_log10", "log10 cycles", "standard error of the logarithm of the quantile"),
    Column("adopted", "true/false", "the estimate that the study adopts for the gauge"),
)
LOW_FLOOD_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("n_tested", "count", "systematic peaks tested, zeros included"),
    Column("zeros", "count", "peaks of zero flow"),
    Column(
        "count",
        "count",
        "low floods in the fit: with the guideline's approximate p-values, or by the analyst",
    ),
    Column("accurate_count", "count", "low floods that accurate p-values would give"),
    Column("counts_differ", "true/false", "the two counts differ"),
    Column("threshold", "flow", "smallest retained peak or the analyst's threshold; 0: none"),
    Column(
        "p_outward",
        "probability",
        "p-value at the decision of the sweep from the median outward; blank: none",
    ),
    Column("p_inward", "probability", "p-value at which the sweep from the smallest peak inward stopped"),
    Column("set_by_analyst", "true/false", "the ledger sets the threshold"),
    Column("why", "text", "the analyst's reason"),
)
POSITION_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("water_year", "water year", "water year"),
    Column("aep", "fraction", "plotting position, an annual exceedance probability"),
    Column("flow", "flow", "the peak; of an interval its geometric middle"),
    Column("low", "flow", "lower end of what is known"),
    Column("high", "flow", "upper end of what is known"),
    Column("kind", "text", "systematic or historic"),
)
WARNING_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("used", "true/false", "the regional analysis uses the gauge"),
    Column("code", "text", "short fixed name of the kind of warning"),
    Column("warning", "text", "what is odd"),
)
FAMILY_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("family", "text", "family of distributions"),
    Column("parameter_1", "", "location (mean for normal, lognormal, Pearson III and log-Pearson III), in the space of the family"),
    Column("parameter_2", "", "scale (standard deviation for the same), in the space of the family"),
    Column("parameter_3", "", "shape (skew for the same); below zero a heavy upper tail in the extreme-value and logistic families"),
    Column("flow_1pct", "flow", "flood quantile at an annual exceedance probability of 1 %"),
    Column("ppcc", "1", "probability-plot correlation coefficient"),
    Column("ppcc_critical", "1", "its lower 5 % point when the family is true, simulated"),
    Column("anderson_darling", "1", "Anderson-Darling statistic of the exactly known systematic peaks, given that they lie within their thresholds"),
    Column("anderson_darling_critical", "1", "its upper 5 % point when the family is true, simulated"),
    Column("largest_floods_error", "fraction", "mean relative error of the fit at the three largest plotted peaks"),
    Column("beyond_bound", "true/false", "an exactly known peak lies beyond the bound of the fit"),
    Column("serves", "true/false", "neither test rejects the family and no peak lies beyond its bound"),
)  # fmt: skip
REGION_COLUMNS = (
    Column("region", "text", "region"),
    Column("family", "text", "family of distributions"),
    Column("gauges", "count", "used gauges with a fit"),
    Column("serves", "count", "gauges at which it serves"),
    Column("share", "fraction", "share of gauges at which it serves"),
    Column("median_largest_floods_error", "fraction", "median over the gauges of largest_floods_error"),
)
PROBABILITY_OF_COMPARISON = 0.01


@dataclass(frozen=True)
class GaugeResults:
    """All that the stage found, one entry per gauge.

    Attributes
    ----------
    records : PeakRecords
        As intake gave them, of all gauges; m3/s.
    fits : RecordFits
    used, natural : bool arrays (g,)
    reasons : list of str
        Why a gauge has no fit; blank where it has one.
    thresholds_why : list of str
        The analyst's reasons for low-flood thresholds.
    names, regions : list of str
    families, agreements : tuples, one entry per family; empty when not wanted
    """

    records: PeakRecords
    fits: RecordFits
    used: BoolArray
    natural: BoolArray
    reasons: list[str]
    thresholds_why: list[str]
    names: list[str]
    regions: list[str]
    families: tuple[FamilyFits, ...]
    agreements: tuple[Agreement, ...]

    @property
    def gauge_ids(self) -> tuple[str, ...]:
        return self.records.gauge_ids

    @property
    def fitted(self) -> BoolArray:
        return np.array([not reason for reason in self.reasons], dtype=bool)

    @property
    def warning_texts(self) -> list[list[str]]:
        """Warnings of every fitted gauge."""
        return [
            [w.text for w in warnings] if fitted else []
            for warnings, fitted in zip(self.fits.warnings, self.fitted, strict=True)
        ]


def all_tables(results: GaugeResults, flow_in_m3s: float, numerator: str) -> tuple[Table, ...]:
    """Return the tables that this stage publishes."""
    tables = [
        _low_floods(results, flow_in_m3s),
        _positions(results, flow_in_m3s, numerator),
        _warnings(results),
    ]
    if results.families:
        tables += [_family_fits(results, flow_in_m3s), families_by_region(results)]
    return tuple(tables)


def station_tables(results: GaugeResults, flow_in_m3s: float) -> tuple[Table, Table]:
    """Return moments and estimates by station skew, with the columns of the tables that a study publishes."""
    return _moments(results, flow_in_m3s), _estimates(results, flow_in_m3s)


def exact_moments(results: GaugeResults, systematic: RecordFits) -> pd.DataFrame:
    """Return what later stages need with every digit, m3/s and base-10 logarithms.

    The pseudo record length is that of Veilleux (2011): systematic peaks times the ratio of the skew's mean square error
    from the systematic record alone over that from all data, at most the years in the fit. Where low floods put the
    skew of the whole systematic record out of range, a complete record with the station skew stands for it. Historic
    knowledge alone never lowers it: where the systematic record is complete and without low floods, it is at least
    as long as that.
    """
    fits, station = results.fits, results.fits.station
    moments = station.moments
    frame = pd.DataFrame(
        {"gauge_id": list(results.gauge_ids), "used": results.used, "fitted": results.fitted}
    )
    frame["n_peaks"], frame["n_historic"] = fits.n_peaks, fits.n_historic
    frame["record_years"] = fits.record_years
    frame["n_low_outliers"] = fits.low_floods.count
    frame["low_outlier_threshold_m3s"] = fits.low_floods.threshold
    frame["low_outlier_threshold_set_m3s"] = np.where(
        fits.low_floods.overridden, fits.low_floods.threshold, np.nan
    )
    frame["mean_log10"], frame["sd_log10"] = moments.mean, moments.sd
    frame["station_skew"], frame["station_skew_mse"] = moments.skew, station.station_skew_mse
    frame["censoring_ratio"] = fits.censoring_ratio
    for i, first in enumerate(("mean", "var", "skew")):
        for j, second in enumerate(("mean", "var", "skew")[i:], start=i):
            frame[f"cov_{first}_{second}"] = station.covariance[:, i, j]
    frame["n_systematic"] = systematic.n_peaks
    frame["historic_period_years"] = np.maximum(fits.record_years - systematic.record_years, 0)
    frame["systematic_skew"] = systematic.station.moments.skew
    frame["systematic_skew_mse"] = systematic.station.station_skew_mse
    complete = station_skew_mse(np.maximum(systematic.n_peaks, 3), moments.skew)
    own = np.where(
        np.isnan(systematic.station.station_skew_mse), complete, systematic.station.station_skew_mse
    )
    with np.errstate(invalid="ignore", divide="ignore"):
        pseudo = systematic.n_peaks * own / station.station_skew_mse
    complete_record = (fits.low_floods.count == 0) & (systematic.n_peaks == systematic.record_years)
    pseudo = np.where(complete_record, np.maximum(pseudo, systematic.n_peaks), pseudo)
    frame["complete_skew_mse"] = complete
    frame["pseudo_record_length"] = np.minimum(pseudo, fits.record_years)
    numbers = frame.columns[frame.columns.get_loc("mean_log10") :]
    unfitted = ~results.fitted
    frame.loc[unfitted, [n for n in numbers if frame[n].dtype.kind == "f"]] = np.nan
    return frame


def _moments(results: GaugeResults, unit: float) -> Table:
    fits = results.fits
    station, weighted, fitted = fits.station, fits.weighted, results.fitted
    words = ["; ".join(texts) for texts in results.warning_texts]

    def known(values: FloatArray | None) -> FloatArray:
        return np.full(len(fitted), np.nan) if values is None else np.where(fitted, values, np.nan)

    frame = pd.DataFrame(
        {
            "gauge_id": list(results.gauge_ids),
            "used": results.used,
            "n_peaks": np.bincount(
                results.records.gauge_index[results.records.systematic_exact], minlength=len(fitted)
            ),
            "n_historic": fits.n_historic,
            "record_years": np.where(results.natural, fits.record_years, 0),
            "n_low_outliers": _whole(fits.low_floods.count, fitted),
            "low_outlier_threshold": known(fits.low_floods.threshold) / unit,
            "mean_log10": known(station.moments.mean) - np.log10(unit),
            "sd_log10": known(station.moments.sd),
            "station_skew": known(station.moments.skew),
            "station_skew_mse": known(station.station_skew_mse),
            "generalized_skew": known(fits.generalized_skew),
            "generalized_skew_mse": known(fits.generalized_skew_mse),
            "weighted_skew": known(None if weighted is None else weighted.moments.skew),
            "weighted_skew_mse": known(None if weighted is None else weighted.skew_mse),
            "iterations": _whole(fits.best.moments.iterations, fitted),
            "converged": np.where(fitted, fits.best.moments.converged, False),
            "reasons": [reason or text for reason, text in zip(results.reasons, words, strict=True)],
        }
    )
    return Table("gauge_moments", frame, MOMENT_COLUMNS)


def _estimates(results: GaugeResults, unit: float) -> Table:
    fits, station = results.fits, results.fits.station
    at = np.flatnonzero(results.fitted)
    a = len(fits.aeps)
    frame = pd.DataFrame(
        {
            "gauge_id": np.repeat(np.array(results.gauge_ids, dtype=object)[at], a),
            "aep": np.tile(fits.aeps, len(at)),
            "source": "station",
            "flow": station.flow[at].ravel() / unit,
            "lower": station.lower[at].ravel() / unit,
            "upper": station.upper[at].ravel() / unit,
            "se_log10": station.log10_se[at].ravel(),
            "adopted": np.repeat(results.used[at], a),
        }
    )
    return Table("gauge_estimates", frame, ESTIMATE_COLUMNS)


def _low_floods(results: GaugeResults, unit: float) -> Table:
    low = results.fits.low_floods
    tested = results.fits.n_peaks
    frame = pd.DataFrame(
        {
            "gauge_id": list(results.gauge_ids),
            "n_tested": tested,
            "zeros": low.zeros,
            "count": low.count,
            "accurate_count": low.accurate_count,
            "counts_differ": low.count != low.accurate_count,
            "threshold": low.threshold / unit,
            "p_outward": low.p_outward,
            "p_inward": low.p_inward,
            "set_by_analyst": low.overridden,
            "why": results.thresholds_why,
        }
    )
    return Table("low_flood_tests", frame[results.natural].reset_index(drop=True), LOW_FLOOD_COLUMNS)


def _positions(results: GaugeResults, unit: float, numerator: str) -> Table:
    records = results.fits.fitted_records
    aep = plot_positions(records, numerator)
    own = records.gauge_index
    rows = np.flatnonzero(np.isfinite(aep) & results.fitted[own])
    rows = rows[np.lexsort((aep[rows], own[rows]))]
    low, high = records.flow_low[rows], records.flow_high[rows]
    frame = pd.DataFrame(
        {
            "gauge_id": np.array(records.gauge_ids, dtype=object)[own[rows]],
            "water_year": records.water_year[rows],
            "aep": aep[rows],
            "flow": np.where(low == high, low, np.sqrt(low * high)) / unit,
            "low": low / unit,
            "high": high / unit,
            "kind": np.where(records.historic[rows], "historic", "systematic").astype(object),
        }
    )
    return Table("plotting_positions", frame, POSITION_COLUMNS)


def _warnings(results: GaugeResults) -> Table:
    rows = []
    for i, gauge_id in enumerate(results.gauge_ids):
        if results.reasons[i]:
            rows.append((gauge_id, bool(results.used[i]), "not_fitted", results.reasons[i]))
        else:
            rows += [(gauge_id, bool(results.used[i]), w.code, w.text) for w in results.fits.warnings[i]]
    names = [column.name for column in WARNING_COLUMNS]
    return Table("gauge_warnings", pd.DataFrame(rows, columns=names, dtype=object), WARNING_COLUMNS)


def _family_fits(results: GaugeResults, unit: float) -> Table:
    parts = []
    for order, (fits, agreement) in enumerate(zip(results.families, results.agreements, strict=True)):
        at = np.flatnonzero(agreement.judged)
        parameters = fits.parameters[at].copy()
        if fits.family.logarithmic:
            parameters[:, 0] -= np.log10(unit)
        else:
            parameters[:, :2] /= unit
        parts.append(
            pd.DataFrame(
                {
                    "gauge_id": np.array(results.gauge_ids, dtype=object)[at],
                    "family": fits.family.name,
                    "parameter_1": parameters[:, 0],
                    "parameter_2": parameters[:, 1],
                    "parameter_3": parameters[:, 2],
                    "flow_1pct": fits.flow([PROBABILITY_OF_COMPARISON])[at, 0] / unit,
                    "ppcc": agreement.ppcc[at],
                    "ppcc_critical": agreement.ppcc_critical[at],
                    "anderson_darling": agreement.anderson_darling[at],
                    "anderson_darling_critical": agreement.anderson_darling_critical[at],
                    "largest_floods_error": agreement.largest_floods_error[at],
                    "beyond_bound": agreement.beyond_bound[at],
                    "serves": agreement.serves[at],
                    "order": order,
                }
            )
        )
    frame = pd.concat(parts).sort_values(["gauge_id", "order"], kind="stable")
    return Table("family_fits", frame.drop(columns="order").reset_index(drop=True), FAMILY_COLUMNS)


def families_by_region(results: GaugeResults) -> Table:
    """Count where which family serves, over the used gauges of every region."""
    regions = np.array([region or NO_REGION for region in results.regions], dtype=object)
    rows = []
    for region in sorted(set(regions[results.used])):
        inside = results.used & (regions == region)
        for agreement in results.agreements:
            judged = inside & agreement.judged
            if not judged.any():
                continue
            serves, error = agreement.serves[judged], agreement.largest_floods_error[judged]
            rows.append(
                (region, agreement.family.name, len(serves), int(serves.sum()), float(serves.mean()), float(np.median(error)))
            )  # fmt: skip
    names = [column.name for column in REGION_COLUMNS]
    return Table("families_by_region", pd.DataFrame(rows, columns=names), REGION_COLUMNS)


def _whole(counts: Sequence[int] | np.ndarray, known: BoolArray) -> pd.Series:
    """Counts as whole numbers, blank where not known."""
    return pd.Series(pd.array(np.asarray(counts), dtype="Int64")).where(pd.Series(known))
