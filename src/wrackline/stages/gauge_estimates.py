"""Floods at gauges from every source, and the one that the study adopts."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy.special import ndtri, stdtrit

from wrackline.hydrology.quantile_regression import order_floods
from wrackline.hydrology.record_fits import SkewFit
from wrackline.hydrology.records import FloatArray
from wrackline.hydrology.routes import weigh_with_record
from wrackline.stages.gauge_floods import GaugeFloods
from wrackline.study.config import StudyConfig
from wrackline.study.tables import Column

SOURCES = ("station", "weighted_skew", "regression", "record_and_regression")
PREFERENCE = ("record_and_regression", "weighted_skew", "station", "regression")
GAUGE_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column(
        "source",
        "text",
        "station: own record; weighted_skew: record with the weighted skew; regression: the adopted regional route without the gauge; record_and_regression: the last two weighed by their variances",
    ),
    Column("flow", "flow", "estimated flood"),
    Column("lower", "flow", "lower end of the interval"),
    Column("upper", "flow", "upper end of the interval"),
    Column("se_log10", "log10", "standard error of log10 flow"),
    Column("adopted", "true/false", "whether this source is the study's answer for the gauge"),
)


@dataclass(frozen=True)
class GaugeEstimates:
    """Floods at g gauges by source.

    Attributes
    ----------
    gauge_ids : tuple of str
    aeps : (p,)
    sources : by name, log10 flow, lower, upper and standard error, (g, p) each
    adopted : per gauge, the name of its source; blank: none
    log10_flow, variance : (g, p)
        Of the adopted source.
    """

    gauge_ids: tuple[str, ...]
    aeps: FloatArray
    sources: dict[str, tuple[FloatArray, FloatArray, FloatArray, FloatArray]]
    adopted: tuple[str, ...]
    log10_flow: FloatArray
    variance: FloatArray


def estimate_gauges(
    config: StudyConfig, gauge_ids: list[str], floods: GaugeFloods, regional: pd.DataFrame, route: str
) -> GaugeEstimates:
    """Weigh every record with the region's estimate made without it, and adopt one source a gauge.

    Parameters
    ----------
    floods : GaugeFloods of the gauges
    regional : table of `regional_left_out.csv`
    route : str
        The adopted regional route.
    """
    assert floods.fits.weighted is not None
    own, shape = regional[regional["route"] == route], floods.log10_flow.shape
    index = pd.MultiIndex.from_product([gauge_ids, floods.aeps.tolist()])
    rows = own.set_index(["gauge_id", "aep"]).reindex(index)
    predicted, variance = (rows[name].to_numpy(float).reshape(shape) for name in ("log10_flow", "variance"))
    freedom = float(own["degrees_of_freedom"].min()) if len(own) else 1.0
    predicted = _ordered(predicted)
    record = floods.fits.weighted if config.skew.adopted == "weighted_skew" else floods.fits.station
    both, both_variance = weigh_with_record(record.log10_quantile, record.log10_se**2, predicted, variance)
    both = _ordered(both)
    z = float(ndtri(0.5 + config.confidence / 2))
    t = float(stdtrit(freedom, 0.5 + config.confidence / 2))
    sources = {
        "station": _of_fit(floods.fits.station),
        "weighted_skew": _of_fit(floods.fits.weighted),
        "regression": _interval(predicted, np.sqrt(variance), t),
        "record_and_regression": _interval(both, np.sqrt(both_variance), z),
    }
    preference = [one for one in PREFERENCE if one != "weighted_skew" or config.skew.adopted == one]
    adopted = tuple(
        next(
            (
                s
                for s in preference
                if np.isfinite(sources[s][0][i]).all() and np.isfinite(sources[s][3][i]).all()
            ),
            "",
        )
        for i in range(len(gauge_ids))
    )
    flow, spread = np.full(shape, np.nan), np.full(shape, np.nan)
    for i, source in enumerate(adopted):
        if source:
            flow[i], spread[i] = sources[source][0][i], sources[source][3][i] ** 2
    return GaugeEstimates(tuple(gauge_ids), floods.aeps, sources, adopted, flow, spread)


def _ordered(log10_flow: FloatArray) -> FloatArray:
    """Floods in order of probability; rows with gaps stay as they are."""
    whole = np.isfinite(log10_flow).all(axis=1)
    ordered = log10_flow.copy()
    ordered[whole] = order_floods(log10_flow[whole])[0]
    return ordered


def _of_fit(fit: SkewFit) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    return fit.log10_quantile, fit.log10_lower, fit.log10_upper, fit.log10_se


def _interval(
    log10_flow: FloatArray, se: FloatArray, reach: float
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    return log10_flow, log10_flow - reach * se, log10_flow + reach * se, se


def gauge_table(config: StudyConfig, estimates: GaugeEstimates, records: pd.DataFrame) -> pd.DataFrame:
    """A row per gauge, probability and source that has an estimate.

    ``records``: rows of the sources station and weighted_skew for all gauges with a natural record, as the stage
    `weight` made them.
    """
    shown = np.isin(estimates.aeps, config.aeps.gauges)
    regional = SOURCES[2:]
    names = [column.name for column in GAUGE_COLUMNS if column.name != "adopted"]
    source_of = dict(zip(estimates.gauge_ids, estimates.adopted, strict=True))
    adopted = [
        source == source_of.get(gauge, "")
        for gauge, source in zip(records["gauge_id"], records["source"], strict=True)
    ]
    frames = [records[names].assign(adopted=np.array(adopted, dtype=bool))]
    frames += [_source_rows(config, estimates, name, shown) for name in regional]
    frame = pd.concat(frames, ignore_index=True)
    order = frame["source"].map({name: i for i, name in enumerate(SOURCES)})
    return (
        frame.assign(order=order)
        .sort_values(["gauge_id", "aep", "order"], ascending=[True, False, True], kind="stable")
        .drop(columns="order")
        .reset_index(drop=True)
    )


def _source_rows(
    config: StudyConfig, estimates: GaugeEstimates, name: str, shown: np.ndarray
) -> pd.DataFrame:
    flow, lower, upper, se = (part[:, shown] for part in estimates.sources[name])
    there = np.isfinite(flow).all(axis=1)
    n, p = int(there.sum()), int(shown.sum())
    ids = np.array(estimates.gauge_ids, dtype=object)
    adopted = np.array(estimates.adopted, dtype=object)
    return pd.DataFrame(
        {
            "gauge_id": np.repeat(ids[there], p),
            "aep": np.tile(estimates.aeps[shown], n),
            "source": name,
            "flow": 10 ** flow[there].ravel() / config.flow_in_m3s,
            "lower": 10 ** lower[there].ravel() / config.flow_in_m3s,
            "upper": 10 ** upper[there].ravel() / config.flow_in_m3s,
            "se_log10": se[there].ravel(),
            "adopted": np.repeat(adopted[there] == name, p),
        }
    )
