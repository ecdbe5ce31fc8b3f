"""Distributions of annual floods fitted to L-moments, one module a law.

Every module offers ``NAME``, ``TITLE``, ``PARAMETERS``, ``fit(l1, l2, t3, t4, t5)``, ``quantile(parameters, p)``,
``cdf(parameters, x)`` and ``density(parameters, x)``; a candidate for growth curves also
``fourth_ratio(t3)``. Parameters lie along the last axis, everything else broadcasts; what is infeasible is
NaN. To add a law: write its module and add it to one of the two dictionaries below; the tests of this
package run over all of them.
"""

from types import ModuleType

from wrackline.stats.distributions import gev, glo, gno, gpa, kappa, pe3, wakeby

# Laws of three parameters among which the goodness-of-fit measure chooses.
CANDIDATES: dict[str, ModuleType] = {"GLO": glo, "GEV": gev, "GNO": gno, "PE3": pe3, "GPA": gpa}
# Laws of four and five parameters, for simulation and for pools that no candidate fits.
GENERAL: dict[str, ModuleType] = {"KAP": kappa, "WAK": wakeby}
BY_NAME: dict[str, ModuleType] = CANDIDATES | GENERAL

__all__ = ["BY_NAME", "CANDIDATES", "GENERAL", "gev", "glo", "gno", "gpa", "kappa", "pe3", "wakeby"]
