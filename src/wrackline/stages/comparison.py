"""Two editions compared: what moved at every site, and which causes moved it by how much."""

from __future__ import annotations

from collections.abc import Collection, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.hydrology.attribution import share_change
from wrackline.hydrology.records import BoolArray, FloatArray
from wrackline.stages.counterfactual import Counterfactuals, SiteKeys, collect_adopted
from wrackline.stages.running import StudyFiles
from wrackline.study.edition_differences import (
    CAUSES,
    OWN_CAUSES,
    REGIONAL_CAUSES,
    InputChange,
    list_input_changes,
    read_tables,
)
from wrackline.study.editions import Edition
from wrackline.study.faults import StudyFaults
from wrackline.study.provenance import digest_sources, software_versions
from wrackline.study.tables import read_table

SHARES = ("software", *CAUSES)
TEXT = ("source", "route", "warnings", "reasons")
INSEPARABLE = (StudyFaults, KeyError, IndexError, ValueError)
"""What a run on parts that do not fit together ends in, such as choices that name an attribute of one edition only."""


@dataclass(frozen=True)
class Comparison:
    """What moved between two editions at n sites and p probabilities.

    Attributes
    ----------
    old, new : str
        Names of the editions.
    flow_unit : str
        Unit of all flows, the new edition's.
    keys : SiteKeys
    old_flow, new_flow, old_lower, old_upper : (n, p)
        Adopted floods, and the interval that the old edition stated.
    old_source, new_source : (n, p) text
        What the adopted floods rest on.
    shares : dict of (n, p)
        By cause, percent of the old flood; they sum to the change. NaN where a mixed study has no estimate.
    inputs : list of InputChange
    notes : tuple of str
        What limits the attribution, in sentences.
    missing : list of (kind, site, sentence)
        Sites that only one edition has an estimate for.
    """

    old: str
    new: str
    flow_unit: str
    keys: SiteKeys
    old_flow: FloatArray
    new_flow: FloatArray
    old_lower: FloatArray
    old_upper: FloatArray
    old_source: np.ndarray
    new_source: np.ndarray
    shares: dict[str, FloatArray]
    inputs: list[InputChange]
    notes: tuple[str, ...]
    missing: list[tuple[str, str, str]]

    @property
    def change_percent(self) -> FloatArray:
        """Change of every flood, percent of the old one (n, p)."""
        return np.asarray(100.0 * (self.new_flow - self.old_flow) / self.old_flow)

    @property
    def beyond(self) -> BoolArray:
        """Whether the new flood lies outside the interval that the old edition stated (n, p)."""
        return np.asarray((self.new_flow < self.old_lower) | (self.new_flow > self.old_upper))

    @property
    def rare(self) -> int:
        """Place of the probability nearest to 0.01, by which changes are told."""
        return int(np.argmin(np.abs(np.log(np.array(self.keys.aeps) / 0.01))))


def compare_editions(
    old: Edition, new: Edition, scratch: Path, new_study: StudyFiles | None = None
) -> Comparison:
    """Compare two editions and share every change among its causes.

    The old inputs are run again first: what differs from the old numbers then is the software's share. All other
    causes are shared over mixed studies, independent of any order (see `share_change`).

    Parameters
    ----------
    scratch : Path
        An empty folder; the caller removes it.
    new_study : StudyFiles or None
        The new edition's study with its intermediates, where they are at hand.
    """
    tables = (read_tables(old), read_tables(new))
    inputs = list_input_changes(*tables)
    published = [_read_published(edition) for edition in (old, new)]
    keys = _common_sites(published)
    units = [edition.config.flow_in_m3s for edition in (old, new)]
    before, after = (
        collect_adopted(found, keys) * unit for found, unit in zip(published, units, strict=True)
    )
    mixed = Counterfactuals(old, new, *tables, scratch, new_study)
    active = _active_causes(inputs, set(keys.gauges), tables[0].config.units == tables[1].config.units)
    shares, notes = _share(mixed, active, keys)
    start, end = mixed.estimate((), keys), mixed.estimate(active, keys)
    shares["software"] = start - before
    # What a run of the new inputs does not reproduce: made by other software, else by which gauges stand together.
    rest = "regional_models" if _same_software(new) else "software"
    shares[rest] = shares[rest] + (after - end)
    if _same_software(old):
        shares["regional_models"], shares["software"] = (
            shares["regional_models"] + shares["software"],
            0.0 * before,
        )
    _book_by_site(shares, inputs, keys)
    percent = {cause: 100.0 * shares[cause] / before for cause in SHARES}
    to_unit = 1.0 / units[1]
    lower, upper = (
        collect_adopted(published[0], keys, name) * units[0] * to_unit for name in ("lower", "upper")
    )
    sources = [_sources(found, keys) for found in published]
    return Comparison(
        old=old.name,
        new=new.name,
        flow_unit=new.config.units.flow,
        keys=keys,
        old_flow=before * to_unit,
        new_flow=after * to_unit,
        old_lower=lower,
        old_upper=upper,
        old_source=sources[0],
        new_source=sources[1],
        shares=percent,
        inputs=inputs,
        notes=tuple(notes),
        missing=_one_sided(published, keys, new.name, old.name),
    )


def _read_published(edition: Edition) -> dict[str, pd.DataFrame]:
    found = {
        name: read_table(edition.table_folder / f"{name}.csv", text=TEXT)
        for name in ("gauge_estimates", "target_estimates")
    }
    found["target_estimates"] = found["target_estimates"].rename(columns={"route": "source"})
    return found


def _sources(tables: dict[str, pd.DataFrame], keys: SiteKeys) -> np.ndarray:
    return collect_adopted(tables, keys, "source")


def _common_sites(published: Sequence[dict[str, pd.DataFrame]]) -> SiteKeys:
    found = []
    for table, key in (("gauge_estimates", "gauge_id"), ("target_estimates", "target_id")):
        adopted = [
            tables[table][tables[table]["adopted"].astype(bool)].dropna(subset="flow") for tables in published
        ]
        found.append((set.intersection(*(set(rows[key]) for rows in adopted)), adopted))
    aeps = [
        set.intersection(*(set(rows["aep"]) for rows in adopted if len(rows)))
        for _, adopted in found
        if any(map(len, adopted))
    ]
    common = sorted(set.intersection(*aeps), reverse=True) if aeps else []
    return SiteKeys(tuple(sorted(found[0][0])), tuple(sorted(found[1][0])), tuple(common))


def _active_causes(inputs: list[InputChange], gauges: set[str], same_units: bool) -> tuple[str, ...]:
    """Causes that the inputs' differences can act through; with other units, records are exchanged whole."""
    found = {change.cause for change in inputs if change.cause not in OWN_CAUSES or change.site_id in gauges}
    if not same_units and found & set(OWN_CAUSES):
        found = found - set(OWN_CAUSES) | {"own_revised_peaks"}
    if any(change.cause in OWN_CAUSES or change.cause == "regional_models" for change in inputs):
        found |= set(REGIONAL_CAUSES)
    return tuple(cause for cause in CAUSES if cause in found)


def _share(
    mixed: Counterfactuals, active: tuple[str, ...], keys: SiteKeys
) -> tuple[dict[str, FloatArray], list[str]]:
    """Share the change among causes; those whose mixed studies cannot be run act together, and a note says so."""
    zero = np.zeros((len(keys.sites), len(keys.aeps)))
    own = tuple(cause for cause in active if cause in OWN_CAUSES)
    other = tuple(cause for cause in active if cause not in OWN_CAUSES)
    notes: list[str] = []
    for groups in (
        [(cause,) for cause in active],
        [*((cause,) for cause in own), other],
        [own, other],
        [active],
    ):
        groups = [group for group in groups if group]
        # The estimates of a group's causes are booked under the one that is named for all of them.
        names = {_representative(group): group for group in groups}

        def evaluate(acted: Collection[str], names: dict[str, tuple[str, ...]] = names) -> FloatArray:
            return mixed.estimate([cause for name in acted for cause in names[name]], keys)

        try:
            shares = share_change(list(names), evaluate)
        except INSEPARABLE as error:
            if len(groups) <= 1:
                raise
            notes = [
                f"Not all causes could be told apart: a study mixed of both editions cannot be run ({_first_line(error)})."
            ]
            continue
        notes += [
            f"{', '.join(_words(one) for one in group)} are told together as {_words(name)}."
            for name, group in names.items()
            if len(group) > 1
        ]
        return {cause: shares.get(cause, zero) for cause in CAUSES}, notes
    return dict.fromkeys(CAUSES, zero), notes


def _representative(group: tuple[str, ...]) -> str:
    preferred = ("regional_models", "configuration", "own_revised_peaks")
    return next((cause for cause in preferred if cause in group), group[0])


def _book_by_site(shares: dict[str, FloatArray], inputs: list[InputChange], keys: SiteKeys) -> None:
    """Move to the regional models what a site's record or attributes cannot have done, because they did not change."""
    for cause in (*OWN_CAUSES, "site_attributes"):
        touched = {change.site_id for change in inputs if change.cause == cause}
        own = np.array(
            [site in touched and (kind == "gauge" or cause not in OWN_CAUSES) for kind, site in keys.sites],
            dtype=bool,
        )
        shares["regional_models"] = shares["regional_models"] + np.where(own[:, None], 0.0, shares[cause])
        shares[cause] = np.where(own[:, None], shares[cause], 0.0)


def _same_software(edition: Edition) -> bool:
    made_by = edition.manifest
    return bool(
        made_by.get("software") == software_versions() and made_by.get("sources_sha256") == digest_sources()
    )


def _one_sided(
    published: Sequence[dict[str, pd.DataFrame]], keys: SiteKeys, new: str, old: str
) -> list[tuple[str, str, str]]:
    found = []
    for kind, table, key, known in (
        ("gauge", "gauge_estimates", "gauge_id", keys.gauges),
        ("target", "target_estimates", "target_id", keys.targets),
    ):
        sides = [set(tables[table][tables[table]["adopted"].astype(bool)][key]) for tables in published]
        for site in sorted((sides[0] | sides[1]) - set(known)):
            only, other = (new, old) if site in sides[1] else (old, new)
            found.append(
                (kind, site, f"has an adopted estimate in edition {only} and none in edition {other}")
            )
    return found


def _words(cause: str) -> str:
    return cause.replace("_", " ")


def _first_line(error: Exception) -> str:
    if isinstance(error, StudyFaults):
        return str(error.problems[0])
    return (str(error).splitlines() or [type(error).__name__])[0]
