"""``wrackline freeze``, and the verification of what it froze."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def freeze_study(
    study: Annotated[
        Path, typer.Argument(metavar="FOLDER/study.yaml", help="The study file of a finished run.")
    ],
    name: Annotated[str, typer.Option(metavar="NAME", help="Name of the edition, such as 2025.")],
) -> None:
    """Keep a finished run as an edition that can be verified, compared with, and run again.

    Kept are the inputs themselves (flows and areas in the units that the study declares), tables, models, maps,
    figures, page, configuration, ledger and manifest with seed and versions, and a digest of every file. Editions lie in
    the folder `editions` beside the study file unless the study says otherwise; their files are read-only, and an
    edition is never overwritten. `wrackline check EDITION_FOLDER` verifies one.

    Exit status: 0 frozen, 1 problems (no finished run, inputs changed since, name taken), 2 cannot read.

    Example: wrackline freeze my_region/study.yaml --name 2025
    """
    from wrackline.study.editions import freeze, read_record

    folder = freeze(study, name)
    record = read_record(folder)
    print(f"{folder}: {len(record['files'])} files, read-only.")
    print(f"Digest of the edition, to note elsewhere: {record['edition_digest']}")
    print(f"To verify it: wrackline check {folder}")


def verify_edition(folder: Path) -> int:
    """Print what was altered in an edition; return the exit status."""
    from wrackline.cli import print_faults
    from wrackline.study.editions import check_edition, read_record

    found = check_edition(folder)
    print_faults(found)
    if found:
        print(f"{folder}: the edition is not as it was frozen.")
        return 1
    record = read_record(folder)
    print(f"{folder}: edition {record['edition']} is as it was frozen, {len(record['files'])} files.")
    print(f"Digest of the edition: {record['edition_digest']}")
    return 0
