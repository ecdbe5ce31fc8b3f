"""Catchment attributes as columns of a regression."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass

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
    """

    names: tuple[str, ...]
    transforms: tuple[str, ...]
    regions: tuple[str, ...] = ()

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the design's columns: intercepts first."""
        intercepts = tuple(f"region {region}" for region in self.regions) or ("constant",)
        return intercepts + tuple(
            name if transform == "none" else f"{transform}({name})"
            for name, transform in zip(self.names, self.transforms, strict=True)
        )

    def transformed(self, attributes: Mapping[str, FloatArray]) -> FloatArray:
        """Return the transformed attributes (sites, attributes); NaN or infinite where that is impossible."""
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.column_stack(
                [
                    TRANSFORMS[t](np.asarray(attributes[n], dtype=float))
                    for n, t in zip(self.names, self.transforms, strict=True)
                ]
            )

    def design(self, attributes: Mapping[str, FloatArray], region: Sequence[str]) -> FloatArray:
        """Return the design matrix (sites, columns); a site of a region without an intercept gets NaN."""
        columns = self.transformed(attributes)
        if not self.regions:
            return np.column_stack([np.ones(len(columns)), columns])
        membership = np.array([[r == known for known in self.regions] for r in region], dtype=float)
        membership[membership.sum(axis=1) == 0] = np.nan
        return np.column_stack([membership, columns])
