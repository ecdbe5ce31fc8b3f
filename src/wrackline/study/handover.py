"""What stages hand to each other: records and sites as exact, byte-stable tables below ``work/``."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.study.tables import read_table, write_table

SITE_TEXT = ("name", "region", "centroid_source", "upstream_gauge", "downstream_gauge", "remark", "reasons")


def write_records(path: Path, records: PeakRecords) -> None:
    """Write records, one row per gauge and water year; unbounded ends are blank."""
    write_table(
        path,
        pd.DataFrame(
            {
                "gauge_id": np.array(records.gauge_ids, dtype=object)[records.gauge_index],
                "water_year": records.water_year,
                "flow_low": records.flow_low,
                "flow_high": records.flow_high,
                "perception_low": records.perception_low,
                "perception_high": records.perception_high,
                "historic": records.historic,
                "observed": records.observed,
                "cause": records.cause,
            }
        ),
    )


def read_records(path: Path, gauge_ids: list[str]) -> PeakRecords:
    """Read records back for the given gauges, in the given order; a gauge without rows stays, empty."""
    frame = read_table(path, text=("cause",))
    number = {gauge_id: i for i, gauge_id in enumerate(gauge_ids)}
    frame = frame[frame["gauge_id"].isin(gauge_ids)]
    gauge = frame["gauge_id"].map(number).to_numpy(dtype=np.int64)
    order = np.lexsort((frame["water_year"].to_numpy(), gauge))
    frame, gauge = frame.iloc[order], gauge[order]
    counts = np.bincount(gauge, minlength=len(gauge_ids))
    return PeakRecords(
        gauge_ids=tuple(gauge_ids),
        offsets=np.concatenate([[0], np.cumsum(counts)]).astype(np.int64),
        water_year=frame["water_year"].to_numpy(dtype=np.int64),
        flow_low=frame["flow_low"].to_numpy(dtype=float),
        flow_high=frame["flow_high"].fillna(np.inf).to_numpy(dtype=float),
        perception_low=frame["perception_low"].to_numpy(dtype=float),
        perception_high=frame["perception_high"].fillna(np.inf).to_numpy(dtype=float),
        historic=frame["historic"].to_numpy(dtype=bool),
        observed=frame["observed"].to_numpy(dtype=bool),
        cause=frame["cause"].to_numpy(dtype=np.str_),
    )


def read_sites(path: Path) -> pd.DataFrame:
    """Read a table of gauges or targets as a stage wrote it."""
    return read_table(path, text=SITE_TEXT)
