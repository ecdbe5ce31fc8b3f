"""The example's data: reproducible, faultless, as awkward as promised, and true to its own truth."""

import hashlib
import shutil
import sys
from pathlib import Path

import geopandas
import numpy as np
import pandas as pd
import pytest
import shapely
import yaml

from wrackline.stats.pearson3 import frequency_factor
from wrackline.study.config import FLAG_NAMES
from wrackline.study.inputs import read_study

ROOT = Path(__file__).resolve().parents[2]
sys.path.insert(0, str(ROOT))

from example_region.generate import EXAMPLE_SEED, generate_region, write_study  # noqa: E402
from example_region.terrain import GRID_CRS, REGION_NAMES  # noqa: E402
from example_region.truth import flood_correlation  # noqa: E402

EXAMPLE = ROOT / "example_region"
TEXT_FILES = [
    *("gauges", "peaks", "peaks_later", "thresholds", "periods", "targets", "redundancy", "ledger"),
    *("truth/truth_sites", "truth/roles"),
]
NUMBERS = {
    *("latitude", "longitude", "area", "water_year", "flow", "low", "high", "first_year", "last_year"),
    *("mean_log10", "sd_log10", "skew_log10", "median_flow", "flow_aep_0.01"),
}


def read_table(name):
    """Read a table without the product's own reader: text as it stands, blank numbers as NaN."""
    frame = pd.read_csv(EXAMPLE / f"{name}.csv", dtype=str, keep_default_na=False)
    return frame.assign(**{column: pd.to_numeric(frame[column]) for column in NUMBERS & set(frame)})


@pytest.fixture(scope="module")
def rewritten(tmp_path_factory):
    folder = tmp_path_factory.mktemp("vell")
    region = write_study(folder)
    return folder, region


@pytest.fixture(scope="module")
def peaks():
    return read_table("peaks")


@pytest.fixture(scope="module")
def roles():
    return read_table("truth/roles")


@pytest.fixture(scope="module")
def basins():
    return geopandas.read_file(EXAMPLE / "basins.gpkg", layer="basins").set_index("site_id")


def geometry_digest(path):
    frame = geopandas.read_file(path)
    digest = hashlib.sha256()
    for name, shape in sorted(zip(frame.iloc[:, 0], frame.geometry, strict=True)):
        digest.update(f"{name} {shapely.normalize(shape).wkb_hex}".encode())
    return digest.hexdigest()


@pytest.mark.parametrize("name", TEXT_FILES)
def test_regenerating_writes_the_committed_bytes(rewritten, name):
    assert (EXAMPLE / f"{name}.csv").read_bytes() == (rewritten[0] / f"{name}.csv").read_bytes()


def test_regenerating_writes_the_committed_truth(rewritten):
    assert (EXAMPLE / "truth/truth.yaml").read_bytes() == (rewritten[0] / "truth/truth.yaml").read_bytes()


@pytest.mark.parametrize("name", ["basins.gpkg", "regions.gpkg"])
def test_regenerating_draws_the_committed_polygons(rewritten, name):
    assert geometry_digest(EXAMPLE / name) == geometry_digest(rewritten[0] / name)


def test_another_seed_gives_another_region():
    one, other = generate_region(1), generate_region(2)
    assert not np.array_equal(one.sites.cell, other.sites.cell)
    assert one.records.flow_low[:50].tolist() != other.records.flow_low[:50].tolist()


def test_the_repository_carries_less_than_3_mb_of_it():
    made_by_a_run = {"results", "work", "editions", ".snakemake", "__pycache__"}
    carried = (p for p in EXAMPLE.rglob("*.*") if not made_by_a_run & set(p.relative_to(EXAMPLE).parts))
    assert sum(path.stat().st_size for path in carried) < 3_000_000


@pytest.mark.parametrize("peaks_file", ["peaks.csv", "peaks_later.csv"])
def test_the_study_reads_without_a_problem(tmp_path, peaks_file):
    names = ["study.yaml", *(f"{name}.csv" for name in TEXT_FILES[:8]), "basins.gpkg", "regions.gpkg"]
    for name in names:
        shutil.copy(EXAMPLE / name, tmp_path / name)
    shutil.copy(EXAMPLE / peaks_file, tmp_path / "peaks.csv")
    study = read_study(tmp_path / "study.yaml")
    assert (len(study.gauges), len(study.targets)) == (120, 24)
    # One gauge has neither polygon nor centroid, on purpose; nothing else is to be said.
    assert [w.file for w in study.warnings] == ["gauges.csv"]


def test_the_later_peaks_are_the_peaks_and_water_year_2025(peaks):
    later = read_table("peaks_later")
    new = later["water_year"] == 2025
    assert 80 < new.sum() <= 120
    pd.testing.assert_frame_equal(later[~new].reset_index(drop=True), peaks)


def test_polygons_have_the_stated_areas(basins):
    gauges, targets = read_table("gauges"), read_table("targets")
    stated = pd.concat([gauges.set_index("gauge_id")["area"], targets.set_index("target_id")["area"]])
    drawn = basins.to_crs(GRID_CRS).area / 1e6
    assert basins.crs.is_projected
    assert len(stated) - len(drawn) == 2
    # Areas are stated to four digits and the outline is kept to a metre.
    np.testing.assert_allclose(drawn, stated[drawn.index], rtol=0.002)


def test_nested_basins_lie_within_each_other(rewritten, basins):
    region = rewritten[1]
    ids = [*read_ids(region)]
    cells, checked = region.sites.cell, 0
    for lower in range(len(ids)):
        for upper in np.flatnonzero(region.terrain.drains_through(cells, int(cells[lower]))):
            if upper != lower and ids[upper] in basins.index and ids[lower] in basins.index:
                inner, outer = basins.geometry[ids[upper]], basins.geometry[ids[lower]]
                # The outline is kept to a metre, so common boundaries may differ by as much.
                assert inner.difference(outer).area < 0.001 * inner.area
                checked += 1
    assert checked > 50


def read_ids(region):
    """Identifiers in the order of the region's sites: by longitude and latitude, which no two sites share."""
    tables = read_table("gauges"), read_table("targets")
    at = {(row.longitude, row.latitude): row[1] for table in tables for row in table.itertuples()}
    return [at[place] for place in zip(region.sites.longitude[0], region.sites.latitude[0], strict=True)]


def test_every_site_lies_in_the_region_it_names():
    regions = geopandas.read_file(EXAMPLE / "regions.gpkg").set_index("region").geometry
    assert list(REGION_NAMES) == regions.index.tolist()
    for name in ("gauges", "targets"):
        table = read_table(name)
        places = shapely.points(table["longitude"], table["latitude"])
        for region, place in zip(table["region"], places, strict=True):
            # A gauge stands in the middle of its cell of 1.5 km; the smoothed outline may cut a corner.
            assert regions[region].distance(place) < 0.01


def test_identifiers_keep_their_leading_zeros(peaks):
    gauges = read_table("gauges")
    assert gauges["gauge_id"].str.startswith("0").sum() == 118
    assert set(peaks["gauge_id"]) == set(gauges["gauge_id"])


def test_every_flag_state_and_kind_of_bound_occurs(peaks):
    periods = read_table("periods")
    assert set(FLAG_NAMES) == {flag for cell in peaks["flags"] for flag in cell.split()}
    assert {"regulated", "urbanised", "moved", "area_changed"} == set(periods["state"])
    bounds = peaks[peaks["flow"].isna()]
    assert (bounds["low"].notna() & bounds["high"].notna()).sum() >= 5
    assert (bounds["low"].notna() & bounds["high"].isna()).sum() == 1
    assert (bounds["low"].isna() & bounds["high"].notna()).sum() >= 3
    assert {4, 7, 10} <= set(peaks["date"].str.len())
    assert {"rain", "snowmelt", "rain_on_snow", "tropical_storm", "ice_jam"} <= set(peaks["cause"])


def test_zero_flows_stand_at_the_dry_gauges_alone(peaks, roles):
    dry = set(roles.loc[roles["part"] == "zero_flow", "gauge_id"])
    assert dry == set(peaks.loc[peaks["flow"] == 0, "gauge_id"])


def test_short_gauges_have_six_to_nine_years(peaks, roles):
    counts = peaks.groupby("gauge_id").size()
    assert sorted(counts[roles.loc[roles["part"] == "short", "gauge_id"]]) == [6, 7, 8, 9]
    assert counts.max() > 90


def test_historic_floods_reach_their_threshold(peaks):
    thresholds = read_table("thresholds")
    historic = peaks[peaks["kind"] == "historic"]
    assert len(historic) >= 6
    for row in historic.itertuples():
        span = thresholds[
            (thresholds["gauge_id"] == row.gauge_id)
            & (thresholds["first_year"] <= row.water_year)
            & (thresholds["last_year"] >= row.water_year)
        ]
        assert len(span) == 1
        assert span["low"].iloc[0] <= (row.low if np.isnan(row.flow) else row.flow)


def test_recorded_medians_agree_with_the_true_medians(peaks, roles):
    truth = read_table("truth/truth_sites").set_index("site_id")
    odd = set(roles["gauge_id"]) | set(roles["other_id"])
    tame = peaks[~peaks["gauge_id"].isin(odd) & peaks["flow"].notna() & (peaks["kind"] == "")]
    record = np.log10(tame.set_index("gauge_id")["flow"]).groupby(level=0)
    median, n = record.median(), record.size()
    of = truth.loc[median.index]
    # Standard error of a median; for skews below 0.4 the density there is normal within 1 %.
    standard_error = of["sd_log10"] * np.sqrt(np.pi / 2 / n)
    z = (median - np.log10(of["median_flow"])) / standard_error
    assert len(z) > 60
    assert abs(z).max() < 4
    assert (
        0.75 < np.sqrt((z**2).mean()) < 1.3
    )  # floods of one year go together, so the mean square is unsteady


def test_true_quantiles_are_those_of_log_pearson_iii(rewritten):
    region, aeps = rewritten[1], np.array([0.9, 0.5, 0.1, 0.01, 0.002])
    parents = region.parents
    factor = frequency_factor(aeps[None, :], parents.skew_log10[:, None])
    expected = 10 ** (parents.mean_log10[:, None] + parents.sd_log10[:, None] * factor)
    np.testing.assert_allclose(expected, region.true_quantile_of_sites(aeps), rtol=1e-6)
    assert region.true_quantile(aeps).shape == (24, 5)
    table = read_table("truth/truth_sites").set_index("site_id")
    np.testing.assert_allclose(table.loc["T01", "flow_aep_0.01"], region.true_quantile(0.01)[0, 0], rtol=1e-5)


@pytest.mark.parametrize("kind", ["lp3", "misspecified"])
def test_floods_exceed_the_true_quantiles_as_often_as_stated(kind):
    aeps, shares = np.array([0.5, 0.1, 0.02]), []
    for seed in range(12):
        region = generate_region(seed, kind, n_gauges=60, n_targets=6, awkward=False)
        quantile = region.true_gauge_quantile(aeps)
        shares.append((region.flow[:, :, None] > quantile[:, None, :]).mean(axis=(0, 1)))
    shares = np.array(shares)
    standard_error = shares.std(axis=0, ddof=1) / np.sqrt(len(shares))
    # The spread between seeds measures the error, correlation included; 3.5 of 11 degrees of freedom: 1 in 200.
    assert np.all(np.abs(shares.mean(axis=0) - aeps) < 3.5 * standard_error)
    assert np.all(standard_error < 0.12 * aeps)


def test_concurrent_floods_correlate_as_the_truth_says():
    found, stated = [], []
    for seed in range(8):
        region = generate_region(seed, n_gauges=80, n_targets=6, awkward=False)
        n = region.sites.n_gauges
        apart = region.sites.distances_km()[:n, :n]
        sample = np.corrcoef(np.log10(region.flow))
        truth = flood_correlation(region.sites)[:n, :n]
        rings = [(apart > low) & (apart <= low + 50) for low in (0, 50, 100, 150)]
        found.append([sample[ring].mean() for ring in rings])
        stated.append([truth[ring].mean() for ring in rings])
    np.testing.assert_allclose(np.mean(found, axis=0), np.mean(stated, axis=0), atol=0.04)
    # Eight regions of 156 years: the ring means vary by about 0.03 from region to region, 0.01 on average.
    content = yaml.safe_load((EXAMPLE / "truth/truth.yaml").read_text(encoding="utf-8"))
    model = content["flood_correlation"]
    assert np.isclose(model["near"] * np.exp(-25 / model["range_km"]), np.mean(stated, axis=0)[0], atol=0.08)


def test_misspecified_regions_are_unevenly_heterogeneous():
    spread = {name: [] for name in REGION_NAMES}
    for seed in range(4):
        region = generate_region(seed, "misspecified", n_gauges=60, n_targets=6, awkward=False)
        for number, name in enumerate(REGION_NAMES):
            spread[name].append(region.parents.sd_log10[region.sites.region == number].std())
    assert np.mean(spread["east"]) > 1.5 * np.mean(spread["west"])


def test_records_agree_with_the_drawn_floods():
    region = generate_region(EXAMPLE_SEED, awkward=False)
    records = region.records
    gauge = 17
    rows = slice(records.offsets[gauge], records.offsets[gauge + 1])
    years = region.years[region.gauged[gauge] & (region.years <= 2024)]
    assert years.tolist() == records.water_year[rows].tolist()
    assert region.flow[gauge, years - region.years[0]].tolist() == records.flow_low[rows].tolist()
    assert np.diff(records.offsets).min() >= 12
    assert records.systematic_exact.all()
    assert list(records.gauge_ids) == region.gauges["gauge_id"].tolist()


def test_an_unknown_kind_is_refused():
    with pytest.raises(ValueError, match="'lp3' or 'misspecified'"):
        generate_region(1, "gumbel")
