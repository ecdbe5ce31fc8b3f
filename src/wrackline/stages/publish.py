"""Stage `publish`: tables, maps, page and manifest, put into the results folder as a whole."""

from __future__ import annotations

import os
import shutil
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd

from wrackline.hydrology.records import PeakRecords
from wrackline.report.glance import count_study, list_ledger, list_peaks, summarise
from wrackline.report.map_styles import style_layers
from wrackline.report.maps import Places, draw_study_map
from wrackline.report.page import PageFigure, Run, StudyPage, order_sections, render_page
from wrackline.report.page_data import build_page_data
from wrackline.report.question import describe_question
from wrackline.report.style import save_figure
from wrackline.stages.running import StudyFiles, main
from wrackline.study.contribution import to_json
from wrackline.study.faults import Fault, sort_faults
from wrackline.study.gis import Layer, write_geopackage
from wrackline.study.handover import read_records, read_sites
from wrackline.study.provenance import MANIFEST, PAGE, build_manifest, digest_file, written_files
from wrackline.study.published import (
    StageOutput,
    column_table,
    read_stages,
    stages_to_publish,
    warning_table,
)
from wrackline.study.study_layers import skew_layers, study_layers
from wrackline.study.tables import Column, Table, write_table, write_text

STAGING = ".publishing"
MAP_FIGURE = "publish_map.png"
SKEW_MAP = "skew.tif"
PEAKS_COLUMNS = (
    Column("gauge_id", "text", "gauge"),
    Column("water_year", "year", "water year, named by the calendar year in which it ends"),
    Column("low", "flow", "the flood was at least this; equal to `high` where it is known exactly"),
    Column("high", "flow", "the flood was at most this; blank where there is no bound"),
    Column("threshold_low", "flow", "least flood of that year that would be on record with its size"),
    Column("threshold_high", "flow", "largest such flood; blank where there is no bound"),
    Column("historic", "true/false", "whether it is a historic flood, outside the systematic record"),
    Column("cause", "text", "cause of the flood as the peaks table says it"),
)


@dataclass(frozen=True)
class Material:
    """What the stages left, read once."""

    stages: list[StageOutput]
    tables: dict[str, Table]
    gauges: pd.DataFrame
    targets: pd.DataFrame
    records: PeakRecords
    warnings: tuple[Fault, ...]


def run(study: StudyFiles) -> str:
    """Publish what the stages found into the results folder."""
    material = _gather(study)
    with _staged(study.results) as folder:
        _write_tables(folder / "tables", study, material)
        _copy_figures(folder / "figures", material)
        layers = study_layers(
            study.config, study.work("intake"), material.gauges, material.targets, material.tables
        )
        layers |= skew_layers(study.work("skew"))
        _draw_map(folder / "figures" / MAP_FIGURE, material, layers)
        write_geopackage(folder / "maps" / "study.gpkg", layers)
        if (study.work("skew") / SKEW_MAP).is_file():
            shutil.copyfile(study.work("skew") / SKEW_MAP, folder / "maps" / SKEW_MAP)
        for name, style in style_layers(_regions(layers)).items():
            if name in layers:
                write_text(folder / "maps" / f"{name}.sld", style)
        manifest = build_manifest(study.config, study.study_file, folder)
        page = _page(study, material, folder, Run.from_manifest(manifest), layers)
        write_text(folder / PAGE, render_page(page))
        manifest["outputs"][PAGE] = {"sha256": digest_file(folder / PAGE)}
        write_text(folder / MANIFEST, to_json(manifest))
        count = sum(path.is_file() for path in folder.rglob("*"))
    return f"{count} files, {len(material.warnings)} warnings"


def _gather(study: StudyFiles) -> Material:
    stages = read_stages(study.work, study.study_file.name, stages_to_publish(study.config))
    intake, screen = study.work("intake"), study.work("screen")
    gauges = read_sites(intake / "gauges.csv").sort_values("gauge_id", ignore_index=True)
    path = screen / "records.csv"
    records = read_records(path if path.is_file() else intake / "records.csv", gauges["gauge_id"].tolist())
    tables = [table for output in stages for table in output.contribution.tables]
    return Material(
        stages=stages,
        tables={table.name: table for table in tables},
        gauges=gauges,
        targets=read_sites(intake / "targets.csv").sort_values("target_id", ignore_index=True),
        records=records,
        warnings=tuple(sort_faults(w for output in stages for w in output.contribution.warnings)),
    )


@contextmanager
def _staged(results: Path) -> Iterator[Path]:
    """Yield a folder to fill, and make its content that of ``results`` only when all went well.

    The manifest is moved last, so that a run killed half-way is told by digests that do not fit. Files
    that the former manifest names and this run does not make are removed; anything else stays.
    """
    folder = results / STAGING
    if folder.exists():
        shutil.rmtree(folder)
    folder.mkdir(parents=True)
    try:
        yield folder
        former = written_files(results / MANIFEST)
        files = sorted(path.relative_to(folder) for path in folder.rglob("*") if path.is_file())
        for name in sorted(files, key=lambda name: name == Path(MANIFEST)):
            if name == Path(MANIFEST):
                _remove_left_over(results, {Path(old) for old in former} - set(files))
            (results / name).parent.mkdir(parents=True, exist_ok=True)
            os.replace(folder / name, results / name)
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _remove_left_over(results: Path, names: set[Path]) -> None:
    for name in sorted(names):
        path = results / name
        if not path.parent.resolve().is_relative_to(results.resolve()) or not (
            path.is_file() or path.is_symlink()
        ):
            continue
        path.unlink()
        if path.parent != results and not any(path.parent.iterdir()):
            path.parent.rmdir()


def _write_tables(folder: Path, study: StudyFiles, material: Material) -> None:
    """Copy the stages' tables as they are, and add the lists that only the end of a study can make."""
    folder.mkdir()
    for output in material.stages:
        names = [f"{table.name}.csv" for table in output.contribution.tables]
        for name in [*names, *(f"{name}.json" for name in output.contribution.models)]:
            shutil.copyfile(output.folder / "tables" / name, folder / name)
    own = [_peaks_table(study, material.records), warning_table(material.warnings)]
    for table in [*own, column_table([*material.tables.values(), *own], study.config)]:
        write_table(folder / f"{table.name}.csv", table.frame)


def _peaks_table(study: StudyFiles, records: PeakRecords) -> Table:
    seen = records.observed
    unit = study.config.flow_in_m3s
    frame = pd.DataFrame(
        {
            "gauge_id": np.array(records.gauge_ids, dtype=object)[records.gauge_index][seen],
            "water_year": records.water_year[seen],
            "low": records.flow_low[seen] / unit,
            "high": records.flow_high[seen] / unit,
            "threshold_low": records.perception_low[seen] / unit,
            "threshold_high": records.perception_high[seen] / unit,
            "historic": records.historic[seen],
            "cause": records.cause[seen].astype(object),
        }
    )
    return Table("peaks_used", frame, PEAKS_COLUMNS)


def _copy_figures(folder: Path, material: Material) -> None:
    folder.mkdir()
    for output in material.stages:
        for name, path in output.published_figures().items():
            shutil.copyfile(path, folder / name)


def _draw_map(path: Path, material: Material, layers: Mapping[str, Layer]) -> None:
    gauges, targets = layers["gauges"].frame, layers["targets"].frame
    figure = draw_study_map(
        _places(gauges, "gauge_id"),
        (gauges["standing"] == "used").to_numpy(),
        _places(targets, "target_id"),
        basins=tuple(layers["basins"].frame.geometry),
        regions=tuple(layers["regions"].frame.geometry),
    )
    save_figure(figure, path)


def _places(sites: pd.DataFrame, key: str) -> Places:
    return Places(
        ids=tuple(sites[key]),
        longitude=sites["longitude"].to_numpy(dtype=float),
        latitude=sites["latitude"].to_numpy(dtype=float),
        group=tuple(text if isinstance(text, str) else "" for text in sites["region"]),
    )


def _regions(layers: Mapping[str, Layer]) -> list[str]:
    """Regions of the gauges in use, in the order in which the map colours them."""
    gauges = layers["gauges"].frame
    used = gauges.loc[gauges["standing"] == "used", "region"]
    return sorted({text if isinstance(text, str) else "" for text in used})


def _page(
    study: StudyFiles, material: Material, folder: Path, run: Run, layers: Mapping[str, Layer]
) -> StudyPage:
    sections = order_sections(s for output in material.stages for s in output.published_sections())
    shown = {figure.file: figure for section in sections for figure in section.figures}
    study_map = PageFigure(
        (folder / "figures" / MAP_FIGURE).read_bytes(),
        "Gauges by region, and the ungauged sites. Thin lines are basins, dashed lines regions.",
        _describe_map(material),
    )
    return StudyPage(
        config=study.config,
        run=run,
        counts=count_study(material.tables, len(material.gauges), len(material.targets)),
        summary=summarise(study.config, material.tables, material.targets),
        study_map=study_map if len(material.gauges) else None,
        sections=sections,
        figures={
            name: PageFigure((folder / "figures" / name).read_bytes(), figure.caption, figure.alt)
            for name, figure in shown.items()
        },
        warnings=material.warnings,
        ledger=list_ledger(material.tables),
        peaks=list_peaks(material.records, material.gauges, study.config.flow_in_m3s),
        asked=describe_question(study.config, len(material.gauges), len(material.targets)),
        data=_page_data(study, material, folder, layers) if len(material.gauges) else None,
    )


def _page_data(
    study: StudyFiles, material: Material, folder: Path, layers: Mapping[str, Layer]
) -> dict[str, Any]:
    """What the page's scripts show; peaks of all gauges that were read, also of those left out."""
    path = study.work("intake") / "records.csv"
    ids = material.gauges["gauge_id"].tolist()
    records = read_records(path, ids) if path.is_file() else material.records
    return build_page_data(
        study.config,
        material.tables,
        {name: model for output in material.stages for name, model in output.contribution.models.items()},
        material.gauges,
        material.targets,
        records,
        layers,
        folder / "maps" / SKEW_MAP,
    )


def _describe_map(material: Material) -> str:
    gauges = material.gauges
    text = f"Map of {len(gauges)} gauges and {len(material.targets)} ungauged sites"
    if len(gauges):
        text += (
            f", latitude {gauges['latitude'].min():.1f} to {gauges['latitude'].max():.1f} degrees, "
            f"longitude {gauges['longitude'].min():.1f} to {gauges['longitude'].max():.1f} degrees"
        )
    return text + "."


if __name__ == "__main__":
    main("publish", run)
