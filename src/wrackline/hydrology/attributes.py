"""Catchment attributes as columns of a regression."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from wrackline.hydrology.records import FloatArray

TRANSFORMS: dict[str, Callable[[FloatArray], FloatArray]] = {
    "none": lambda values: values,
    "log10": np.log10,
    "sqrt": np.sqrt,
    "log10_plus_1": lambda values: np.log10(values + 1.0),
}


@dataclass(frozen=True)
class DesignPlan:
    """How the columns of a regression are made, so that a new site gets the same ones.

    Attributes
    ----------
    names : tuple of str
        Attributes, in the order of their columns.
    transforms : tuple of str
        Keys of `TRANSFORMS`.
    regions : tuple of str
        Regions with an intercept each; empty: one intercept for all.
    separate : bool
        Whether every region has its own slopes too: separate equations that share one model-error variance.
    """

    names: tuple[str, ...]
    transforms: tuple[str, ...]
    regions: tuple[str, ...] = ()
    separate: bool = False

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the design's columns: intercepts first."""
        intercepts = tuple(f"region {region}" for region in self.regions) or ("constant",)
        terms = tuple(
            name if transform == "none" else f"{transform}({name})"
            for name, transform in zip(self.names, self.transforms, strict=True)
        )
        if self.separate:
            terms = tuple(f"{term} in region {region}" for region in self.regions for term in terms)
        return intercepts + terms

    def transformed(self, attributes: Mapping[str, FloatArray]) -> FloatArray:
        """Return the transformed attributes (sites, attributes); NaN or infinite where that is impossible."""
        if not self.names:
            sites = len(next(iter(attributes.values()))) if attributes else 0
            return np.empty((sites, 0))
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.column_stack(
                [
                    TRANSFORMS[t](np.asarray(attributes[n], dtype=float))
                    for n, t in zip(self.names, self.transforms, strict=True)
                ]
            )

    def intercepts(self, region: Sequence[str]) -> FloatArray:
        """Return the intercept columns (sites, regions); a site of a region without an intercept gets NaN."""
        if not self.regions:
            return np.ones((len(region), 1))
        membership = np.array([[r == known for known in self.regions] for r in region], dtype=float)
        membership = membership.reshape(len(region), len(self.regions))
        membership[membership.sum(axis=1) == 0] = np.nan
        return membership

    def design(self, attributes: Mapping[str, FloatArray], region: Sequence[str]) -> FloatArray:
        """Return the design matrix (sites, columns); a site of a region without an intercept gets NaN."""
        columns = self.transformed(attributes)
        intercepts = self.intercepts(region)
        if self.separate:
            columns = (intercepts[:, :, None] * columns[:, None, :]).reshape(len(columns), -1)
        return np.column_stack([intercepts, columns])


@dataclass(frozen=True)
class AttributeSpace:
    """The attribute space that the gauges of a regression cover, to warn beyond it.

    Attributes
    ----------
    names : tuple of str
    lower, upper : (a,)
        Smallest and largest transformed value among the gauges.
    hulls : dict of pairs of names to (v, 2)
        Corners of the convex hull of the gauges in every pair of transformed attributes, counter-clockwise.
    largest_spread : float
        Largest ``x (X' L^-1 X)^-1 x'`` among the gauges: the edge of their joint range.
    """

    names: tuple[str, ...]
    lower: FloatArray
    upper: FloatArray
    hulls: dict[tuple[str, str], FloatArray]
    largest_spread: float

    def notes(self, transformed: FloatArray, spread: FloatArray) -> list[list[str]]:
        """Say for every site, (m, a) and (m,), which attributes, alone or together, lie beyond the gauges' range."""
        found: list[list[str]] = []
        for row, own_spread in zip(transformed, spread, strict=True):
            value = dict(zip(self.names, row, strict=True))
            beyond = [
                f"{name} is {'below' if value[name] < low else 'above'} the gauges' range"
                for name, low, high in zip(self.names, self.lower, self.upper, strict=True)
                if value[name] < low or value[name] > high
            ]
            if not beyond:
                pairs = [
                    f"{one} with {other}"
                    for (one, other), hull in self.hulls.items()
                    if lies_outside(hull, value[one], value[other])
                ]
                if pairs:
                    beyond = [f"within the gauges' range one by one, but not together: {', '.join(pairs)}"]
            if not beyond and own_spread > self.largest_spread:
                beyond = ["its attributes are each within the gauges' range, but not all together"]
            found.append(beyond)
        return found

    def to_dict(self) -> dict[str, Any]:
        """Content for a saved model."""
        return {
            "names": list(self.names),
            "lower": self.lower.tolist(),
            "upper": self.upper.tolist(),
            "hulls": [[one, other, hull.tolist()] for (one, other), hull in self.hulls.items()],
            "largest_spread": self.largest_spread,
        }

    @classmethod
    def from_dict(cls, saved: Mapping[str, Any]) -> AttributeSpace:
        """Read back what `to_dict` gave."""
        return cls(
            tuple(saved["names"]),
            np.array(saved["lower"], dtype=float),
            np.array(saved["upper"], dtype=float),
            {(one, other): np.array(hull) for one, other, hull in saved["hulls"]},
            float(saved["largest_spread"]),
        )


def describe_space(names: tuple[str, ...], transformed: FloatArray, spread: FloatArray) -> AttributeSpace:
    """Describe the space that gauges (n, a) cover; ``spread`` (n,) is theirs in the regression."""
    hulls = {
        (names[i], names[j]): convex_hull(transformed[:, [i, j]])
        for i in range(len(names))
        for j in range(i + 1, len(names))
    }
    return AttributeSpace(
        names, transformed.min(axis=0), transformed.max(axis=0), hulls, float(spread.max(initial=0.0))
    )


def convex_hull(points: FloatArray) -> FloatArray:
    """Return the corners of the convex hull of points (n, 2), counter-clockwise.

    Andrew (1979, Inf. Process. Lett. 9): a lower and an upper chain over points sorted by their first coordinate.

    Examples
    --------
    >>> convex_hull(np.array([[0.0, 0.0], [1.0, 0.0], [0.4, 0.4], [1.0, 1.0], [0.0, 1.0]])).tolist()
    [[0.0, 0.0], [1.0, 0.0], [1.0, 1.0], [0.0, 1.0]]
    """
    ordered = np.unique(points, axis=0)
    if len(ordered) < 3:
        return ordered

    def chain(path: FloatArray) -> list[FloatArray]:
        corners: list[FloatArray] = []
        for point in path:
            while len(corners) > 1 and _turn(corners[-2], corners[-1], point) <= 0:
                corners.pop()
            corners.append(point)
        return corners[:-1]

    return np.array(chain(ordered) + chain(ordered[::-1]))


def lies_outside(hull: FloatArray, x: float, y: float) -> bool:
    """Whether a point lies outside a convex hull by more than a millionth of its extent."""
    if len(hull) < 3:
        return False
    extent = np.ptp(hull, axis=0)
    after = np.roll(hull, -1, axis=0)
    point = np.array([x, y])
    slack = 1e-6 * float(extent[0] * extent[1])
    return any(_turn(a, b, point) < -slack for a, b in zip(hull, after, strict=True))


def _turn(a: FloatArray, b: FloatArray, c: FloatArray) -> float:
    """Positive where the way from a over b to c turns left."""
    return float((b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0]))
