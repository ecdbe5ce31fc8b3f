"""Stage `compare`: what moved since the previous edition, and why."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np
import pandas as pd

from wrackline.report.figures_compare import draw_change_map, draw_shares
from wrackline.report.rounding import format_aep
from wrackline.stages.compare_page import biggest_movers, change_section, comparison_tables
from wrackline.stages.comparison import SHARES, Comparison, compare_editions
from wrackline.stages.running import StudyFiles, main
from wrackline.study.contribution import Contribution, write_contribution
from wrackline.study.editions import Edition, read_edition
from wrackline.study.faults import Fault
from wrackline.study.handover import read_sites
from wrackline.study.provenance import digest_sources, software_versions

SCRATCH = "mixed_studies"


def run(study: StudyFiles) -> str:
    """Compare this run with the edition that the study names as its previous one; write ``work/compare``."""
    folder = study.work("compare")
    scratch = folder / SCRATCH
    _clear(scratch)
    old = read_edition(study.folder / study.config.editions.folder / study.config.editions.previous)
    try:
        found = compare_editions(old, this_run(study), scratch, study)
    finally:
        _clear(scratch)
    sites = pd.concat(
        [
            read_sites(study.work("intake") / f"{name}.csv").rename(columns={key: "site"})
            for name, key in (("gauges", "gauge_id"), ("targets", "target_id"))
        ]
    )
    draw_changes(found, sites, folder / "figures")
    warnings = tuple(Fault("causes_told_together", "warning", "compare", note) for note in found.notes)
    write_contribution(
        folder, Contribution("compare", comparison_tables(found), (change_section(found),), warnings)
    )
    return f"{len(found.keys.sites)} sites compared with edition {old.name}, {len(found.inputs)} differences of inputs"


def this_run(study: StudyFiles) -> Edition:
    """This study's estimates as they lie in the intermediates, before they are published."""
    config = study.config
    inputs = {key: study.folder / name for key, name in config.inputs.model_dump().items() if name}
    if config.skew.source == "map":
        inputs["given_map"] = study.folder / config.skew.given_map
    manifest = {"software": software_versions(), "sources_sha256": digest_sources()}
    return Edition(config.study.edition, config, manifest, inputs, study.work("estimate"))


def draw_changes(found: Comparison, sites: pd.DataFrame, figures: Path) -> None:
    """Draw the map of change and the shares at the sites that moved most."""
    movers = biggest_movers(found)
    if not movers:
        return
    kinds, ids = zip(*found.keys.sites, strict=True)
    placed = sites.drop_duplicates("site").set_index("site").loc[list(ids)]
    title = f"Change of the {format_aep(found.keys.aeps[found.rare])} flood"
    draw_change_map(
        figures / "change_map.png",
        placed["longitude"].to_numpy(dtype=float),
        placed["latitude"].to_numpy(dtype=float),
        found.change_percent[:, found.rare],
        found.beyond[:, found.rare],
        np.array([kind == "target" for kind in kinds]),
        title,
    )
    draw_shares(
        figures / "change_shares.png",
        [ids[i] for i in movers],
        {cause: np.nan_to_num(found.shares[cause][movers, found.rare]) for cause in SHARES},
        title,
    )


def _clear(folder: Path) -> None:
    if folder.exists():
        shutil.rmtree(folder)


if __name__ == "__main__":
    main("compare", run)
