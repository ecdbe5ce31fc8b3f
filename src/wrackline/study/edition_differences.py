"""What differs between the inputs of two editions, row by row, and inputs that are half old and half new."""

from __future__ import annotations

import hashlib
from collections.abc import Collection, Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import pandas as pd

from wrackline.study.config import StudyConfig
from wrackline.study.editions import Edition

OWN_CAUSES = ("own_new_peaks", "own_revised_peaks", "own_thresholds_flags")
REGIONAL_CAUSES = ("generalized_skew", "regional_models")
CAUSES = (*OWN_CAUSES, *REGIONAL_CAUSES, "site_attributes", "configuration")
KEYS = {
    "gauges": ("gauge_id",),
    "targets": ("target_id",),
    "peaks": ("gauge_id", "water_year"),
    "thresholds": ("gauge_id", "first_year", "last_year"),
    "periods": ("gauge_id", "first_year", "last_year"),
    "redundancy": ("gauge_id", "other_id"),
    "ledger": ("date", "by", "subject", "action", "gauge_id", "water_year", "pool"),
}
DATA_SUBJECTS = ("peak", "threshold", "gauge")
"""Decisions of the ledger that are about a gauge's record; the others are choices of the study's methods."""
SITE_WORDS = ("name", "region", "regulated", "upstream_gauge", "downstream_gauge", "remark")
"""Columns of sites that are no attribute; they go with the regional data."""
LAYERS = {"basins": "site_id", "regions": "region"}
READING = ("units", "water_year_starts", "inputs", "output", "study", "editions")
"""Parts of the configuration that say how files are read and named, or that no number depends on."""
CHANGE_COLUMNS = ("file", "site_id", "place", "column", "change", "old", "new", "cause")


@dataclass(frozen=True)
class InputChange:
    """One difference: which file, site and place in it, the column, both values, and the cause it counts as."""

    file: str
    site_id: str
    place: str
    column: str
    change: str
    old: str
    new: str
    cause: str


@dataclass(frozen=True)
class EditionTables:
    """The text of an edition's input tables by key of the configuration; absent tables are absent keys."""

    config: StudyConfig
    tables: dict[str, pd.DataFrame]
    layers: dict[str, dict[str, str]]

    def table(self, key: str) -> pd.DataFrame:
        """A table's rows as text, empty where the edition has no such file."""
        return self.tables.get(key, pd.DataFrame({name: [] for name in KEYS[key]}, dtype=object))

    def ids(self, key: str) -> list[str]:
        return self.table(key)[KEYS[key][0]].tolist()

    def ledger(self, *, about_data: bool) -> pd.DataFrame:
        """The ledger's lines on records, or all others."""
        lines = self.table("ledger")
        return lines[lines["subject"].isin(DATA_SUBJECTS) == about_data] if len(lines) else lines


def read_tables(edition: Edition) -> EditionTables:
    """Read all input tables of an edition as text, and digests of its polygons."""
    tables = {key: _read_text(edition.inputs[key]) for key in KEYS if key in edition.inputs}
    layers = {
        layer: _digest_polygons(edition.inputs[layer], layer, column)
        for layer, column in LAYERS.items()
        if layer in edition.inputs
    }
    return EditionTables(edition.config, tables, layers)


def list_input_changes(old: EditionTables, new: EditionTables) -> list[InputChange]:
    """List every difference of two editions' inputs and configuration, sorted by file, site and place."""
    changes = [change for key in KEYS for change in _compare_tables(key, old, new)]
    for layer in LAYERS:
        before, after = old.layers.get(layer, {}), new.layers.get(layer, {})
        for site in sorted(set(before) | set(after)):
            if before.get(site) != after.get(site):
                told = "added" if site not in before else "removed" if site not in after else "changed"
                place = _file(layer, old, new)
                changes.append(InputChange(place, site, "", "polygon", told, "", "", "regional_models"))
    changes += _compare_configurations(old.config, new.config)
    return sorted(changes, key=lambda c: (c.file, c.site_id, c.place, c.column))


def change_table(changes: list[InputChange]) -> pd.DataFrame:
    """The differences as a table."""
    rows = [[getattr(change, name) for name in CHANGE_COLUMNS] for change in changes]
    return pd.DataFrame(rows, columns=list(CHANGE_COLUMNS), dtype=object)


def mix_records(
    old: EditionTables, new: EditionTables, acted: Collection[str], gauge_ids: Collection[str]
) -> dict[str, pd.DataFrame]:
    """Make the tables that records are built from, in which only some causes have acted, for gauges of both editions.

    Tables that the edition does not have are left out.

    Parameters
    ----------
    acted : names among `OWN_CAUSES`
        New rows (and rows gone), revised rows, and thresholds, periods, flags and decisions on records.
    """
    before, after = (_keyed(tables.table("peaks"), "peaks") for tables in (old, new))
    columns = list(dict.fromkeys([*after.columns, *before.columns]))
    before, after = (frame.reindex(columns=columns, fill_value="") for frame in (before, after))
    both = before.index.intersection(after.index)
    shared = (after if "own_revised_peaks" in acted else before).loc[both].copy()
    if "flags" in columns:
        shared["flags"] = (after if "own_thresholds_flags" in acted else before).loc[both, "flags"]
    single = after if "own_new_peaks" in acted else before
    peaks = pd.concat([shared, single.loc[single.index.difference(both)]], ignore_index=True)
    source = new if "own_thresholds_flags" in acted else old
    found = {"peaks": peaks} | {
        key: source.tables[key] for key in ("thresholds", "periods") if key in source.tables
    }
    found = {key: table[table["gauge_id"].isin(gauge_ids)] for key, table in found.items()}
    there = set(zip(found["peaks"]["gauge_id"], found["peaks"]["water_year"], strict=True))
    ledger = source.ledger(about_data=True)
    if len(ledger):
        keys = list(zip(ledger["gauge_id"], ledger["water_year"], strict=True))
        stands = [
            gauge in gauge_ids and (subject != "peak" or (gauge, year) in there)
            for (gauge, year), subject in zip(keys, ledger["subject"], strict=True)
        ]
        ledger = ledger[stands]
    return {**found, "ledger": ledger} if "ledger" in source.tables else found


def mix_study(
    records: EditionTables, attributes: EditionTables, configuration: EditionTables
) -> dict[str, pd.DataFrame]:
    """Make the tables of a study with records and sites of one edition, attributes of another, decisions of a third."""
    tables = dict(records.tables)
    for key in ("gauges", "targets"):
        if key in tables:
            tables[key] = _with_attributes(tables[key], attributes.table(key), KEYS[key][0])
    ledger = pd.concat([records.ledger(about_data=True), configuration.ledger(about_data=False)])
    if len(ledger):
        tables["ledger"] = ledger.fillna("")
    else:
        tables.pop("ledger", None)
    return tables


def mix_configuration(reading: StudyConfig, choices: StudyConfig) -> StudyConfig:
    """Combine how one edition's files are read with the choices of another."""
    content = choices.model_dump()
    content.update({part: reading.model_dump()[part] for part in READING})
    return StudyConfig.model_validate(content)


def _read_text(path: Path) -> pd.DataFrame:
    frame = pd.read_csv(path, dtype=str, keep_default_na=False, encoding="utf-8-sig", skip_blank_lines=True)
    frame.columns = [str(name).strip() for name in frame.columns]
    frame = frame.apply(lambda cells: cells.str.strip())
    return frame[(frame != "").any(axis=1)].reset_index(drop=True)


def _keyed(frame: pd.DataFrame, key: str) -> pd.DataFrame:
    """Index rows by what they are about; equal keys are numbered, so that every row has its own."""
    names = list(KEYS[key])
    ready = frame.copy()
    for name in names:
        if name not in ready:
            ready[name] = ""
    number = ready.groupby(names, sort=False).cumcount()
    keys = [*(ready[name] for name in names), number]
    ready.index = pd.MultiIndex.from_arrays(keys)
    return ready


def _compare_tables(key: str, old: EditionTables, new: EditionTables) -> Iterator[InputChange]:
    before, after = _keyed(old.table(key), key), _keyed(new.table(key), key)
    file = _file(key, old, new)
    for index in before.index.difference(after.index):
        yield _row_change(key, file, before.loc[index], "removed")
    for index in after.index.difference(before.index):
        yield _row_change(key, file, after.loc[index], "added")
    both = before.index.intersection(after.index)
    for column in sorted({*before.columns, *after.columns}):
        values = [
            (frame[column] if column in frame else pd.Series("", index=frame.index)).loc[both].tolist()
            for frame in (before, after)
        ]
        for index, was, now in zip(both, *values, strict=True):
            if not same_value(was, now):
                row = after.loc[index]
                yield InputChange(
                    file, _site(key, row), _place(key, row), column, "changed", was, now,
                    _cause(key, column, row, "changed"),
                )  # fmt: skip


def _row_change(key: str, file: str, row: pd.Series, told: str) -> InputChange:
    content = {name: str(row[name]) for name in row.index if name not in KEYS[key] and row[name] != ""}
    if key == "peaks":
        value = content.get("flow") or f"{content.get('low', '0')}..{content.get('high', '')}"
        column = "flow"
    else:
        value, column = "; ".join(f"{name} {text}" for name, text in content.items()), ""
    old, new = (value, "") if told == "removed" else ("", value)
    return InputChange(
        file, _site(key, row), _place(key, row), column, told, old, new, _cause(key, "", row, told)
    )


def _cause(key: str, column: str, row: pd.Series, told: str) -> str:
    if key == "peaks":
        if told != "changed":
            return "own_new_peaks"
        return "own_thresholds_flags" if column == "flags" else "own_revised_peaks"
    if key in ("thresholds", "periods"):
        return "own_thresholds_flags"
    if key == "ledger":
        return "own_thresholds_flags" if row["subject"] in DATA_SUBJECTS else "configuration"
    if key in ("gauges", "targets") and told == "changed" and column not in SITE_WORDS:
        return "site_attributes"
    return "regional_models"


def _site(key: str, row: pd.Series) -> str:
    return str(row.get("target_id" if key == "targets" else "gauge_id", ""))


def _place(key: str, row: pd.Series) -> str:
    if key == "peaks":
        return f"water year {row['water_year']}"
    if key in ("thresholds", "periods"):
        return f"{row['first_year']} to {row['last_year']}"
    if key == "redundancy":
        return f"with {row['other_id']}"
    if key == "ledger":
        year = f", water year {row['water_year']}" if row.get("water_year") else ""
        return f"{row['date']}, {row['subject']}, {row['action']}{year}"
    return ""


def _file(key: str, old: EditionTables, new: EditionTables) -> str:
    return getattr(new.config.inputs, key) or getattr(old.config.inputs, key) or f"{key}.csv"


def same_value(one: Any, other: Any) -> bool:
    """Whether two cells say the same: equal text, or equal numbers (``53.8`` and ``53.80``)."""
    if one == other:
        return True
    try:
        return float(one) == float(other)
    except ValueError:
        return False


def _with_attributes(sites: pd.DataFrame, source: pd.DataFrame, key: str) -> pd.DataFrame:
    """Return the sites with the attributes that ``source`` has for them; columns of either stay."""
    mixed, given = sites.copy(), source.set_index(key)
    at = mixed[key].isin(given.index)
    for column in given.columns:
        if column in SITE_WORDS:
            continue
        if column not in mixed:
            mixed[column] = ""
        mixed.loc[at, column] = given.loc[mixed.loc[at, key], column].to_numpy()
    return mixed


def _digest_polygons(path: Path, layer: str, column: str) -> dict[str, str]:
    import pyogrio

    meta, _, geometry, values = pyogrio.raw.read(path, layer=layer)
    names = values[[str(name) for name in meta["fields"]].index(column)]
    shapes: dict[str, list[bytes]] = {}
    for name, shape in zip(names, geometry, strict=True):
        shapes.setdefault(str(name), []).append(shape or b"")
    return {
        name: hashlib.sha256(str(meta["crs"]).encode() + b"".join(sorted(parts))).hexdigest()
        for name, parts in shapes.items()
    }


def _compare_configurations(old: StudyConfig, new: StudyConfig) -> list[InputChange]:
    before, after = (_flat(config.model_dump(mode="json")) for config in (old, new))
    return [
        InputChange(
            "study.yaml", "", key, "", "changed", before.get(key, ""), after.get(key, ""), "configuration"
        )
        for key in sorted(set(before) | set(after))
        if before.get(key, "") != after.get(key, "") and key.split(".")[0] not in READING
    ]


def _flat(content: Mapping[str, Any], path: str = "") -> dict[str, str]:
    found: dict[str, str] = {}
    for key, value in content.items():
        if isinstance(value, Mapping):
            found |= _flat(value, f"{path}{key}.")
        else:
            found[f"{path}{key}"] = "" if value is None else str(value)
    return found
