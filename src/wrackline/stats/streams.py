"""Random streams that depend on what is drawn, never on when or by whom."""

import hashlib

import numpy as np


def random_stream(seed: int, stage: str, unit: str = "") -> np.random.Generator:
    """Return the generator that belongs to one unit of one stage of a study.

    The same ``(seed, stage, unit)`` gives the same numbers whatever else is computed, in whatever
    order, on however many cores. Different names give independent streams.

    Parameters
    ----------
    seed : int
        The study's seed.
    stage, unit : str
        What draws (``"pool"``) and for whom (a pool's or a gauge's name).

    Returns
    -------
    numpy.random.Generator
        A Philox generator (Salmon and others, 2011, counter-based) keyed by a digest of the names.

    Examples
    --------
    >>> a = random_stream(1, "pool", "north").random()
    >>> a == random_stream(1, "pool", "north").random()
    True
    >>> a == random_stream(1, "pool", "south").random()
    False
    """
    digest = hashlib.sha256(f"{int(seed)}\x1f{stage}\x1f{unit}".encode()).digest()
    return np.random.Generator(np.random.Philox(key=int.from_bytes(digest[:16], "little")))
