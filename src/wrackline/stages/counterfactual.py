"""Studies that are half old and half new: models of one edition at records, attributes or choices of another."""

from __future__ import annotations

import os
import shutil
from collections.abc import Collection
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.records import FloatArray, PeakRecords
from wrackline.report.style import without_figures
from wrackline.stages import (
    atsite,
    dependence,
    estimate,
    intake,
    pool,
    regress,
    screen,
    skew,
    validate,
    weight,
)
from wrackline.stages.running import StudyFiles
from wrackline.study.config import StudyConfig
from wrackline.study.contribution import read_contribution
from wrackline.study.edition_differences import (
    LAYERS,
    OWN_CAUSES,
    EditionTables,
    mix_configuration,
    mix_records,
    mix_study,
)
from wrackline.study.editions import Edition, write_study
from wrackline.study.handover import read_sites, write_records
from wrackline.study.inputs import read_study
from wrackline.study.tables import read_table, write_table

MODEL_STAGES = {
    "intake": intake.run,
    "screen": screen.run,
    "dependence": dependence.run,
    "atsite": atsite.run,
    "skew": skew.run,
    "weight": weight.run,
    "pool": pool.run,
    "regress": regress.run,
    "validate": validate.run,
}
"""Everything that a site's estimate rests on beside the site's own record and attributes."""
REGIONAL_STAGES = ("dependence", "pool", "regress", "validate")
LEDGER_TEXT = ("date", "by", "subject", "action", "why", "water_year", "pool", "value", "evidence", "effect")
NO_INFLUENCE: dict[str, dict[str, Any]] = {
    "at_site": {"alternatives": False, "page_figures": (), "all_figures": "none"},
    "pooling": {"compare": (), "sheets": ()},
    "editions": {"previous": ""},
}
"""Settings under which a run is quicker and no estimate differs."""


@dataclass(frozen=True)
class SiteKeys:
    """Gauges and targets whose estimates both editions have, and their common probabilities."""

    gauges: tuple[str, ...]
    targets: tuple[str, ...]
    aeps: tuple[float, ...]

    @property
    def sites(self) -> list[tuple[str, str]]:
        """Kind and identifier of every site, in the order of all arrays."""
        return [*(("gauge", name) for name in self.gauges), *(("target", name) for name in self.targets)]


class Counterfactuals:
    """Two editions, and estimates at their common sites for any set of causes that have acted.

    Each model run and each fit is done once and kept below ``scratch`` until the caller removes that folder.

    Parameters
    ----------
    old, new : Edition
    old_tables, new_tables : EditionTables
    scratch : Path
        An empty folder to work in.
    new_study : StudyFiles or None
        The study of the new edition with its intermediates, where they are at hand; else it is run again.
    """

    def __init__(
        self,
        old: Edition,
        new: Edition,
        old_tables: EditionTables,
        new_tables: EditionTables,
        scratch: Path,
        new_study: StudyFiles | None = None,
    ) -> None:
        self.editions = {False: old, True: new}
        self.tables = {False: old_tables, True: new_tables}
        self.scratch, self.new_study = scratch, new_study
        self._records: dict[tuple[bool, ...], tuple[PeakRecords, pd.DataFrame]] = {}

    def models(self, records: bool, attributes: bool, configuration: bool) -> StudyFiles:
        """The study with all its models, each part of the old (False) or the new (True) edition; run when needed."""
        if records and attributes and configuration and self.new_study is not None:
            return self.new_study
        folder = self.scratch / "models" / _bits(records, attributes, configuration)
        if (folder / "done").is_file():
            return _open(folder / "study.yaml")
        mixed = mix_study(self.tables[records], self.tables[attributes], self.tables[configuration])
        inputs = {
            key: self.editions[records].inputs[key] for key in LAYERS if key in self.editions[records].inputs
        }
        if "given_map" in self.editions[configuration].inputs:
            inputs["given_map"] = self.editions[configuration].inputs["given_map"]
        study = _write_tables(mixed, inputs, self._choices(records, configuration), folder)
        with without_figures():
            for run in MODEL_STAGES.values():
                run(study)
        (folder / "done").touch()
        return study

    def estimate(self, acted: Collection[str], keys: SiteKeys) -> FloatArray:
        """Adopted floods, m3/s (sites, AEPs), when the causes named in ``acted`` have acted; NaN where there are none."""
        attributes, configuration = "site_attributes" in acted, "configuration" in acted
        regional = self.models("regional_models" in acted, attributes, configuration)
        skews = self.models("generalized_skew" in acted, attributes, configuration)
        own = tuple(cause in acted for cause in OWN_CAUSES)
        choices = self._choices(True, configuration)
        folder = self.scratch / "sites"
        if folder.exists():
            shutil.rmtree(folder)
        study = StudyFiles(choices, write_study({}, choices, folder))
        self._lay_out(study, regional, own, configuration, keys)
        for stage in REGIONAL_STAGES:
            _link(regional.work(stage), study.work(stage))
        _link(skews.work("skew"), study.work("skew"))
        with without_figures():
            self._fit(study, "atsite", _bits(*own, configuration))
            bits = (*own, "regional_models" in acted, "generalized_skew" in acted, attributes, configuration)
            self._fit(study, "weight", _bits(*bits))
            estimate.run(study)
        found = {t.name: t.frame for t in read_contribution(study.work("estimate")).tables}
        if "gauge_estimates" not in found:
            found |= {t.name: t.frame for t in read_contribution(study.work("weight")).tables}
        return collect_adopted(found, keys) * choices.flow_in_m3s

    def _choices(self, records: bool, configuration: bool) -> StudyConfig:
        mixed = mix_configuration(self.editions[records].config, self.editions[configuration].config)
        content = mixed.model_dump()
        for part, keys in NO_INFLUENCE.items():
            content[part].update({key: value for key, value in keys.items() if key in content[part]})
        return StudyConfig.model_validate(content)

    def _lay_out(
        self,
        study: StudyFiles,
        regional: StudyFiles,
        own: tuple[bool, ...],
        configuration: bool,
        keys: SiteKeys,
    ) -> None:
        """Write intake and screen for the common sites: the sites as the models know them, each with its own record."""
        source, target = regional.work("intake"), study.work("intake")
        for path in sorted(source.glob("*.csv")):
            if path.name not in ("gauges.csv", "targets.csv", "records.csv", "ledger.csv", "accounting.csv"):
                _link(path, target / path.name)
        gauges, targets = read_sites(source / "gauges.csv"), read_sites(source / "targets.csv")
        gauges = gauges[gauges["gauge_id"].isin(keys.gauges)]
        write_table(target / "gauges.csv", gauges)
        write_table(target / "targets.csv", targets[targets["target_id"].isin(keys.targets)])
        records, ledger = self._own_records(own, configuration, keys)
        write_records(target / "records.csv", records)
        write_records(study.work("screen") / "records.csv", records)
        write_table(target / "ledger.csv", ledger)
        screened = read_table(regional.work("screen") / "gauges.csv", text=("flags", "reasons"))
        screened = screened[screened["gauge_id"].isin(keys.gauges)].copy()
        screened["used"] = True
        write_table(study.work("screen") / "gauges.csv", screened)

    def _own_records(
        self, own: tuple[bool, ...], configuration: bool, keys: SiteKeys
    ) -> tuple[PeakRecords, pd.DataFrame]:
        key = (*own, configuration)
        if key not in self._records:
            acted = [cause for cause, has in zip(OWN_CAUSES, own, strict=True) if has]
            mixed = mix_records(self.tables[False], self.tables[True], acted, set(keys.gauges))
            gauges = self.tables[True].table("gauges")
            mixed["gauges"] = gauges[gauges["gauge_id"].isin(keys.gauges)]
            choices = _for_reading(self._choices(True, configuration))
            study = _write_tables(mixed, {}, choices, self.scratch / "records" / _bits(*key))
            read = read_study(study.study_file)
            others = self.tables[configuration].ledger(about_data=False)
            ledger = pd.concat([read.ledger, others.assign(effect="")]).reindex(columns=read.ledger.columns)
            self._records[key] = (read.records, ledger.fillna(""))
        return self._records[key]

    def _fit(self, study: StudyFiles, stage: str, bits: str) -> None:
        """Fit gauges, or take the fits of a like study."""
        kept = self.scratch / stage / bits
        if not kept.is_dir():
            MODEL_STAGES[stage](study)
            kept.parent.mkdir(parents=True, exist_ok=True)
            os.rename(study.work(stage), kept)
        _link(kept, study.work(stage))


def collect_adopted(tables: dict[str, pd.DataFrame], keys: SiteKeys, column: str = "flow") -> FloatArray:
    """Take the adopted floods (or another column) of gauges and targets, (sites, AEPs)."""
    parts = []
    for table, key, ids in (
        ("gauge_estimates", "gauge_id", keys.gauges),
        ("target_estimates", "target_id", keys.targets),
    ):
        index = pd.MultiIndex.from_product([ids, keys.aeps])
        rows = tables[table]
        rows = rows[rows["adopted"].astype(bool)].drop_duplicates([key, "aep"]).set_index([key, "aep"])
        parts.append(rows[column].reindex(index).to_numpy().reshape(len(ids), len(keys.aeps)))
    return np.concatenate(parts)


def _for_reading(config: StudyConfig) -> StudyConfig:
    """The configuration with what decides on records alone, for tables of peaks without polygons."""
    kept = {part: config.model_dump()[part] for part in ("units", "water_year_starts", "flags")}
    return StudyConfig.model_validate({**kept, "pooling": {"regions": "one"}, "screening": {"exclude": ()}})


def _write_tables(
    tables: dict[str, pd.DataFrame], files: dict[str, Path], config: StudyConfig, folder: Path
) -> StudyFiles:
    folder.mkdir(parents=True, exist_ok=True)
    inputs = dict(files)
    for key, table in tables.items():
        path = folder / f"{key}.csv"
        table.to_csv(path, index=False, lineterminator="\n")
        inputs[key] = path
    return _open(write_study(inputs, config, folder))


def _open(study_file: Path) -> StudyFiles:
    from wrackline.study.loading import load_config

    return StudyFiles(load_config(study_file), study_file)


def _link(source: Path, target: Path) -> None:
    target.parent.mkdir(parents=True, exist_ok=True)
    target.symlink_to(source.resolve())


def _bits(*flags: bool) -> str:
    return "".join("n" if flag else "o" for flag in flags)
