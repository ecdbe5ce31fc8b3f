"""Appendices ready to print: attributes of the gauges, equations with rounded numbers, and a worked example."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from scipy.special import stdtrit

from wrackline.hydrology.attributes import TRANSFORMS
from wrackline.report.rounding import format_aep, format_flow, format_significant
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import PageTable, Section

DIGITS = 4
"""Decimals of printed coefficients: an error of 5e-5 in each keeps floods within 1 % for log attributes up to 5."""


def appendix_section(config: StudyConfig, models: dict[str, Any], sites: pd.DataFrame) -> Section:
    """Everything a reader needs to compute the tables by hand."""
    tables = [_attribute_table(config, models, sites)]
    paragraphs = [
        "The tables below are enough to compute the study's estimates by hand. Areas are in km2 and floods in m3/s inside the equations, whatever units the "
        "study's tables have; logarithms are of base 10. The peaks behind them are in the table of peaks used.",
    ]
    equations: list[tuple[str, dict[str, Any], list[float | None]]] = [
        ("index flood", models["index_flood"], [None])
    ]
    if models["quantiles"]:
        equations.append(("floods", models["quantiles"], models["quantiles"]["aeps"]))
    for name, saved, aeps in equations:
        tables += [
            _coefficient_table(name, saved, aeps),
            *_covariance_tables(name, saved, aeps),
            _range_table(name, saved),
        ]
        paragraphs.append(_worked_example(config, name, saved, aeps, sites))
    tables.append(_growth_table(models))
    return Section(
        key="appendices",
        title="Appendices: attributes, equations, a worked example",
        paragraphs=tuple(paragraphs),
        tables=tuple(tables),
    )


def _terms(saved: dict[str, Any]) -> list[tuple[str, str]]:
    return list(zip(saved["attributes"], saved["transforms"], strict=True))


def _printed(value: float, digits: int) -> str:
    """A number with enough digits for the work at hand, never as an exponent."""
    return f"{value:.{digits}f}"


def _coefficient_digits(saved: dict[str, Any]) -> list[int]:
    """Decimals for every column: four, and more where the attribute itself is large."""
    first = max(len(saved["regions"]), 1)
    largest = np.maximum(np.abs(saved["space"]["lower"]), np.abs(saved["space"]["upper"]))
    extra = [max(0, int(np.ceil(np.log10(max(v, 1.0) / 5.0)))) for v in largest]
    repeat = max(len(saved["regions"]), 1) if saved["separate"] else 1
    return [DIGITS] * first + [DIGITS + e for e in extra] * repeat


def _coefficient_table(name: str, saved: dict[str, Any], aeps: list[float | None]) -> PageTable:
    digits = _coefficient_digits(saved)
    rows = tuple(
        (
            format_aep(aep) if aep is not None else saved["statistic"],
            *(_printed(b, d) for b, d in zip(coefficients, digits, strict=True)),
            _printed(variance, 6),
        )
        for aep, coefficients, variance in zip(
            aeps, saved["coefficients"], saved["model_variance"], strict=True
        )
    )
    return PageTable(
        f"Equations of the {name}: log10 of the flood is the sum of coefficient times column.",
        ("flood", *saved["columns"], "model-error variance"),
        rows,
        "tables/equations.json",
    )


def _covariance_tables(name: str, saved: dict[str, Any], aeps: list[float | None]) -> list[PageTable]:
    """Matrices for the variance of prediction; of the floods, those of up to three probabilities are printed."""
    chosen = list(range(len(aeps)))
    if len(chosen) > 3:
        known = np.array([aep for aep in aeps if aep is not None])
        chosen = sorted({int(np.argmin(np.abs(np.log(known / wanted)))) for wanted in (0.5, 0.1, 0.01)})
    found = []
    for p in chosen:
        aep = aeps[p]
        label = f"AEP {format_aep(aep)}" if aep is not None else name
        found.append(
            PageTable(
                f"Covariance of the coefficients, {label}: C in the variance of prediction, model-error variance + x C x'.",
                ("", *saved["columns"]),
                tuple(
                    (column, *(format_significant(value, 5) for value in row))
                    for column, row in zip(saved["columns"], saved["coefficient_covariance"][p], strict=True)
                ),
                "tables/equations.json",
            )
        )
    return found


def _range_table(name: str, saved: dict[str, Any]) -> PageTable:
    back = {
        "none": lambda v: v,
        "log10": lambda v: 10**v,
        "sqrt": lambda v: v**2,
        "log10_plus_1": lambda v: 10**v - 1,
    }
    rows = tuple(
        (
            attribute,
            transform,
            format_significant(back[transform](low), 4),
            format_significant(back[transform](high), 4),
        )
        for (attribute, transform), low, high in zip(
            _terms(saved), saved["space"]["lower"], saved["space"]["upper"], strict=True
        )
    )
    return PageTable(
        f"Ranges of the attributes among the gauges of the {name}; beyond them the equations are not supported (area in km2).",
        ("attribute", "taken as", "smallest", "largest"),
        rows,
        "tables/equations.json",
    )


def _attribute_table(config: StudyConfig, models: dict[str, Any], sites: pd.DataFrame) -> PageTable:
    names = list(models["index_flood"]["attributes"])
    if models["quantiles"]:
        names += [name for name in models["quantiles"]["attributes"] if name not in names]
    names = [name for name in names if name != "area"]
    rows = tuple(
        (
            str(row["gauge_id"]),
            format_significant(float(row["area_km2"]) / config.area_in_km2, 5),
            *(format_significant(float(row[name]), 5) for name in names),
        )
        for _, row in sites.iterrows()
    )
    return PageTable(
        "Attributes of the gauges, as the equations use them.",
        ("gauge", f"area, {config.units.area}", *(_heading(config, name) for name in names)),
        rows,
        "tables/index_floods.csv",
    )


def _heading(config: StudyConfig, name: str) -> str:
    unit = config.attributes[name].unit
    return f"{name}, {unit}" if unit else name


def _growth_table(models: dict[str, Any]) -> PageTable:
    pools = models["growth"]
    first = next(iter(pools.values()))
    rows = tuple(
        (format_aep(aep), *(f"{pool['growth_factor'][p]:.4f}" for pool in pools.values()))
        for p, aep in enumerate(first["aeps"])
    )
    return PageTable(
        "Growth factors of the pools: flood over index flood.",
        ("AEP", *pools),
        rows,
        "tables/growth_curves.csv",
    )


def _worked_example(
    config: StudyConfig, name: str, saved: dict[str, Any], aeps: list[float | None], sites: pd.DataFrame
) -> str:
    """One gauge's place computed step by step from the printed numbers."""
    whole = sites.copy()
    whole["area"] = whole["area_km2"]
    usable = (
        whole[np.isfinite(whole[list(saved["attributes"])].to_numpy(dtype=float)).all(axis=1)]
        if saved["attributes"]
        else whole
    )
    if saved["regions"]:
        usable = usable[usable["region"].isin(saved["regions"])]
    if usable.empty:
        return f"No gauge has all attributes of the {name}."
    site = usable.sort_values("area_km2", kind="stable").iloc[len(usable) // 2]
    known = [aep for aep in aeps if aep is not None]
    p = int(np.argmin(np.abs(np.log(np.array(known) / 0.01)))) if known else 0
    digits = _coefficient_digits(saved)
    b = [float(_printed(v, d)) for v, d in zip(saved["coefficients"][p], digits, strict=True)]
    x = example_columns(saved, site)
    total = float(np.dot(b, x))
    c = np.array(saved["coefficient_covariance"][p])
    variance = float(_printed(saved["model_variance"][p], 6)) + float(np.array(x) @ c @ np.array(x))
    t = float(stdtrit(saved["degrees_of_freedom"], 0.5 + config.confidence / 2))
    reach = t * np.sqrt(variance)
    sums = " + ".join(
        f"({_printed(coefficient, d)} x {format_significant(value, 5)})"
        for coefficient, value, d in zip(b, x, digits, strict=True)
        if value != 0
    )
    label = f"flood of AEP {format_aep(known[p])}" if known else f"{saved['statistic']} annual flood"
    attributes = ", ".join(
        f"{a} {format_significant(float(site[a]), 5)}" + (" km2" if a == "area" else "")
        for a in saved["attributes"]
    )
    return (
        f"Worked example, the {label} at the place of gauge {site['gauge_id']} ({attributes}), as if it were a new site: log10 Q = {sums} = {total:.4f}, "
        f"so Q = {format_flow(10**total)} m3/s. The variance of prediction is {variance:.5f}, its root {np.sqrt(variance):.4f}; with {saved['degrees_of_freedom']} degrees of freedom "
        f"t = {t:.3f}, so the {config.confidence:.0%} interval reaches {reach:.4f} in log10: {format_flow(10 ** (total - reach))} to {format_flow(10 ** (total + reach))} m3/s."
    )


def example_columns(saved: dict[str, Any], site: pd.Series) -> list[float]:
    """The design columns of one site, rounded to five digits as they are printed."""
    values = [
        float(
            format_significant(
                float(TRANSFORMS[t](np.array(float(site["area_km2" if a == "area" else a])))), 5
            )
            .replace("\u202f", "")
            .replace("\u2212", "-")
        )
        for a, t in _terms(saved)
    ]
    if not saved["regions"]:
        return [1.0, *values]
    own = [float(site["region"] == region) for region in saved["regions"]]
    if saved["separate"]:
        return own + [inside * value for inside in own for value in values]
    return own + values
