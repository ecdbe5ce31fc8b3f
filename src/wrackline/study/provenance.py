"""What a run was made of: versions, configuration, and digests of everything read and written."""

from __future__ import annotations

import hashlib
import json
import platform
from collections.abc import Mapping
from dataclasses import dataclass
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path, PurePosixPath
from typing import Any

from wrackline.study.config import StudyConfig
from wrackline.study.contribution import to_json
from wrackline.study.faults import FaultLog

MANIFEST = "manifest.json"
PAGE = "report.html"
SOFTWARE = (
    "wrackline",
    "numpy",
    "scipy",
    "pandas",
    "geopandas",
    "shapely",
    "pyogrio",
    "rasterio",
    "contourpy",
    "matplotlib",
    "jinja2",
    "pydantic",
    "pandera",
    "pyyaml",
)
DIGEST_NOTES = {
    "sha256": "SHA-256 of the file's bytes.",
    "content_sha256": (
        "The bytes of a GeoPackage differ at every write. This is the SHA-256 of its content: for every layer in "
        "order of name, its name, coordinate system, geometry type and fields, and its rows (values and "
        "well-known binary geometry), sorted."
    ),
    "run_digest": (
        "SHA-256 of this document as written, without `run_digest` itself and without `report.html` among the "
        "outputs, because the page prints the run digest."
    ),
}


@dataclass(frozen=True)
class Run:
    """What the page says of a run: its digest, the versions, and the digests of the inputs."""

    digest: str
    software: dict[str, str]
    inputs: dict[str, dict[str, str]]

    @classmethod
    def from_manifest(cls, manifest: Mapping[str, Any]) -> Run:
        return cls(manifest["run_digest"], manifest["software"], manifest["inputs"])


def build_manifest(config: StudyConfig, study_file: Path, results: Path) -> dict[str, Any]:
    """Describe a finished run, from the files in ``results`` as they lie there.

    No clock time and no place of a machine enters: equal inputs, configuration and versions give an
    equal manifest.

    Parameters
    ----------
    config : StudyConfig
        The resolved configuration: defaults and study file together.
    study_file : Path
        The study file; inputs are named relative to it, as the configuration names them.
    results : Path
        Folder of the results; every file below it except the manifest itself is described.

    Raises
    ------
    StudyFaults
        When an input that the configuration names is missing.
    """
    manifest = {
        "edition": config.study.edition,
        "seed": config.seed,
        "configuration": config.model_dump(mode="json"),
        "software": software_versions(),
        "sources_sha256": digest_sources(),
        "inputs": digest_inputs(config, study_file),
        "outputs": digest_outputs(results),
        "digest_notes": DIGEST_NOTES,
    }
    return {**manifest, "run_digest": digest_run(manifest)}


def digest_run(manifest: Mapping[str, Any]) -> str:
    """Digest a manifest without its own digest and without the page, which prints it."""
    content = {key: value for key, value in manifest.items() if key != "run_digest"}
    content["outputs"] = {name: value for name, value in manifest["outputs"].items() if name != PAGE}
    return hashlib.sha256(to_json(content).encode("utf-8")).hexdigest()


def software_versions() -> dict[str, str]:
    """Versions of Python and of the packages that decide numbers or files; absent packages are left out."""
    found = {"python": platform.python_version()}
    for name in SOFTWARE:
        try:
            found[name] = version(name)
        except PackageNotFoundError:
            continue
    return found


@cache
def digest_sources(root: Path = Path(__file__).parents[1]) -> str:
    """Digest the program's own source files, once a process: tells two states of one version apart."""
    digest = hashlib.sha256()
    for path in sorted(root.rglob("*"), key=lambda p: p.relative_to(root).as_posix()):
        if path.is_file() and path.suffix in {".py", ".j2", ".css", ".js", ".yaml"}:
            digest.update(f"{path.relative_to(root).as_posix()} {digest_file(path)}\n".encode())
    return digest.hexdigest()


def digest_inputs(config: StudyConfig, study_file: Path) -> dict[str, dict[str, str]]:
    """Digest the study file and every input that the configuration names, under those names."""
    log = FaultLog()
    keys = {name: f"inputs.{key}" for key, name in config.inputs.model_dump().items()}
    found = {}
    for name, path in input_files(config, study_file).items():
        if path.is_file():
            found[name] = {"sha256": digest_file(path)}
            continue
        log.problem(
            "missing_input",
            study_file.name,
            "the file is not there.",
            "Put it there, or leave the entry blank.",
            column=keys.get(name, "skew.given_map"),
            value=name,
        )
    log.stop_on_problems()
    return found


def input_files(config: StudyConfig, study_file: Path) -> dict[str, Path]:
    """List the study file and all files that its configuration names, by those names."""
    names = [study_file.name, *(name for name in config.inputs.model_dump().values() if name)]
    if config.skew.source == "map":
        names.append(config.skew.given_map)
    return {name: study_file.parent / name for name in names}


def digest_outputs(results: Path) -> dict[str, dict[str, str]]:
    """Digest every file below ``results`` but the manifest, under its path there."""
    files = sorted(path for path in results.rglob("*") if path.is_file())
    names = {path.relative_to(results).as_posix(): path for path in files}
    return {name: describe_file(path) for name, path in sorted(names.items()) if name != MANIFEST}


def written_files(manifest: Path) -> list[PurePosixPath]:
    """List what an earlier run says it wrote; empty without a manifest that can be read.

    Names that would lead out of the results folder are left out: a manifest is a file that anyone can edit.
    """
    try:
        outputs = json.loads(manifest.read_text(encoding="utf-8"))["outputs"]
        names = [PurePosixPath(name) for name in outputs]
    except (OSError, ValueError, KeyError, TypeError):
        return []
    return [name for name in names if name.parts and not name.is_absolute() and ".." not in name.parts]


def digest_file(path: Path) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def digest_geopackage(path: Path) -> str:
    """SHA-256 of a GeoPackage's content, which two writes of the same layers share (see ``DIGEST_NOTES``)."""
    import pyogrio

    digest = hashlib.sha256()
    for layer in sorted(str(name) for name in pyogrio.list_layers(path)[:, 0]):
        meta, _, geometry, values = pyogrio.raw.read(path, layer=layer)
        fields = [str(name) for name in meta["fields"]]
        order = sorted(range(len(fields)), key=fields.__getitem__)
        schema = [[fields[i], str(values[i].dtype)] for i in order]
        digest.update(_line([layer, meta["crs"], meta["geometry_type"], schema]))
        count = len(geometry) if geometry is not None else (len(values[0]) if values else 0)
        digest.update(
            b"".join(
                sorted(
                    _line(
                        [
                            [_plain(values[i][row]) for i in order],
                            geometry[row].hex()
                            if geometry is not None and geometry[row] is not None
                            else None,
                        ]
                    )
                    for row in range(count)
                )
            )
        )
    return digest.hexdigest()


def describe_file(path: Path, *, by_bytes: bool = False) -> dict[str, str]:
    """Digest a file as the manifest does: a result by content where a format's bytes vary, an input by its bytes."""
    if path.suffix.lower() == ".gpkg" and not by_bytes:
        return {"content_sha256": digest_geopackage(path)}
    return {"sha256": digest_file(path)}


def _line(content: Any) -> bytes:
    return (json.dumps(content, ensure_ascii=False) + "\n").encode("utf-8")


def _plain(value: Any) -> Any:
    plain = value.item() if hasattr(value, "item") else value
    return plain if isinstance(plain, (int, str, type(None))) else repr(plain)
