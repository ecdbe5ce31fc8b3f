"""Which gauges form a pool: clusters of catchment attributes, and a region of influence around every site."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from wrackline.hydrology.records import FloatArray, IntArray

KM_PER_DEGREE = 111.195
_TRIES_EACH_WAY = 3
_FEWEST_IN_A_CLUSTER = 5
_ROUNDS = 100


@dataclass(frozen=True)
class SiteSpace:
    """Sites as points: how alike two sites are is the distance between them.

    Attributes
    ----------
    names : tuple of str, length d
        Attributes, and ``easting`` and ``northing`` where places count.
    weights : (d,)
        Weight of every squared difference.
    gauges : (g, d), targets : (m, d)
        Transformed attributes over the gauges' standard deviation times the root of the weight.
    """

    names: tuple[str, ...]
    weights: FloatArray
    gauges: FloatArray
    targets: FloatArray

    def reweigh(self, weights: FloatArray) -> SiteSpace:
        """Return the same sites with other weights (d,), none of which was or may be zero before."""
        root = np.sqrt(weights / self.weights)
        return SiteSpace(
            self.names, np.asarray(weights, dtype=float), self.gauges * root, self.targets * root
        )


@dataclass(frozen=True)
class ClusterTrial:
    """One number of clusters that was tried.

    Attributes
    ----------
    n_clusters : int
    smallest_gauges, smallest_years : int
        Gauges, and station-years, of the cluster with the fewest.
    mean_h1 : float
        H1 of the clusters, averaged over gauges.
    fit_to_size : bool
        Whether no cluster is too small and the median one has the station-years wanted.
    """

    n_clusters: int
    smallest_gauges: int
    smallest_years: int
    mean_h1: float
    fit_to_size: bool


@dataclass(frozen=True)
class Clusters:
    """Clusters of gauges.

    Attributes
    ----------
    label : int array (g,)
        Cluster of every gauge, numbered from the westernmost centre of the first attribute upwards.
    centre : (k, d)
    trials : tuple of ClusterTrial
        All that were tried when the number was left to the evidence.
    reason : str
    after_selection : bool
        Whether H had a say in the number, so that the H of these clusters is no test any more.
    """

    label: IntArray
    centre: FloatArray
    trials: tuple[ClusterTrial, ...]
    reason: str
    after_selection: bool

    def nearest(self, sites: FloatArray) -> IntArray:
        """Return the cluster whose centre is nearest to each site (m, d)."""
        return np.asarray(_squared(sites, self.centre).argmin(axis=1), dtype=np.int64)


def place_sites(
    names: Sequence[str],
    gauges: FloatArray,
    targets: FloatArray,
    weights: Sequence[float],
    gauge_places: FloatArray,
    target_places: FloatArray,
    distance_weight: float,
) -> SiteSpace:
    """Lay sites out as points whose distances say how alike they are.

    Parameters
    ----------
    names : attributes, d of them
    gauges, targets : (g, d), (m, d)
        Transformed attributes.
    weights : (d,)
        Attributes of weight zero are left out.
    gauge_places, target_places : (g, 2), (m, 2), degrees
        Latitude and longitude of the basins.
    distance_weight : float
        Weight of the distance on the ground: easting and northing, over their common standard deviation.

    Notes
    -----
    Attributes are scaled to standard deviation one times their weight (Burn, 1990; Hosking and Wallis, 1997,
    chapter 4). Nothing measured from floods has a place here.
    """
    names, chosen = list(names), np.asarray(weights, dtype=float) > 0
    sd = gauges.std(axis=0) if len(gauges) > 1 else np.ones(gauges.shape[1])
    chosen &= sd > 0
    columns = [j for j in range(len(names)) if chosen[j]]
    scale = [sd[j] for j in columns]
    weight = [float(weights[j]) for j in columns]
    middle = gauge_places.mean(axis=0)
    parts, others = [gauges[:, columns]], [targets[:, columns]]
    labels = [names[j] for j in columns]
    if distance_weight > 0:
        here, there = (_kilometres(places, middle) for places in (gauge_places, target_places))
        spread = float(np.sqrt(here.var(axis=0).mean())) or 1.0
        parts, others = [*parts, here], [*others, there]
        labels += ["easting", "northing"]
        scale, weight = [*scale, spread, spread], [*weight, distance_weight, distance_weight]
    factor = np.sqrt(weight) / np.array(scale)
    return SiteSpace(
        tuple(labels), np.array(weight), np.column_stack(parts) * factor, np.column_stack(others) * factor
    )


def distances(sites: FloatArray, gauges: FloatArray) -> FloatArray:
    """Return how unlike sites (m, d) and gauges (g, d) are, (m, g)."""
    return np.sqrt(_squared(sites, gauges))


def choose_influence(
    distance: FloatArray, station_years: IntArray, wanted_years: int, fewest: int, own: int | None
) -> IntArray:
    """Choose the gauges most like a site until they have enough station-years.

    Parameters
    ----------
    distance : (g,)
        Infinite for gauges that cannot be members.
    station_years : (g,)
    wanted_years : int
        Station-years after which no gauge is added (five times the return period of interest; Robson and Reed, 1999).
    fewest : int
        Gauges taken at least.
    own : int or None
        The site's own gauge: a member if given, whatever its distance.

    Returns
    -------
    int array
        Ascending gauge numbers.
    """
    order = np.argsort(distance, kind="stable")
    order = order[np.isfinite(distance[order])]
    if own is not None:
        order = np.concatenate([[own], order[order != own]])
    total = np.cumsum(station_years[order])
    count = max(int(np.searchsorted(total, wanted_years)) + 1, fewest)
    return np.sort(order[:count]).astype(np.int64)


def form_clusters(sites: FloatArray, n_clusters: int) -> tuple[IntArray, FloatArray]:
    """Form clusters by Ward's linkage, then move gauges to the nearest centre until none moves.

    Parameters
    ----------
    sites : (g, d)
    n_clusters : int

    Returns
    -------
    label : int array (g,), centre : (k, d)
        In order of the centres' first coordinate, then the next.

    Notes
    -----
    Ward (1963); reassignment after Hosking and Wallis (1997, section 4.1). A move that would empty a cluster is
    not made.
    """
    from scipy.cluster.hierarchy import fcluster, linkage

    label = np.zeros(len(sites), dtype=np.int64)
    if n_clusters > 1:
        label = fcluster(linkage(sites, "ward"), n_clusters, "maxclust").astype(np.int64) - 1
    for _ in range(_ROUNDS):
        centre = _centres(sites, label)
        moved = _squared(sites, centre).argmin(axis=1)
        if len(np.unique(moved)) < len(centre) or np.array_equal(moved, label):
            break
        label = moved
    centre = _centres(sites, label)
    order = np.lexsort(centre.T[::-1])
    rank = np.empty(len(order), dtype=np.int64)
    rank[order] = np.arange(len(order))
    return rank[label], centre[order]


def choose_clusters(
    sites: FloatArray,
    station_years: IntArray,
    typical_gauges: int,
    typical_years: int,
    heterogeneity: Callable[[IntArray], float],
) -> Clusters:
    """Choose the number of clusters by their size and, among those of good size, by their heterogeneity.

    Parameters
    ----------
    sites : (g, d)
    station_years : (g,)
    typical_gauges, typical_years : int
        Gauges and station-years of a typical cluster.
    heterogeneity : callable
        H1 of a group of gauge numbers.

    Notes
    -----
    Little accuracy is gained beyond about 20 gauges (Hosking and Wallis, 1997, section 4.3). Numbers up to three
    to either side of one cluster per 20 gauges are tried; of those whose clusters all have five gauges and half the
    station-years wanted, and whose median cluster has them all, the one with the smallest H1, averaged over gauges, is taken.
    """
    middle = max(1, round(len(sites) / typical_gauges))
    trials, found = [], {}
    for k in range(max(1, middle - _TRIES_EACH_WAY), middle + _TRIES_EACH_WAY + 1):
        if k * _FEWEST_IN_A_CLUSTER > len(sites):
            break
        label, centre = form_clusters(sites, k)
        gauges = np.bincount(label)
        years = np.bincount(label, station_years)
        h1 = np.array([heterogeneity(np.flatnonzero(label == c)) for c in range(len(centre))])
        enough = np.median(years) >= typical_years and years.min() >= typical_years / 2
        fits = bool(gauges.min() >= _FEWEST_IN_A_CLUSTER and enough)
        trials.append(
            ClusterTrial(k, int(gauges.min()), int(years.min()), float(gauges @ h1 / gauges.sum()), fits)
        )
        found[k] = label, centre
    if not trials:
        label, centre = form_clusters(sites, 1)
        return Clusters(label, centre, (), "too few gauges for more than one cluster", False)
    good = [t for t in trials if t.fit_to_size] or trials[:1]
    best = min(good, key=lambda t: (t.mean_h1, t.n_clusters))
    reason = (
        f"{best.n_clusters} clusters of {len(trials)} numbers tried: the smallest H1 averaged over gauges "
        f"({best.mean_h1:.2f}) among those with at least {_FEWEST_IN_A_CLUSTER} gauges in every cluster and "
        f"{typical_years} station-years in the median one, half of that in all"
    )
    return Clusters(*found[best.n_clusters], tuple(trials), reason, len(good) > 1)


def _kilometres(places: FloatArray, middle: FloatArray) -> FloatArray:
    """Easting and northing (n, 2) of places in degrees: good enough over one study."""
    north = (places[:, 0] - middle[0]) * KM_PER_DEGREE
    east = (places[:, 1] - middle[1] + 180) % 360 - 180
    return np.column_stack([east * KM_PER_DEGREE * np.cos(np.radians(middle[0])), north])


def _squared(sites: FloatArray, gauges: FloatArray) -> FloatArray:
    away = (sites**2).sum(axis=1)[:, None] + (gauges**2).sum(axis=1)[None, :] - 2 * sites @ gauges.T
    return np.asarray(np.maximum(away, 0.0))


def _centres(sites: FloatArray, label: IntArray) -> FloatArray:
    count = np.bincount(label)
    return np.column_stack([np.bincount(label, column) for column in sites.T]) / count[:, None]
