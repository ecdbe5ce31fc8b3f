"""Nonsense in any cell, line or byte ends in faults or in a study, never in another exception."""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any

import pytest

from wrackline.study.checking import check

NONSENSE = (
    "", " ", "0", "-0", "-1", "1e400", "1e-400", "nan", "inf", "NaN", "None", "1,2", "1.2.3", "0x1F", "٣", "½", "true",
    "TRUE", "x" * 300, "..", "3..1", "..4", "5..", "1_000", "00101", "101", "101.0", "'00101", "=1+1", "@x", "\u202e",
    "2025-13-01", "0000", "9999-99-99", "1936-00-00", "historic", "regulated", "a b", ";", '"', "\t", "both", "😀",
)  # fmt: skip


@pytest.mark.parametrize("seed", range(8))
def test_nonsense_in_cells_is_told_or_taken(seed: int, small_study: Any, tmp_path: Path) -> None:
    draw = random.Random(seed)
    for turn in range(30):
        folder = tmp_path / str(turn)
        folder.mkdir()
        study = type(small_study)()
        for _ in range(draw.randint(1, 6)):
            name = draw.choice(sorted(study.tables))
            table = study.tables[name]
            line = draw.choice(table)
            line[draw.randrange(len(line))] = draw.choice(NONSENSE)
        found = check(study.write(folder))
        assert all(fault.problem and fault.code for fault in (*found.problems, *found.warnings))


@pytest.mark.parametrize("seed", range(4))
def test_damaged_bytes_are_told_or_taken(seed: int, small_study: Any, tmp_path: Path) -> None:
    draw = random.Random(seed)
    for turn in range(20):
        folder = tmp_path / str(turn)
        folder.mkdir()
        small_study.raw = {}
        study_file = small_study.write(folder)
        path = folder / draw.choice([*sorted(small_study.tables), "study.yaml"])
        content = bytearray(path.read_bytes())
        for _ in range(draw.randint(1, 4)):
            content[draw.randrange(len(content))] = draw.randrange(256)
        path.write_bytes(bytes(content[: draw.choice([len(content), draw.randrange(len(content))])]))
        assert check(study_file).exit_status in (0, 1, 2)
