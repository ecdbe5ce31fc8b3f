"""How much of two basins is the same ground."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from numpy.typing import NDArray


def overlap_shares(basins: pd.DataFrame, first: Sequence[str], second: Sequence[str]) -> NDArray[np.float64]:
    """Return the shared area of pairs of basins over the area of the smaller one.

    Parameters
    ----------
    basins : DataFrame
        ``site_id`` and ``wkt`` (polygons in EPSG:4326).
    first, second : sequences of str, length n
        Sites of every pair.

    Returns
    -------
    float array (n,)
        NaN where one of the two has no polygon.

    Notes
    -----
    Areas are measured in Lambert's azimuthal equal-area projection about the middle of the basins. Only the given
    pairs are intersected: centroids and areas have told before that they may be nested.
    """
    share = np.full(len(first), np.nan)
    have = set(basins["site_id"])
    known = np.array([a in have and b in have for a, b in zip(first, second, strict=True)], dtype=bool)
    if not known.any():
        return share
    import shapely
    from pyproj import Transformer

    wanted = sorted({site for pair in (first, second) for site, use in zip(pair, known, strict=True) if use})
    number = {site: i for i, site in enumerate(wanted)}
    degrees = shapely.from_wkt(basins.set_index("site_id").loc[wanted, "wkt"].to_numpy(dtype=object))
    west, south, east, north = shapely.total_bounds(degrees)
    flat_earth = f"+proj=laea +lat_0={(south + north) / 2} +lon_0={(west + east) / 2} +datum=WGS84 +units=m"
    project = Transformer.from_crs("EPSG:4326", flat_earth, always_xy=True)
    polygons = shapely.transform(degrees, lambda xy: np.column_stack(project.transform(xy[:, 0], xy[:, 1])))
    polygons = np.where(shapely.is_valid(polygons), polygons, shapely.make_valid(polygons))
    area = shapely.area(polygons)
    a = np.array([number[site] for site, use in zip(first, known, strict=True) if use], dtype=np.int64)
    b = np.array([number[site] for site, use in zip(second, known, strict=True) if use], dtype=np.int64)
    smaller = np.minimum(area[a], area[b])
    shared = shapely.area(shapely.intersection(polygons[a], polygons[b]))
    # A basin within another shares all of itself but for rounding.
    share[known] = np.minimum(np.divide(shared, smaller, out=np.full(len(a), np.nan), where=smaller > 0), 1.0)
    return share
