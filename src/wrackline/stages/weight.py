"""Stage `weight`: floods at gauges with the station skew weighted by the generalized skew."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from wrackline.hydrology.at_site import fit_records
from wrackline.hydrology.record_fits import RecordFits
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.report.figures_skew import draw_weighting
from wrackline.report.rounding import format_flow, format_percent, format_unit
from wrackline.stages.atsite_tables import ESTIMATE_COLUMNS, MOMENT_COLUMNS
from wrackline.stages.running import StudyFiles, main
from wrackline.stats.skew_variance import skew_weight
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import Contribution, Figure, PageTable, Section, write_contribution
from wrackline.study.faults import FaultLog
from wrackline.study.handover import read_records, read_sites
from wrackline.study.tables import Column, Table, read_table, write_table

NOTEWORTHY = 0.5
"""Difference of station and generalized skew at which guidelines ask to inspect the basin."""
MOST_ROWS = 40
RECORD_COLUMNS = (
    *ESTIMATE_COLUMNS[:2],
    Column("source", "text", "station: the record with its own skew; weighted_skew: with the weighted skew"),
    *ESTIMATE_COLUMNS[3:-1],
    Column("used", "true/false", "the regional analysis uses the gauge"),
)
"""Of every gauge that has a fit, also where the regional analysis does not use it."""
OWN_CODES = ("skews_differ", "not_weighted", "no_station_fit")
"""Warnings that only a weighted fit can have; the stage `atsite` has told the others."""


@dataclass(frozen=True)
class Weighted:
    """Weighted fits of all gauges with a natural record, in the order of ``gauge_ids``."""

    gauge_ids: list[str]
    used: BoolArray
    fits: RecordFits
    skew: FloatArray
    mse: FloatArray

    @property
    def fitted(self) -> BoolArray:
        """Gauges with a weighted fit."""
        assert self.fits.weighted is not None
        return np.asarray(np.isfinite(self.fits.weighted.log10_quantile).all(axis=1), dtype=bool)


def run(study: StudyFiles) -> str:
    """Fit all gauges with weighted skews; write ``work/weight``."""
    config, folder = study.config, study.work("weight")
    weighted = fit_weighted(study)
    station = study.work("atsite")
    moments = complete_moments(read_table(station / "gauge_moments.csv", text=("reasons",)), weighted)
    estimates = join_estimates(
        config, read_table(station / "gauge_estimates.csv", text=("source",)), weighted
    )
    write_table(folder / "moments.csv", work_moments(weighted))
    at = np.flatnonzero(weighted.fitted & weighted.used)
    figures: tuple[Figure, ...] = ()
    if len(at):
        draw_weighting(folder / "figures" / "weighting.png", *_effect(config, weighted, at))
        figures = (
            Figure(
                "weighting.png",
                "Left: weighted against station skew; dots on the line would be unchanged. Right: change of the "
                f"{format_percent(_rare(config), 2)} flood by the weighting, against years of record.",
                "Two scatter plots: weighted against station skew, and change of a rare flood against record length.",
            ),
        )
    faults = FaultLog()
    _warn(weighted, faults)
    tables = (
        Table("gauge_moments", moments, MOMENT_COLUMNS),
        Table("record_estimates", estimates, RECORD_COLUMNS),
    )
    section = _section(config, weighted, at, figures)
    write_contribution(folder, Contribution("weight", tables, (section,), tuple(faults.warnings)))
    return f"{int(weighted.fitted.sum())} gauges fitted with weighted skew"


def fit_weighted(study: StudyFiles) -> Weighted:
    """Fit every natural record with its generalized skew, low floods as in the station fits."""
    config = study.config
    moments = read_table(study.work("atsite") / "moments.csv")
    ids = moments["gauge_id"].tolist()
    screened = read_sites(study.work("screen") / "gauges.csv").set_index("gauge_id").loc[ids]
    flags = read_table(study.work("screen") / "gauges.csv", text=("flags", "reasons")).set_index("gauge_id")
    natural = screened["used"].to_numpy(dtype=bool) | np.array(
        ["regulated" not in text.split() for text in flags.loc[ids, "flags"]], dtype=bool
    )
    sites = read_table(study.work("skew") / "sites.csv").set_index("site_id")
    sites = sites[sites["gauge"]].loc[ids]
    skew, mse = (sites[name].to_numpy(dtype=float) for name in ("generalized_skew", "generalized_skew_mse"))
    records = read_records(study.work("intake") / "records.csv", ids)
    fits = fit_records(
        records.keep_rows(natural[records.gauge_index]),
        skew,
        mse,
        aeps=config.aeps.gauges,
        confidence=config.confidence,
        low_flood_thresholds=moments["low_outlier_threshold_set_m3s"].to_numpy(dtype=float),
        skew_bound=np.inf if config.at_site.skew_bound is None else config.at_site.skew_bound,
    )
    return Weighted(ids, screened["used"].to_numpy(dtype=bool), fits, skew, mse)


def complete_moments(station: pd.DataFrame, weighted: Weighted) -> pd.DataFrame:
    """Return the table of moments with generalized and weighted skews filled in."""
    frame = station.copy()
    fit = weighted.fits.weighted
    assert fit is not None
    assert frame["gauge_id"].tolist() == weighted.gauge_ids
    known = frame["mean_log10"].notna().to_numpy() | weighted.fitted
    frame["generalized_skew"] = np.where(known, weighted.skew, np.nan)
    frame["generalized_skew_mse"] = np.where(known, weighted.mse, np.nan)
    frame["weighted_skew"] = np.where(weighted.fitted, fit.moments.skew, np.nan)
    frame["weighted_skew_mse"] = np.where(weighted.fitted, fit.skew_mse, np.nan)
    own = [
        "; ".join(w.text for w in warnings if w.code in OWN_CODES) if known[i] else ""
        for i, warnings in enumerate(weighted.fits.warnings)
    ]
    frame["reasons"] = [
        "; ".join(text for text in both if text) for both in zip(frame["reasons"], own, strict=True)
    ]
    return frame


def join_estimates(config: StudyConfig, station: pd.DataFrame, weighted: Weighted) -> pd.DataFrame:
    """Return the estimates by station and by weighted skew of every gauge that has a fit."""
    fit, unit = weighted.fits.weighted, config.flow_in_m3s
    assert fit is not None
    at = np.flatnonzero(weighted.fitted)
    a = len(weighted.fits.aeps)
    with_skew = pd.DataFrame(
        {
            "gauge_id": np.repeat(np.array(weighted.gauge_ids, dtype=object)[at], a),
            "aep": np.tile(weighted.fits.aeps, len(at)),
            "source": "weighted_skew",
            "flow": fit.flow[at].ravel() / unit,
            "lower": fit.lower[at].ravel() / unit,
            "upper": fit.upper[at].ravel() / unit,
            "se_log10": fit.log10_se[at].ravel(),
        }
    )
    both = pd.concat([station.drop(columns="adopted"), with_skew], ignore_index=True)
    used = dict(zip(weighted.gauge_ids, weighted.used, strict=True))
    both["used"] = [bool(used[gauge]) for gauge in both["gauge_id"]]
    both["rank"] = -both["aep"]
    both = both.sort_values(["gauge_id", "source", "rank"], kind="stable", ignore_index=True)
    return both.drop(columns="rank")


def work_moments(weighted: Weighted) -> pd.DataFrame:
    """Return weighted fits with every digit, m3/s and base-10 logarithms, for later stages."""
    fit = weighted.fits.weighted
    assert fit is not None
    frame = pd.DataFrame({"gauge_id": weighted.gauge_ids, "used": weighted.used, "fitted": weighted.fitted})
    frame["mean_log10"], frame["sd_log10"] = fit.moments.mean, fit.moments.sd
    frame["weighted_skew"], frame["weighted_skew_mse"] = fit.moments.skew, fit.skew_mse
    frame["station_skew_weight"] = skew_weight(fit.station_skew_mse, weighted.mse)
    frame["generalized_skew"], frame["generalized_skew_mse"] = weighted.skew, weighted.mse
    for i, first in enumerate(("mean", "var", "skew")):
        for j, second in enumerate(("mean", "var", "skew")[i:], start=i):
            frame[f"cov_{first}_{second}"] = fit.covariance[:, i, j]
    return frame


def _rare(config: StudyConfig) -> float:
    """The probability of the study nearest to 0.01, by which effects are told."""
    return min(config.aeps.gauges, key=lambda aep: abs(np.log(aep / 0.01)))


def _effect(
    config: StudyConfig, weighted: Weighted, at: np.ndarray
) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Station skew, weighted skew, years, and the ratio of the rare flood with weighting to that without."""
    fits, place = weighted.fits, config.aeps.gauges.index(_rare(config))
    assert fits.weighted is not None
    ratio = 10 ** (fits.weighted.log10_quantile[at, place] - fits.station.log10_quantile[at, place])
    years = fits.record_years[at].astype(float)
    return fits.station.moments.skew[at], fits.weighted.moments.skew[at], years, ratio


def _warn(weighted: Weighted, faults: FaultLog) -> None:
    if not np.isfinite(weighted.skew).any():
        return
    for i in np.flatnonzero(weighted.used):
        for warning in weighted.fits.warnings[i]:
            if warning.code in OWN_CODES:
                faults.warning(
                    warning.code,
                    "weight",
                    f"Gauge {weighted.gauge_ids[i]}: {warning.text}.",
                    "Inspect the basin and the record: is the gauge like its region?"
                    if warning.code == "skews_differ"
                    else "Lean on the regional estimate.",
                    value=weighted.gauge_ids[i],
                )


def _section(config: StudyConfig, weighted: Weighted, at: np.ndarray, figures: tuple[Figure, ...]) -> Section:
    method = (
        "Station and generalized skew weighted inversely to their mean square errors inside the expected moments algorithm "
        "(Griffis, Stedinger and Cohn, 2004). Gauges of the skew model are weighted with the model without them, so that no record "
        "counts twice.",
    )
    if len(at) == 0:
        lack = "No gauge has a generalized skew; the fits with station skews stand."
        return Section("weighted", "Weighted fits", (lack,), method=method)
    station, final, _, ratio = _effect(config, weighted, at)
    fit = weighted.fits.weighted
    assert fit is not None
    share = skew_weight(fit.station_skew_mse, weighted.mse)[at]
    change = np.abs(ratio - 1)
    rare = format_percent(_rare(config), 2)
    words = [
        f"{len(at)} used gauges were fitted anew with weighted skew. The station's own skew carries {format_percent(float(np.median(share)), 2)} "
        f"of the weight in the middle ({format_percent(float(share.min()), 2)} to {format_percent(float(share.max()), 2)}).",
    ]
    seen = np.isfinite(change)
    if seen.any():
        largest = int(np.nanargmax(change))
        words.append(
            f"The weighting changes the {rare} flood by {format_percent(float(np.median(change[seen])), 2)} in the middle; the "
            f"most at {weighted.gauge_ids[at[largest]]}, from a factor of 1 to {ratio[largest]:.2f} (station skew "
            f"{station[largest]:.2f}, weighted {final[largest]:.2f})."
        )
    adopted = "weighted skew" if config.skew.adopted == "weighted_skew" else "station skew"
    words.append(
        f"The study adopts the floods with {adopted} at gauges; both stand in the table gauge_estimates."
    )
    apart = np.flatnonzero(np.abs(station - weighted.skew[at]) > NOTEWORTHY)
    if len(apart):
        words.append(
            f"At {len(apart)} gauges station and generalized skew differ by more than {NOTEWORTHY:g}: inspect their basins and records."
        )
    return Section(
        key="weighted",
        title="Weighted fits",
        paragraphs=tuple(words),
        figures=figures,
        tables=_apart_rows(config, weighted, at[apart]),
        method=method,
    )


def _apart_rows(config: StudyConfig, weighted: Weighted, gauges: np.ndarray) -> tuple[PageTable, ...]:
    fits, place = weighted.fits, config.aeps.gauges.index(_rare(config))
    assert fits.weighted is not None
    order = gauges[np.argsort(-np.abs(fits.station.moments.skew - weighted.skew)[gauges], kind="stable")]
    rows = tuple(
        (
            weighted.gauge_ids[i],
            str(int(fits.record_years[i])),
            f"{fits.station.moments.skew[i]:.2f}",
            f"{weighted.skew[i]:.2f}",
            f"{fits.weighted.moments.skew[i]:.2f}",
            format_flow(fits.station.flow[i, place] / config.flow_in_m3s),
            format_flow(fits.weighted.flow[i, place] / config.flow_in_m3s),
        )
        for i in order[:MOST_ROWS]
    )
    if not rows:
        return ()
    flood = f"{format_percent(_rare(config), 2)} flood, {format_unit(config.units.flow)}"
    head = ("gauge", "years", "station skew", "generalized", "weighted", f"{flood}: station", "weighted")
    caption = f"Gauges whose station and generalized skew differ by more than {NOTEWORTHY:g}."
    return (PageTable(caption, head, rows, "tables/gauge_moments.csv"),)


if __name__ == "__main__":
    main("weight", run)
