"""Write the example study: ``python -m example_region.generate`` from the repository's root.

The same seed writes the same bytes. For experiments, `generate_region` draws other regions of the same
kind without writing anything.
"""

from __future__ import annotations

import argparse
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pyogrio
import shapely
import yaml

from example_region.basins import outline
from example_region.names import agency_identifiers, name_sites
from example_region.region import LAST_YEAR, LATER_YEAR, Region, generate_region
from example_region.tables import write_down
from example_region.terrain import GRID_CRS, REGION_NAMES
from example_region.truth import LogPearsonParents, describe_truth
from wrackline.stats.streams import random_stream
from wrackline.study.tables import write_table, write_text

__all__ = ["EXAMPLE_SEED", "generate_region", "write_study"]

EXAMPLE_SEED = 410
BASINS_CRS, REGIONS_CRS = "EPSG:32606", "EPSG:4326"
TRUE_AEPS = (0.9, 0.8, 0.5, 0.2, 0.1, 0.04, 0.02, 0.01, 0.005, 0.002)
CHANGING = ("regulated", "dam_by_period", "urbanising", "moved", "area_changed")
_REMARKS = (
    "",
    "road bridge, waterway to be widened",
    "proposed intake",
    "",
    "village, flood map under revision",
    "tailings dam, safety review",
    "",
    "culvert, silted in 2019",
)


def write_study(folder: Path, seed: int = EXAMPLE_SEED) -> Region:
    """Write all tables, polygons and the truth of the example below ``folder``; return the region."""
    region = generate_region(seed)
    original = region.gauges["gauge_id"].tolist()
    renamed = agency_identifiers(original, region.roles.taken(), seed)
    identifiers = [renamed.get(name, name) for name in original]
    study = write_down(region, identifiers)
    names = name_sites(region)
    without_polygon = _without_polygon(region)
    _write_gauges(folder, region, identifiers, names, without_polygon)
    _write_targets(folder, region, renamed, names)
    write_table(folder / "peaks.csv", study.peak_table(LAST_YEAR))
    write_table(folder / "peaks_later.csv", study.peak_table(LATER_YEAR))
    write_table(folder / "thresholds.csv", _sorted(study.thresholds, ["gauge_id", "first_year"]))
    write_table(folder / "periods.csv", _sorted(study.periods, ["gauge_id", "first_year"]))
    write_table(folder / "redundancy.csv", _sorted(study.redundancy, ["gauge_id", "other_id"]))
    write_table(folder / "ledger.csv", _whole_years(_sorted(study.ledger, ["date"])))
    _write_polygons(folder, region, identifiers, without_polygon)
    _write_truth(folder / "truth", region, identifiers)
    return region


def _sorted(rows: list[dict[str, object]], by: list[str]) -> pd.DataFrame:
    return pd.DataFrame(rows).sort_values(by, kind="stable").reset_index(drop=True)


def _whole_years(ledger: pd.DataFrame) -> pd.DataFrame:
    return ledger.assign(water_year=ledger["water_year"].astype("Int64").astype(object))


def _without_polygon(region: Region) -> list[int]:
    """Two gauges whose basins nobody has drawn; of the second not even the centroid is known."""
    free = [gauge for gauge in range(region.sites.n_gauges) if gauge not in region.roles.taken()]
    chosen = random_stream(region.seed, "example polygons").choice(free, 2, replace=False)
    return [int(gauge) for gauge in chosen]


def _write_gauges(
    folder: Path, region: Region, identifiers: list[str], names: list[str], without_polygon: list[int]
) -> None:
    frame = region.gauges.rename(columns={"area_km2": "area", "contributing_area_km2": "contributing_area"})
    frame = frame.drop(columns="centroid_source").assign(gauge_id=identifiers, name=names[: len(frame)])
    # Two dry basins hold hollows that never overflow.
    for gauge in region.roles.zero_flow[:2]:
        frame.loc[gauge, "contributing_area"] = float(f"{0.95 * region.sites.area_km2[gauge]:.3g}")
    frame.loc[without_polygon[1], ["centroid_latitude", "centroid_longitude"]] = np.nan
    write_table(folder / "gauges.csv", frame.sort_values("gauge_id").reset_index(drop=True))


def _write_targets(folder: Path, region: Region, renamed: dict[str, str], names: list[str]) -> None:
    frame = region.targets.rename(columns={"area_km2": "area"}).drop(columns="centroid_source")
    frame["name"] = names[region.sites.n_gauges :]
    for column in ("upstream_gauge", "downstream_gauge"):
        frame[column] = [renamed.get(name, name) for name in frame[column]]
    frame["remark"] = [_REMARKS[number % len(_REMARKS)] for number in range(len(frame))]
    write_table(folder / "targets.csv", frame)


def _write_polygons(folder: Path, region: Region, identifiers: list[str], without_polygon: list[int]) -> None:
    terrain, sites = region.terrain, region.sites
    drawn = [site for site in range(len(sites)) if site not in without_polygon]
    ids = [*identifiers, *region.targets["target_id"]]
    basins = geopandas.GeoDataFrame(
        {"site_id": [ids[site] for site in drawn]},
        geometry=[outline(terrain, terrain.basin_cells(int(sites.cell[site]))) for site in drawn],
        crs=GRID_CRS,
    ).sort_values("site_id", ignore_index=True)
    regions = geopandas.GeoDataFrame(
        {"region": list(REGION_NAMES)},
        geometry=[outline(terrain, np.flatnonzero(terrain.region == number)) for number in range(3)],
        crs=GRID_CRS,
    )
    _write_layer(folder / "basins.gpkg", "basins", basins.to_crs(BASINS_CRS), 1.0)
    _write_layer(folder / "regions.gpkg", "regions", regions.to_crs(REGIONS_CRS), 1e-5)


def _write_layer(path: Path, layer: str, frame: geopandas.GeoDataFrame, grid: float) -> None:
    """Write one layer with rounded coordinates and without the time of writing, so that bytes repeat."""
    frame = frame.set_geometry(shapely.set_precision(frame.geometry.array, grid), crs=frame.crs)
    path.unlink(missing_ok=True)
    pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": "2025-11-03T00:00:00.000Z"})
    try:
        frame.to_file(path, layer=layer, driver="GPKG", engine="pyogrio")
    finally:
        pyogrio.set_gdal_config_options({"OGR_CURRENT_DATE": None})


def _write_truth(folder: Path, region: Region, identifiers: list[str]) -> None:
    parents = region.parents
    if not isinstance(parents, LogPearsonParents):
        raise ValueError("the example's parents are log-Pearson III")
    quantiles = region.true_quantile_of_sites(TRUE_AEPS)
    columns: dict[str, object] = {
        "site_id": [*identifiers, *region.targets["target_id"]],
        "region": [REGION_NAMES[number] for number in region.sites.region],
        "mean_log10": np.round(parents.mean_log10, 6),
        "sd_log10": np.round(parents.sd_log10, 6),
        "skew_log10": np.round(parents.skew_log10, 6),
        "median_flow": [float(f"{flow:.6g}") for flow in region.true_quantile_of_sites(0.5)[:, 0]],
    }
    for number, aep in enumerate(TRUE_AEPS):
        columns[f"flow_aep_{aep:g}"] = [float(f"{flow:.6g}") for flow in quantiles[:, number]]
    write_table(
        folder / "truth_sites.csv", pd.DataFrame(columns).sort_values("site_id").reset_index(drop=True)
    )
    text = "# The truth behind the example. The study never reads it.\n"
    write_text(
        folder / "truth.yaml", text + yaml.safe_dump(describe_truth(region.seed), sort_keys=False, width=100)
    )
    write_table(folder / "roles.csv", _role_table(region, identifiers))


def _role_table(region: Region, identifiers: list[str]) -> pd.DataFrame:
    """Return who plays which awkward part, with the other gauge of a pair and the year of a change."""
    roles, rows = region.roles, []
    for part in roles.parts():
        for gauge in getattr(roles, part):
            year = roles.change_year[gauge] if part in CHANGING else None
            rows.append((part, identifiers[gauge], "", year))
    rows += [("redundant", identifiers[one], identifiers[other], None) for one, other in roles.redundant]
    frame = pd.DataFrame(rows, columns=["part", "gauge_id", "other_id", "change_year"])
    frame["change_year"] = frame["change_year"].astype("Int64").astype(object)
    return frame.sort_values(["part", "gauge_id"], kind="stable").reset_index(drop=True)


def main() -> None:
    parser = argparse.ArgumentParser(description="Write the example study.")
    parser.add_argument(
        "--into", type=Path, default=Path(__file__).resolve().parent, help="folder to write into"
    )
    parser.add_argument("--seed", type=int, default=EXAMPLE_SEED, help="seed of all draws")
    arguments = parser.parse_args()
    arguments.into.mkdir(parents=True, exist_ok=True)
    region = write_study(arguments.into, arguments.seed)
    print(f"{len(region.gauges)} gauges and {len(region.targets)} targets written into {arguments.into}")


if __name__ == "__main__":
    main()
