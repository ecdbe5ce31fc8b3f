"""The invented island: relief, climate and a drainage network on a coarse grid.

Every land cell drains to one of its four neighbours and so to the sea; the basin of a site is the set
of cells that drain through the site's cell. Coordinates are kilometres east and north of the island's
centre in the equal-area projection `GRID_CRS`.
"""

from __future__ import annotations

import heapq
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy import ndimage

from wrackline.stats.streams import random_stream

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

CELL_KM = 1.5
COLUMNS, ROWS = 220, 170
TERRAIN_SEED = 7
# Open ocean: nobody can take the island for a real place.
GRID_CRS = "+proj=laea +lat_0=40 +lon_0=-147 +datum=WGS84 +units=m +no_defs"
REGION_NAMES = ("west", "south", "east")


@dataclass(frozen=True, eq=False)
class Terrain:
    """Relief, climate and drainage of the island; arrays over all cells, row by row, sea included.

    Attributes
    ----------
    x_km, y_km : float arrays, cell centres
    land : bool array
    elevation_m : float array, hollows filled so that every cell drains to the sea
    precipitation_mm, forest_percent, baseflow_index : float arrays
    downstream : int array, the cell that takes a cell's water (-1: the sea)
    cells : int array, land cells in an order in which every basin is one contiguous run
    position, size : int arrays, a cell's place in ``cells`` and the number of cells of its basin
    main_upstream : int array, the neighbour that brings most water (-1: none)
    stem : int array, the lowest cell of the river a cell lies on
    region : int array, number in `REGION_NAMES` (-1: sea); regions follow drainage divides
    edge_shift : float array (2, 2, ROWS + 1, COLUMNS + 1), shifts (x, y) of cell edges, in cells
        Index 0 horizontal edges, 1 vertical edges: gives basin boundaries a natural look.
    """

    x_km: FloatArray
    y_km: FloatArray
    land: NDArray[np.bool_]
    elevation_m: FloatArray
    precipitation_mm: FloatArray
    forest_percent: FloatArray
    baseflow_index: FloatArray
    downstream: IntArray
    cells: IntArray
    position: IntArray
    size: IntArray
    main_upstream: IntArray
    stem: IntArray
    region: IntArray
    edge_shift: FloatArray

    def basin_cells(self, cell: int) -> IntArray:
        """Cells that drain through ``cell``, itself first."""
        return self.cells[self.position[cell] : self.position[cell] + self.size[cell]]

    def basin_mean(self, field: FloatArray, cells: IntArray) -> FloatArray:
        """Mean of a field over the basins of several cells, shape of ``cells``."""
        sums = np.concatenate([[0.0], np.cumsum(field[self.cells])])
        first = self.position[cells]
        return (sums[first + self.size[cells]] - sums[first]) / self.size[cells]

    def drains_through(self, upper: IntArray, lower: int) -> NDArray[np.bool_]:
        """Whether each of the cells ``upper`` lies in the basin of ``lower``."""
        first = self.position[lower]
        return (self.position[upper] >= first) & (self.position[upper] < first + self.size[lower])


@lru_cache(maxsize=4)
def make_terrain(seed: int = TERRAIN_SEED) -> Terrain:
    """Return the island that belongs to ``seed`` (the same object for the same seed)."""
    x, y = np.meshgrid(
        (np.arange(COLUMNS) - (COLUMNS - 1) / 2) * CELL_KM, (np.arange(ROWS) - (ROWS - 1) / 2) * CELL_KM
    )
    land = _land(x, y, seed)
    raw = _relief(x, y, land, seed)
    downstream, from_sea, filled = _drain(raw, land, seed)
    size, position, cells = _arrange(downstream, from_sea)
    main_upstream, stem = _main_stems(downstream, from_sea, size)
    precipitation = _precipitation(x, y, raw, seed)
    wetness = (precipitation - 1200) / 500
    forest = 100 / (
        1
        + np.exp(-(0.2 + 0.9 * wetness - np.maximum(raw - 900, 0) / 250 + 0.5 * _smooth(seed, "forest", 20)))
    )
    baseflow = np.clip(0.45 + 0.12 * _smooth(seed, "baseflow", 25), 0.08, 0.92)
    flat_x, flat_y = x.ravel(), y.ravel()
    shift = random_stream(seed, "terrain", "edges").uniform(-0.22, 0.22, size=(2, 2, ROWS + 1, COLUMNS + 1))
    return Terrain(
        x_km=flat_x,
        y_km=flat_y,
        land=land.ravel(),
        elevation_m=filled,
        precipitation_mm=precipitation.ravel(),
        forest_percent=forest.ravel(),
        baseflow_index=baseflow.ravel(),
        downstream=downstream,
        cells=cells,
        position=position,
        size=size,
        main_upstream=main_upstream,
        stem=stem,
        region=_regions(flat_x, flat_y, downstream, from_sea, cells, position, size),
        edge_shift=shift,
    )


def _smooth(seed: int, name: str, range_km: float) -> FloatArray:
    """Return a smooth random field of mean 0 and standard deviation 1 over the grid."""
    noise = random_stream(seed, "terrain", name).standard_normal((ROWS, COLUMNS))
    field = ndimage.gaussian_filter(noise, range_km / CELL_KM, mode="wrap")
    return (field - field.mean()) / field.std()


def _land(x: FloatArray, y: FloatArray, seed: int) -> NDArray[np.bool_]:
    """Return one island without inland seas."""
    inside = np.hypot(x / 148, y / 112) + 0.09 * _smooth(seed, "coast", 14) < 1
    inside[[0, -1], :] = inside[:, [0, -1]] = False
    labels, _ = ndimage.label(inside)
    largest = labels == np.argmax(np.bincount(labels.ravel())[1:]) + 1
    return ndimage.binary_fill_holes(largest)


def _ridge_km(y: FloatArray) -> FloatArray:
    """East coordinate of the main divide."""
    return -35 + 18 * np.sin(y / 45)


def _relief(x: FloatArray, y: FloatArray, land: NDArray[np.bool_], seed: int) -> FloatArray:
    """Return elevations in m: a north-south divide, a spur to the east, roughness, a coastal slope."""
    to_coast = ndimage.distance_transform_edt(land) * CELL_KM
    divide = 1150 * np.exp(-(((x - _ridge_km(y)) / 32) ** 2))
    spur = 420 * np.exp(-(((y - 8 - 0.12 * x) / 24) ** 2)) / (1 + np.exp(-(x + 35) / 10))
    large = 1.6 * to_coast + (divide + spur) * np.minimum(1, to_coast / 40)
    rough = (
        80 * _smooth(seed, "hills", 9) + 55 * _smooth(seed, "knolls", 4) + 45 * _smooth(seed, "bumps", 1.5)
    )
    # Steep country is cut more deeply; without it rivers would run side by side down even slopes.
    relief = large + rough * np.minimum(1, to_coast / 20) * (0.8 + large / 450)
    return np.where(land, np.maximum(relief, 1.0), 0.0)


def _precipitation(x: FloatArray, y: FloatArray, elevation: FloatArray, seed: int) -> FloatArray:
    """Return mean annual precipitation in mm: wet west winds, a dry lee, more in the south and with height."""
    windward = 1 / (1 + np.exp((x - _ridge_km(y) - 12) / 20))
    southern = 1 / (1 + np.exp((y - 5) / 18))
    height = ndimage.gaussian_filter(elevation, 6 / CELL_KM)
    mean = 430 + 950 * windward + 420 * southern * (1 - windward) + 0.55 * height
    return mean * np.exp(0.10 * _smooth(seed, "rain", 22))


def _neighbours(cell: int) -> tuple[int, int, int, int]:
    return cell - 1, cell + 1, cell - COLUMNS, cell + COLUMNS


def _drain(
    elevation: FloatArray, land: NDArray[np.bool_], seed: int
) -> tuple[IntArray, IntArray, FloatArray]:
    """Flood the island from the sea, lowest shore first (Barnes, Lehman and Mulla, 2014).

    Returns the downstream cell of every cell, the land cells in the order in which the water reached
    them (so a cell always follows the one it drains to), and the filled elevations.
    """
    height, dry = elevation.ravel().tolist(), land.ravel().tolist()
    # Unequal rises keep rivers from running straight across filled hollows.
    rise = random_stream(seed, "terrain", "rise").uniform(0.05, 1.0, len(height)).tolist()
    downstream = np.full(len(height), -1, dtype=np.int64)
    queue = [
        (height[c], c)
        for c in np.flatnonzero(land.ravel()).tolist()
        if not all(dry[n] for n in _neighbours(c))
    ]
    reached = set(c for _, c in queue)
    heapq.heapify(queue)
    order = []
    while queue:
        level, cell = heapq.heappop(queue)
        order.append(cell)
        for other in _neighbours(cell):
            if dry[other] and other not in reached:
                reached.add(other)
                downstream[other] = cell
                height[other] = max(height[other], level + rise[other])
                heapq.heappush(queue, (height[other], other))
    return downstream, np.array(order, dtype=np.int64), np.array(height)


def _arrange(downstream: IntArray, from_sea: IntArray) -> tuple[IntArray, IntArray, IntArray]:
    """Return basin sizes, positions and the order of cells in which basins are contiguous."""
    below = downstream.tolist()
    size = [0] * len(below)
    for cell in reversed(from_sea.tolist()):
        size[cell] += 1
        if below[cell] >= 0:
            size[below[cell]] += size[cell]
    position, free, start = [-1] * len(below), [0] * len(below), 0
    for cell in from_sea.tolist():
        if below[cell] < 0:
            position[cell], start = start, start + size[cell]
        else:
            position[cell] = free[below[cell]]
            free[below[cell]] += size[cell]
        free[cell] = position[cell] + 1
    positions = np.array(position, dtype=np.int64)
    cells = np.empty(len(from_sea), dtype=np.int64)
    cells[positions[from_sea]] = from_sea
    return np.array(size, dtype=np.int64), positions, cells


def _main_stems(downstream: IntArray, from_sea: IntArray, size: IntArray) -> tuple[IntArray, IntArray]:
    """Return the neighbour with most water of every cell, and the lowest cell of its river."""
    main = np.full(len(downstream), -1, dtype=np.int64)
    for cell in from_sea:
        below = downstream[cell]
        if below >= 0 and (main[below] < 0 or size[cell] > size[main[below]]):
            main[below] = cell
    stem = np.full(len(downstream), -1, dtype=np.int64)
    for cell in from_sea:
        below = downstream[cell]
        stem[cell] = stem[below] if below >= 0 and main[below] == cell else cell
    return main, stem


def _regions(
    x: FloatArray,
    y: FloatArray,
    downstream: IntArray,
    from_sea: IntArray,
    cells: IntArray,
    position: IntArray,
    size: IntArray,
) -> IntArray:
    """Give every river that reaches the sea, with its whole basin, to one of the three regions."""
    region = np.full(len(x), -1, dtype=np.int64)
    for mouth in from_sea[downstream[from_sea] < 0]:
        basin = cells[position[mouth] : position[mouth] + size[mouth]]
        centre_x, centre_y = x[basin].mean(), y[basin].mean()
        if centre_x < float(_ridge_km(np.array(centre_y))):
            region[basin] = 0
        else:
            region[basin] = 1 if centre_y < 8 + 0.12 * centre_x else 2
    return region
