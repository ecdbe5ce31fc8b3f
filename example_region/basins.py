"""Outlines of basins and regions: sets of grid cells turned into polygons with natural edges."""

from __future__ import annotations

from functools import lru_cache

import numpy as np
import shapely

from example_region.terrain import CELL_KM, COLUMNS, ROWS, FloatArray, IntArray, Terrain

# One step along a grid line by direction: east, north, west, south, in vertex numbers.
_VERTICES_A_ROW = COLUMNS + 1
_STEP = (1, _VERTICES_A_ROW, -1, -_VERTICES_A_ROW)


def outline(terrain: Terrain, cells: IntArray) -> shapely.Geometry:
    """Return the polygon of a set of cells, in metres of `terrain.GRID_CRS`.

    The line runs through the midpoints of the cells' edges, each shifted by a fixed amount of its own,
    so that neighbouring and nested basins share their common boundary.
    """
    rings = [shapely.LinearRing(points * 1000.0) for points in _rings(terrain, cells)]
    holes = [ring for ring in rings if not ring.is_ccw]
    parts = []
    for shell in (shapely.Polygon(ring) for ring in rings if ring.is_ccw):
        parts.append(shapely.Polygon(shell.exterior, [hole for hole in holes if shell.contains(hole)]))
    return parts[0] if len(parts) == 1 else shapely.MultiPolygon(parts)


def basin_areas_km2(terrain: Terrain, cells: IntArray) -> FloatArray:
    """Return the areas inside the outlines of several basins."""
    return np.array([_basin_area_km2(terrain, int(cell)) for cell in cells])


@lru_cache(maxsize=30000)
def _basin_area_km2(terrain: Terrain, cell: int) -> float:
    area = 0.0
    for points in _rings(terrain, terrain.basin_cells(cell)):
        x, y = points[:, 0], points[:, 1]
        area += 0.5 * float(np.sum(x * np.roll(y, -1) - np.roll(x, -1) * y))
    return area


def _rings(terrain: Terrain, cells: IntArray) -> list[FloatArray]:
    """Trace the boundary of a set of cells: closed rings of points in km, the set on the left."""
    start, direction, points = _boundary_edges(terrain, cells)
    at = {(v, d): i for i, (v, d) in enumerate(zip(start.tolist(), direction.tolist(), strict=True))}
    open_edges = dict.fromkeys(at)
    rings = []
    while open_edges:
        edge = next(iter(open_edges))
        ring = []
        while edge in open_edges:
            del open_edges[edge]
            ring.append(at[edge])
            vertex, heading = edge[0] + _STEP[edge[1]], edge[1]
            # A left turn first: cells that touch only at a corner are kept apart.
            turns = ((heading + 1) % 4, heading, (heading + 3) % 4)
            edge = next((vertex, turn) for turn in turns if (vertex, turn) in at)
        rings.append(points[ring])
    return rings


def _boundary_edges(terrain: Terrain, cells: IntArray) -> tuple[IntArray, IntArray, FloatArray]:
    """Return start vertex, direction and shifted midpoint (km) of every edge between the set and the rest."""
    inside = np.zeros(ROWS * COLUMNS, dtype=bool)
    inside[cells] = True
    row, column = cells // COLUMNS, cells % COLUMNS
    starts, directions, points = [], [], []
    # Direction, neighbour across the edge, start vertex and edge as (column, row) beside the cell's own.
    sides = (
        (0, -COLUMNS, (0, 0), (0, 0)),
        (1, 1, (1, 0), (1, 0)),
        (2, COLUMNS, (1, 1), (0, 1)),
        (3, -1, (0, 1), (0, 0)),
    )
    for direction, neighbour, vertex, edge in sides:
        free = ~inside[cells + neighbour]
        c, r = column[free], row[free]
        starts.append((r + vertex[1]) * _VERTICES_A_ROW + c + vertex[0])
        directions.append(np.full(len(c), direction))
        upright = direction % 2
        shift = terrain.edge_shift[upright, :, r + edge[1], c + edge[0]]
        middle = np.stack([c + edge[0] + (0.5 - 0.5 * upright), r + edge[1] + 0.5 * upright], axis=1)
        points.append((middle + shift - np.array([COLUMNS, ROWS]) / 2) * CELL_KM)
    return np.concatenate(starts), np.concatenate(directions), np.concatenate(points)
