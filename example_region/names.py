"""Invented names of rivers and places."""

from __future__ import annotations

import numpy as np

from example_region.region import Region
from wrackline.stats.streams import random_stream

_FIRST = (
    "Ostr",
    "Vel",
    "Quor",
    "Thal",
    "Mer",
    "Brae",
    "Kesh",
    "Lor",
    "Ulv",
    "Zan",
    "Peth",
    "Hax",
    "Ond",
    "Gar",
    "Ský",
    "Tøl",
)
_LAST = ("ane", "imber", "olt", "essa", "ivar", "undel", "ocke", "arrow", "eth", "isk", "avel", "umna")
_KINDS = ("River", "River", "River", "Water", "Brook")
_PLACES = (
    "at {} Bridge",
    "at {}",
    "near {}",
    "below {}",
    "above {} Weir",
    "at {} Mill",
    "at Nether {}",
    "at Upper {}",
)


def _words(seed: int, use: str) -> list[str]:
    """All invented words, in an order of their own for every use; the two uses share none."""
    words = [first + last for first in _FIRST for last in _LAST]
    half = words[::2] if use == "river" else words[1::2]
    return random_stream(seed, "example names", use).permutation(half).tolist()


def name_sites(region: Region) -> list[str]:
    """Return a name for every site, gauges first: all sites on one river carry the river's name."""
    sites, stream = region.sites, random_stream(region.seed, "example names", "kinds")
    rivers, places = _words(region.seed, "river"), _words(region.seed, "place")
    stems: dict[int, str] = {}
    names = []
    for number, stem in enumerate(region.terrain.stem[sites.cell].tolist()):
        if stem not in stems:
            word = rivers[len(stems) % len(rivers)] + (" Fork" if len(stems) >= len(rivers) else "")
            size = region.terrain.size[stem]
            kind = "River" if size > 150 else str(stream.choice(_KINDS))
            stems[stem] = f"River {word}" if kind == "River" else f"{word} {kind}"
        place = places[number % len(places)] + (" Cross" if number >= len(places) else "")
        names.append(f"{stems[stem]} {_PLACES[int(stream.integers(len(_PLACES)))].format(place)}")
    if len(set(names)) != len(names):
        raise ValueError("two sites got one name: lengthen the lists of words")
    return names


def agency_identifiers(identifiers: list[str], roles_taken: set[int], seed: int) -> dict[str, str]:
    """Return the identifiers of two gauges that another agency runs, by the first agency's."""
    free = [name for number, name in enumerate(identifiers) if number not in roles_taken]
    chosen = random_stream(seed, "example names", "agency").choice(len(free), 2, replace=False)
    return dict(zip([free[i] for i in np.sort(chosen)], ("VDB-07", "VDB-12.1"), strict=True))
