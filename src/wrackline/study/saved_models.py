"""The models of a finished study, saved so that new sites can be estimated without running anything again."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.faults import Fault, FaultLog
from wrackline.study.loading import UnreadableStudy
from wrackline.study.target_estimates import ROUTE_ORDER

SAVED_MODELS = "tables/saved_models.json"
FORMAT = 1
SETTINGS = ("units", "attributes", "aeps", "confidence")


def describe_models(
    config: StudyConfig,
    equations: dict[str, Any],
    growth: dict[str, Any],
    routes: dict[str, Any],
    gauges: dict[str, dict[str, Any]],
    target_pools: dict[str, str],
    adopt: list[dict[str, str]],
) -> dict[str, Any]:
    """Gather all that an estimate at a new site needs; flows in m3/s, areas in km2, logarithms of base 10."""
    settings = {part: config.model_dump(mode="json")[part] for part in SETTINGS}
    chosen = (equations.get("quantiles") or equations["index_flood"])["attributes"]
    settings["regression"] = {
        "attributes": chosen,
        "transfer_area_ratio": list(config.regression.transfer_area_ratio),
    }
    settings["index_flood"] = {"attributes": equations["index_flood"]["attributes"]}
    settings["pooling"] = {"regions": config.pooling.regions}
    kept = ("aeps", "growth_factor", "ln_sd_new_site", "heterogeneous", "station_years", "distribution")
    return {
        "format": FORMAT,
        "edition": config.study.edition,
        "settings": settings,
        "index_flood": equations["index_flood"],
        "quantiles": equations.get("quantiles"),
        "growth": {name: {key: pool[key] for key in kept} for name, pool in growth["pools"].items()},
        "pooling_method": growth.get("method", "regions"),
        "home": target_pools,
        "routes": routes,
        "gauges": gauges,
        "adopt": adopt,
    }


def adopted_routes(
    config: StudyConfig, ledger: pd.DataFrame, target_ids: set[str], faults: FaultLog
) -> list[dict[str, str]]:
    """Routes that the analyst adopts: single targets before all targets, the ledger before the configuration.

    A line of the ledger has the subject ``estimate``, the action ``adopt`` and the value ``ROUTE`` or
    ``TARGET_ID ROUTE``; a later line on the same target wins.
    """
    pins: dict[str, dict[str, str]] = {}
    for pin in config.regression.adopt:
        if pin.target_id and pin.target_id not in target_ids:
            faults.warning(
                "adopted_route_without_target", "estimate",
                f"a route is adopted for target {pin.target_id}, which is not in the study",
            )  # fmt: skip
            continue
        pins[pin.target_id] = {"target_id": pin.target_id, "route": pin.route, "why": pin.why}
    lines = ledger[(ledger["subject"] == "estimate") & (ledger["action"] == "adopt")]
    for line in lines.sort_values("date", kind="stable").itertuples():
        *target, route = str(line.value).split() or [""]
        name = target[0] if len(target) == 1 else ""
        if route not in ROUTE_ORDER or len(target) > 1 or (name and name not in target_ids):
            faults.warning(
                "ledger_line_not_applied", "estimate",
                f"the ledger adopts '{line.value}', which is no route, or no target and route, of this study",
                f"Write a route ({', '.join(ROUTE_ORDER)}), or a target and a route.",
            )  # fmt: skip
            continue
        pins[name] = {"target_id": name, "route": route, "why": str(line.why)}
    return [pins[name] for name in sorted(pins, key=lambda name: (name == "", name))]


def read_saved_models(results: Path) -> tuple[StudyConfig, dict[str, Any]]:
    """Read the saved models of a study's results, and the configuration they carry.

    Raises
    ------
    UnreadableStudy
        When the folder holds no saved models, or not of this format.
    """
    path = results / SAVED_MODELS
    try:
        models = json.loads(path.read_text(encoding="utf-8"))
        config = StudyConfig.model_validate(models["settings"])
        missing = {
            "index_flood",
            "quantiles",
            "growth",
            "routes",
            "gauges",
            "adopt",
            "home",
            "pooling_method",
        } - set(models)
        if models["format"] != FORMAT or missing:
            raise ValueError("another format")
    except OSError:
        what = "is not a folder" if not results.is_dir() else f"has no {SAVED_MODELS}"
        raise UnreadableStudy([_fault(results, f"This {what}: it holds no finished study.")]) from None
    except (ValueError, KeyError, TypeError):
        raise UnreadableStudy(
            [_fault(path, "The saved models cannot be read by this version.", "Run the study again.")]
        ) from None
    return config, models


def _fault(path: Path, problem: str, mend: str = "") -> Fault:
    return Fault(
        "no_saved_models",
        "problem",
        str(path),
        problem,
        mend or "Name the results folder of a study that ran to its end.",
    )
