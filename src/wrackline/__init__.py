"""Regional flood-frequency studies: from annual peaks to flood quantiles at gauged and ungauged sites."""

from __future__ import annotations

import importlib
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from wrackline.comparing import compare
    from wrackline.estimating import estimate
    from wrackline.fitting import fit
    from wrackline.study.checking import check
    from wrackline.study.importing import import_peaks
    from wrackline.study.inputs import read_study

_HOME = {
    "check": "wrackline.study.checking",
    "compare": "wrackline.comparing",
    "estimate": "wrackline.estimating",
    "fit": "wrackline.fitting",
    "import_peaks": "wrackline.study.importing",
    "read_study": "wrackline.study.inputs",
}
"""Where the names of the Python interface live; imported when first used, so that a stage stays quick to start."""

__all__ = ["check", "compare", "estimate", "fit", "import_peaks", "read_study"]


def __getattr__(name: str) -> Any:
    if name in _HOME:
        return getattr(importlib.import_module(_HOME[name]), name)
    raise AttributeError(f"module 'wrackline' has no attribute '{name}'")


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOME])
