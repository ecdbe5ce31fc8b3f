"""The comparison of two editions as tables, sentences and a section of the page."""

from __future__ import annotations

from collections import Counter

import numpy as np
import pandas as pd

from wrackline.report.rounding import format_aep, format_flow, format_significant, format_unit
from wrackline.stages.comparison import SHARES, Comparison
from wrackline.study.contribution import Figure, PageTable, Section
from wrackline.study.edition_differences import OWN_CAUSES, InputChange, change_table
from wrackline.study.tables import Column, Table

MOVERS = 10
TOLD_SHARE = 0.1
"""A cause is told in a sentence when it carries this part of all shares together."""
CAUSE_WORDS = {
    "software": "the software",
    "own_new_peaks": "new peaks",
    "own_revised_peaks": "revised peaks",
    "own_thresholds_flags": "changed thresholds, periods, flags or decisions on its record",
    "generalized_skew": "the generalized skew",
    "regional_models": "the regional equations, growth curves and pools",
    "site_attributes": "its attributes",
    "configuration": "choices in the configuration",
}
CHANGE_COLUMNS = (
    Column("site_id", "text", "gauge or target"),
    Column("kind", "text", "gauge or target"),
    Column("aep", "fraction", "annual exceedance probability"),
    Column("old_flow", "flow", "flood that the old edition adopted"),
    Column("new_flow", "flow", "flood that the new edition adopts"),
    Column("change_percent", "%", "change, of the old flood"),
    Column("old_lower", "flow", "lower end of the old edition's interval"),
    Column("old_upper", "flow", "upper end of the old edition's interval"),
    Column("beyond_interval", "true/false", "whether the new flood lies outside the old edition's interval"),
    Column("old_source", "text", "what the old flood rests on"),
    Column("new_source", "text", "what the new flood rests on"),
)
SHARE_MEANINGS = {
    "software": "same inputs and choices, run with the new software",
    "own_new_peaks": "rows of the gauge's own record that came or went",
    "own_revised_peaks": "rows of the gauge's own record whose values changed",
    "own_thresholds_flags": "thresholds, periods, flags of peaks, and the ledger's decisions on the gauge's record",
    "generalized_skew": "the generalized skew, through records of the region",
    "regional_models": "regional equations, growth curves and pool membership, through records and sites of the region",
    "site_attributes": "the site's own attributes",
    "configuration": "choices in the study file and the ledger that are not about a record",
}
INPUT_COLUMNS = (
    Column("file", "text", "file of the study"),
    Column("site_id", "text", "gauge, target or region"),
    Column("place", "text", "where in the file"),
    Column("column", "text", "column, or key of the configuration"),
    Column("change", "text", "added, removed or changed"),
    Column("old", "text", "what the old edition has"),
    Column("new", "text", "what the new edition has"),
    Column("cause", "text", "the cause that it counts as in change_attribution"),
)


def comparison_tables(found: Comparison) -> tuple[Table, ...]:
    """The tables ``changes``, ``change_attribution`` and ``input_changes``."""
    kinds, ids = (
        (list(part) for part in zip(*found.keys.sites, strict=True)) if found.keys.sites else ([], [])
    )
    p = len(found.keys.aeps)
    head = {
        "site_id": np.repeat(np.array(ids, dtype=object), p),
        "kind": np.repeat(np.array(kinds, dtype=object), p),
        "aep": np.tile(np.array(found.keys.aeps, dtype=float), len(ids)),
    }
    changes = pd.DataFrame(
        {
            **head,
            "old_flow": found.old_flow.ravel(),
            "new_flow": found.new_flow.ravel(),
            "change_percent": found.change_percent.ravel(),
            "old_lower": found.old_lower.astype(float).ravel(),
            "old_upper": found.old_upper.astype(float).ravel(),
            "beyond_interval": found.beyond.ravel(),
            "old_source": found.old_source.ravel(),
            "new_source": found.new_source.ravel(),
        }
    )
    shares = pd.DataFrame(
        {
            **head,
            "change_percent": found.change_percent.ravel(),
            **{c: found.shares[c].ravel() for c in SHARES},
        }
    )
    share_columns = tuple(Column(c, "% of the old flood", SHARE_MEANINGS[c]) for c in SHARES)
    return (
        Table("changes", changes, CHANGE_COLUMNS),
        Table("change_attribution", shares, (*CHANGE_COLUMNS[:3], CHANGE_COLUMNS[5], *share_columns)),
        Table("input_changes", change_table(found.inputs), INPUT_COLUMNS),
    )


def biggest_movers(found: Comparison, count: int = MOVERS) -> list[int]:
    """Numbers of the sites whose rare flood moved most, first the largest; none that did not move."""
    change = np.abs(np.log(found.new_flow[:, found.rare] / found.old_flow[:, found.rare]))
    order = np.argsort(-change, kind="stable")[:count]
    return [int(i) for i in order if change[i] > 0]


def tell_mover(found: Comparison, site: int) -> str:
    """Say in a sentence how far a site's rare flood moved, and why."""
    kind, name = found.keys.sites[site]
    at = (site, found.rare)
    beyond = ", outside the old interval" if found.beyond[at] else ""
    text = (
        f"{kind.capitalize()} {name}: the {format_aep(found.keys.aeps[found.rare])} flood went from "
        f"{format_flow(float(found.old_flow[at]))} to {format_flow(float(found.new_flow[at]))} {format_unit(found.flow_unit)} "
        f"({_signed(float(found.change_percent[at]))}{beyond}): "
    )
    shares = {cause: float(found.shares[cause][at]) for cause in SHARES}
    whole = sum(abs(value) for value in shares.values())
    if not np.isfinite(whole):
        return (
            text + "a study mixed of both editions has no estimate here, so the causes cannot be told apart."
        )
    told = sorted(
        (cause for cause in SHARES if abs(shares[cause]) >= TOLD_SHARE * whole), key=lambda c: -abs(shares[c])
    )
    reasons = [
        f"{_signed(shares[cause])} by {CAUSE_WORDS[cause]}{_detail(found, cause, kind, name)}"
        for cause in told
    ]
    return text + ", ".join(reasons) + "."


def change_section(found: Comparison) -> Section:
    """The page's section on what changed since the previous edition, and why."""
    movers = biggest_movers(found)
    files = (
        Figure(
            "change_map.png",
            _map_caption(found),
            "Map of the sites, coloured and sized by the change of a rare flood.",
        ),
        Figure(
            "change_shares.png",
            "The sites that moved most, and the share of every cause.",
            "Bars at each site: shares of the causes to both sides of no change.",
        ),
    )
    return Section(
        key="change",
        title=f"What changed since edition {found.old}",
        paragraphs=(*_overview(found), *(tell_mover(found, site) for site in movers[:5]), *found.notes),
        figures=files if movers else (),
        tables=(*_mover_table(found, movers), *_input_table(found)),
        method=(
            "The old inputs are run again with this software first; what differs then is the software's share. All other causes are "
            "shared by studies mixed of both editions: every cause's effect is averaged over all orders in which the causes "
            "can act (Shapley, 1953), so the shares sum to the change and depend on no order.",
            "What a site's own record or attributes did not change is booked under the regional models: it came through other sites.",
        ),
    )


def _overview(found: Comparison) -> list[str]:
    if not found.keys.sites:
        return [f"No site has an estimate in both editions {found.old} and {found.new}."]
    change, rare = found.change_percent[:, found.rare], format_aep(found.keys.aeps[found.rare])
    up, down = int((change > 0).sum()), int((change < 0).sum())
    beyond = int(found.beyond[:, found.rare].sum())
    words = [
        f"Compared with edition {found.old}, the {rare} flood rose at {up} and fell at {down} of {len(change)} sites. The change is "
        f"{_signed(float(np.median(change)))} in the middle, {_signed(float(change.min()))} to {_signed(float(change.max()))} over all. "
        f"At {beyond} sites the new flood lies outside the interval that the old edition stated.",
        f"The inputs differ in {len(found.inputs)} places; the table input_changes lists each.",
    ]
    mean = {c: float(np.nanmean(np.abs(found.shares[c][:, found.rare]))) for c in SHARES}
    told = [
        f"{CAUSE_WORDS[c]} {format_significant(mean[c], 2)} %"
        for c in sorted(SHARES, key=lambda c: -mean[c])
        if mean[c] > 0
    ]
    if told:
        words.append(
            "Mean size of the shares over the sites, in per cent of the old flood: " + ", ".join(told) + "."
        )
    if found.missing:
        shown = "; ".join(f"{kind} {site} {what}" for kind, site, what in found.missing[:10])
        more = f"; and {len(found.missing) - 10} more" if len(found.missing) > 10 else ""
        words.append(f"Not compared: {shown}{more}.")
    return words


def _detail(found: Comparison, cause: str, kind: str, name: str) -> str:
    if cause == "configuration":
        keys = [c.column or c.place for c in found.inputs if c.cause == cause]
        return f" ({_few(keys)})" if keys else ""
    own = [c for c in found.inputs if c.cause == cause and c.site_id == name]
    if not own or (cause in OWN_CAUSES and kind != "gauge"):
        return ""
    if cause == "own_new_peaks":
        return f" ({_tell_peaks(own, format_unit(found.flow_unit))})"
    return f" ({_few([_tell_change(c) for c in own])})"


def _tell_peaks(own: list[InputChange], unit: str) -> str:
    added = [
        (change.place.removeprefix("water year "), change.new) for change in own if change.change == "added"
    ]
    gone = [change.place for change in own if change.change == "removed"]
    parts = []
    if len(added) == 1:
        year, flow = added[0]
        parts.append(f"water year {year}: {format_flow(float(flow)) if _is_number(flow) else flow} {unit}")
    elif added:
        years = sorted(year for year, _ in added)
        known = [(float(flow), year) for year, flow in added if _is_number(flow)]
        largest = f", the largest {format_flow(max(known)[0])} {unit} in {max(known)[1]}" if known else ""
        parts.append(f"{len(added)} of water years {years[0]} to {years[-1]}{largest}")
    if gone:
        parts.append(f"{_few(gone)} taken out")
    return "; ".join(parts)


def _tell_change(change: InputChange) -> str:
    what = " ".join(part for part in (change.place, change.column) if part)
    if change.change == "changed":
        return f"{what} from {change.old or 'blank'} to {change.new or 'blank'}"
    return f"{what or change.file} {change.change}"


def _mover_table(found: Comparison, movers: list[int]) -> tuple[PageTable, ...]:
    if not movers:
        return ()
    active = [c for c in SHARES if np.any(found.shares[c][:, found.rare])]
    rows = tuple(
        (
            found.keys.sites[i][1],
            format_flow(float(found.old_flow[i, found.rare])),
            format_flow(float(found.new_flow[i, found.rare])),
            _signed(float(found.change_percent[i, found.rare])),
            "yes" if found.beyond[i, found.rare] else "no",
            *(_signed(float(found.shares[c][i, found.rare])) for c in active),
        )
        for i in movers
    )
    head = ("site", "old", "new", "change", "outside old interval", *(c.replace("_", " ") for c in active))
    caption = (
        f"The {format_aep(found.keys.aeps[found.rare])} flood in {format_unit(found.flow_unit)} where it moved most, and the "
        "shares of the causes in per cent of the old flood."
    )
    return (PageTable(caption, head, rows, "tables/change_attribution.csv"),)


def _input_table(found: Comparison) -> tuple[PageTable, ...]:
    if not found.inputs:
        return ()
    counts = Counter((change.file, change.cause.replace("_", " "), change.change) for change in found.inputs)
    rows = tuple((*place, str(count)) for place, count in sorted(counts.items()))
    head = ("file", "counts as", "change", "places")
    return (PageTable("Differences of the inputs.", head, rows, "tables/input_changes.csv"),)


def _map_caption(found: Comparison) -> str:
    return (
        f"Change of the {format_aep(found.keys.aeps[found.rare])} flood since edition {found.old}: rust less, blue more; a dark rim "
        "where the new flood lies outside the old interval."
    )


def _signed(percent: float) -> str:
    if not np.isfinite(percent):
        return "unknown"
    sign = "+" if percent > 0 else "\u2212" if percent < 0 else ""
    digits = 1 if abs(percent) >= 0.1 or percent == 0 else 3
    return f"{sign}{abs(percent):.{digits}f} %"


def _few(texts: list[str], most: int = 3) -> str:
    return "; ".join(texts[:most]) + (f" and {len(texts) - most} more" if len(texts) > most else "")


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True
