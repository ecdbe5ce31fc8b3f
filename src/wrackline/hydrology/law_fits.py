"""One law fitted to one set of L-moment ratios, remembered: tests, curves and tables of a pool ask for the same."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from wrackline.hydrology.records import FloatArray
from wrackline.stats import distributions

_NEEDS_FIFTH_RATIO = "WAK"


def fit_law(distribution: str, lcv: float, lskew: float, lkurtosis: float, l5: float = 0.0) -> FloatArray:
    """Fit a law with mean one; returns its parameters, read-only, NaN where it cannot have these ratios."""
    fifth = float(l5) if distribution == _NEEDS_FIFTH_RATIO else 0.0
    return _fit(distribution, float(lcv), float(lskew), float(lkurtosis), fifth)


@lru_cache(maxsize=8192)
def _fit(distribution: str, lcv: float, lskew: float, lkurtosis: float, l5: float) -> FloatArray:
    law = distributions.BY_NAME[distribution]
    parameters = np.asarray(law.fit(1.0, lcv, lskew, lkurtosis, l5), dtype=float)
    parameters.flags.writeable = False
    return parameters
