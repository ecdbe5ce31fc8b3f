"""An invented study of any size, for drills and benchmarks: ``python tests/benchmarks/synthetic_study.py FOLDER GAUGES``."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
import yaml

FEW_SIMULATIONS = {"simulations": 100, "close_call_simulations": 100, "growth_simulations": 100}


def write_study(
    folder: Path, gauges: int, targets: int = 4, seed: int = 7, last_year: int = 2024, **parts: dict[str, Any]
) -> Path:
    """Write a study with floods that depend on area and rain, and on common wet years; return its study file.

    Keyword arguments are parts of the study file.
    """
    folder.mkdir(parents=True)
    stream = np.random.default_rng(seed)
    sites = _sites(stream, gauges + targets)
    known = sites.iloc[:gauges].rename(columns={"site": "gauge_id"})
    known["gauge_id"] = [f"{number:06d}" for number in range(1, gauges + 1)]
    wanted = sites.iloc[gauges:].rename(columns={"site": "target_id"})
    wanted["target_id"] = [f"T{number:03d}" for number in range(1, targets + 1)]
    known.to_csv(folder / "gauges.csv", index=False)
    wanted.to_csv(folder / "targets.csv", index=False)
    _peaks(stream, known, last_year).to_csv(folder / "peaks.csv", index=False)
    content: dict[str, Any] = {
        "study": {"title": f"Invented region of {gauges} gauges"},
        "inputs": {"gauges": "gauges.csv", "peaks": "peaks.csv", "targets": "targets.csv"},
        "attributes": {"rain": {"unit": "mm", "transform": "log10"}},
        "index_flood": {"attributes": ["area", "rain"]},
        "regression": {"attributes": ["area", "rain"]},
        **parts,
    }
    study = folder / "study.yaml"
    study.write_text(yaml.safe_dump(content, sort_keys=False), encoding="utf-8")
    return study


def add_year(peaks: Path, gauge_id: str, water_year: int, flow: float) -> None:
    """Give one gauge a new year."""
    with peaks.open("a", encoding="utf-8") as file:
        file.write(f"{gauge_id},{water_year},{flow}\n")


def _sites(stream: np.random.Generator, count: int) -> pd.DataFrame:
    longitude = stream.uniform(10, 16, count)
    area = np.round(10 ** stream.uniform(1, 3.3, count), 1)
    rain = np.round(600 + 900 * stream.beta(2, 2, count), 0)
    return pd.DataFrame(
        {
            "site": "",
            "name": [f"Site {number}" for number in range(count)],
            "latitude": np.round(stream.uniform(50, 54, count), 5),
            "longitude": np.round(longitude, 5),
            "area": area,
            "region": np.where(longitude < 13, "west", "east"),
            "rain": rain,
        }
    )


def _peaks(stream: np.random.Generator, gauges: pd.DataFrame, last_year: int) -> pd.DataFrame:
    wet = stream.normal(0, 0.12, 400)
    rows = []
    for gauge_id, area, rain, region in gauges[["gauge_id", "area", "rain", "region"]].itertuples(
        index=False
    ):
        n = int(stream.integers(25, 70))
        years = np.arange(last_year - n + 1, last_year + 1)
        level = 0.75 * np.log10(area) + 1.5 * np.log10(rain / 1000) + stream.normal(0, 0.08)
        noise = stream.gamma(12, 1, n)
        shape = (noise - 12) / np.sqrt(12) * (0.2 if region == "west" else 0.25)
        flow = 10 ** (level + wet[years - last_year + 200] + shape)
        rows.append(pd.DataFrame({"gauge_id": gauge_id, "water_year": years, "flow": np.round(flow, 3)}))
    return pd.concat(rows, ignore_index=True)


if __name__ == "__main__":
    print(write_study(Path(sys.argv[1]), int(sys.argv[2])))
