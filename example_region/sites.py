"""Where the gauges and targets stand, and the attributes of their basins."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from pyproj import Transformer

from example_region.basins import basin_areas_km2
from example_region.terrain import CELL_KM, GRID_CRS, REGION_NAMES, FloatArray, IntArray, Terrain
from wrackline.stats.streams import random_stream

# A pair of nested basins nearer alike than this would say the same thing twice.
NESTED_AREA_RATIO, NESTED_DISTANCE = 5.0, 0.5
ATTRIBUTES = ("precipitation", "elevation", "slope", "forest", "baseflow_index")
SMALLEST_CELLS = 5
REGION_SHARES = (0.38, 0.34, 0.28)


@dataclass(frozen=True)
class Sites:
    """Gauges first, then targets; arrays of shape (n,).

    ``latitude`` and ``longitude`` are rows (outlet, basin centroid); ``attributes`` holds the arrays
    named in `ATTRIBUTES`: mm a year, m, m/km, percent, share.
    """

    n_gauges: int
    cell: IntArray
    region: IntArray
    area_km2: FloatArray
    centroid_km: FloatArray
    latitude: FloatArray
    longitude: FloatArray
    attributes: dict[str, FloatArray]
    shared: FloatArray

    def __len__(self) -> int:
        return len(self.cell)

    def distances_km(self) -> FloatArray:
        """Distances between basin centroids, shape (n, n)."""
        apart = self.centroid_km[:, None, :] - self.centroid_km[None, :, :]
        return np.hypot(apart[..., 0], apart[..., 1])


def choose_sites(
    terrain: Terrain, seed: int, n_gauges: int, n_targets: int, redundant_ratios: tuple[float, ...] = ()
) -> Sites:
    """Place gauges and targets on the rivers: areas log-normal between 10 and 5,000 km2, shares by region.

    Nested pairs of gauges differ fivefold in area or lie well apart, except that for every entry of
    ``redundant_ratios`` one gauge is followed downstream by another whose basin is that much larger.
    Every third target lies on a gauged river, a short way up or down from the gauge.
    """
    stream = random_stream(seed, "example sites")
    gauges: list[int] = []
    quota = _quotas(n_gauges - len(redundant_ratios))
    for region, count in enumerate(quota):
        for _ in range(count):
            gauges.append(_new_gauge(terrain, stream, region, gauges))
    for ratio in redundant_ratios:
        gauges.append(_gauge_below(terrain, stream, ratio, gauges))
    targets = _choose_targets(terrain, stream, n_targets, gauges)
    return _describe(
        terrain, np.array(_downstream_order(terrain, gauges) + _downstream_order(terrain, targets)), n_gauges
    )


def _quotas(count: int) -> list[int]:
    ends = np.round(np.cumsum(REGION_SHARES) * count).astype(int)
    return np.diff(np.concatenate([[0], ends])).tolist()


def _downstream_order(terrain: Terrain, cells: list[int]) -> list[int]:
    """Region by region, along the rivers: agencies number their gauges so."""
    return sorted(cells, key=lambda cell: (terrain.region[cell], -terrain.position[cell]))


def _draw_cell(terrain: Terrain, stream: np.random.Generator, region: int) -> int:
    """Draw an outlet whose basin has about a log-normal area."""
    while True:
        wanted = float(np.exp(stream.normal(np.log(190.0), 1.25)))
        if not 12 <= wanted <= 5000:
            continue
        cells = max(wanted / CELL_KM**2, SMALLEST_CELLS)
        near = (
            (terrain.size > 0.89 * cells) & (terrain.size < 1.13 * cells) & (terrain.size >= SMALLEST_CELLS)
        )
        fit = np.flatnonzero((terrain.region == region) & near)
        if len(fit):
            return int(stream.choice(fit))


def _new_gauge(terrain: Terrain, stream: np.random.Generator, region: int, others: list[int]) -> int:
    for _ in range(400):
        cell = _draw_cell(terrain, stream, region)
        if cell not in others and not any(_alike(terrain, cell, other) for other in others):
            return cell
    raise ValueError(f"no room for another gauge in region {REGION_NAMES[region]}; ask for fewer gauges")


def _alike(terrain: Terrain, one: int, other: int) -> bool:
    """Whether two outlets are nested and so close that they would be redundant."""
    small, large = sorted((one, other), key=lambda cell: int(terrain.size[cell]))
    if terrain.size[large] >= NESTED_AREA_RATIO * terrain.size[small]:
        return False
    if not terrain.drains_through(np.array([small]), large)[0]:
        return False
    pair = np.array([small, large])
    x, y = terrain.basin_mean(terrain.x_km, pair), terrain.basin_mean(terrain.y_km, pair)
    scale = np.sqrt(terrain.size[pair].mean()) * CELL_KM
    return bool(np.hypot(x[0] - x[1], y[0] - y[1]) < 1.1 * NESTED_DISTANCE * scale)


def _gauge_below(terrain: Terrain, stream: np.random.Generator, ratio: float, gauges: list[int]) -> int:
    """Return a cell downstream of one gauge, its basin about ``ratio`` times as large, alike to no other."""
    for upper in stream.permutation(gauges):
        if not 40 <= terrain.size[upper] <= 1000:
            continue
        cell = int(terrain.downstream[upper])
        while cell >= 0 and terrain.size[cell] < ratio * terrain.size[upper]:
            cell = int(terrain.downstream[cell])
        near = cell >= 0 and terrain.size[cell] < 1.1 * ratio * terrain.size[upper] and cell not in gauges
        if (
            near
            and sum(_alike(terrain, cell, other) for other in gauges) == 1
            and _alike(terrain, cell, int(upper))
        ):
            return cell
    raise ValueError(f"no gauge has room for another {ratio} times its area downstream")


def _choose_targets(
    terrain: Terrain, stream: np.random.Generator, count: int, gauges: list[int]
) -> list[int]:
    targets: list[int] = []
    quota = np.repeat(np.arange(3), _quotas(count))
    for number, region in enumerate(quota):
        cell = -1
        while cell < 0 or cell in gauges or cell in targets:
            if number % 3 == 0:
                cell = _up_or_down(terrain, stream, [g for g in gauges if terrain.region[g] == region])
            else:
                cell = _draw_cell(terrain, stream, int(region))
        targets.append(cell)
    return targets


def _up_or_down(terrain: Terrain, stream: np.random.Generator, gauges: list[int]) -> int:
    """Walk from a gauge along its river until the basin has changed by a tenth to a half; -1: no such place."""
    start = cell = int(stream.choice(gauges))
    way = terrain.downstream if stream.random() < 0.5 else terrain.main_upstream
    while cell >= 0 and abs(np.log(terrain.size[cell] / terrain.size[start])) < 0.12:
        cell = int(way[cell])
    within = cell >= 0 and abs(np.log(terrain.size[cell] / terrain.size[start])) < np.log(1.6)
    return cell if within and terrain.size[cell] >= SMALLEST_CELLS else -1


def _describe(terrain: Terrain, cell: IntArray, n_gauges: int) -> Sites:
    centroid = np.stack(
        [terrain.basin_mean(terrain.x_km, cell), terrain.basin_mean(terrain.y_km, cell)], axis=1
    )
    to_degrees = Transformer.from_crs(GRID_CRS, "EPSG:4326", always_xy=True)
    longitude, latitude = to_degrees.transform(
        np.stack([terrain.x_km[cell], centroid[:, 0]]) * 1000,
        np.stack([terrain.y_km[cell], centroid[:, 1]]) * 1000,
    )
    attributes = {
        "precipitation": np.round(terrain.basin_mean(terrain.precipitation_mm, cell), 0),
        "elevation": np.round(terrain.basin_mean(terrain.elevation_m, cell), 0),
        "slope": np.array([_channel_slope(terrain, int(c)) for c in cell]),
        "forest": np.round(terrain.basin_mean(terrain.forest_percent, cell), 1),
        "baseflow_index": np.round(terrain.basin_mean(terrain.baseflow_index, cell), 3),
    }
    area = basin_areas_km2(terrain, cell)
    return Sites(
        n_gauges=n_gauges,
        cell=cell,
        region=terrain.region[cell],
        area_km2=np.array([float(f"{a:.4g}") for a in area]),
        centroid_km=centroid,
        latitude=np.round(latitude, 5),
        longitude=np.round(longitude, 5),
        attributes=attributes,
        shared=_shared_basin(terrain, cell),
    )


def _channel_slope(terrain: Terrain, cell: int) -> float:
    """Fall of the main channel between 10 and 85 % of its length, m/km."""
    river = [cell]
    while terrain.main_upstream[river[-1]] >= 0:
        river.append(int(terrain.main_upstream[river[-1]]))
    low, high = round(0.10 * (len(river) - 1)), max(round(0.85 * (len(river) - 1)), 1)
    fall = terrain.elevation_m[river[high]] - terrain.elevation_m[river[low]]
    return float(np.round(max(fall / ((high - low) * CELL_KM), 0.1), 2))


def _shared_basin(terrain: Terrain, cell: IntArray) -> FloatArray:
    """Return the shared area of every two basins over the root of the product of their areas, (n, n).

    It is the correlation of the basins' means of uncorrelated noise, hence a valid correlation matrix.
    """
    size = terrain.size[cell].astype(float)
    within = np.stack([terrain.drains_through(cell, int(lower)) for lower in cell], axis=1)
    nested = within | within.T
    ratio = np.minimum(size[:, None], size[None, :]) / np.maximum(size[:, None], size[None, :])
    return np.where(nested, np.sqrt(ratio), 0.0)
