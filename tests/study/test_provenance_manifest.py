"""What the manifest says of a run, and what it must not say."""

import hashlib
import json
import os

import pytest

from wrackline.study.config import StudyConfig
from wrackline.study.contribution import to_json
from wrackline.study.faults import StudyFaults
from wrackline.study.provenance import build_manifest, digest_run, digest_sources, written_files


def make(folder, **inputs):
    folder.mkdir(parents=True, exist_ok=True)
    for name in ("study.yaml", "gauges.csv", "peaks.csv"):
        (folder / name).write_text(name, encoding="utf-8")
    (folder / "results" / "tables").mkdir(parents=True)
    (folder / "results" / "tables" / "a.csv").write_text("x\n1\n", encoding="utf-8")
    return build_manifest(
        StudyConfig.model_validate({"inputs": inputs}), folder / "study.yaml", folder / "results"
    )


def test_digests_are_the_sha256_of_the_bytes(tmp_path):
    manifest = make(tmp_path)
    assert {"sha256": hashlib.sha256(b"gauges.csv").hexdigest()} == manifest["inputs"]["gauges.csv"]
    assert {"tables/a.csv": {"sha256": hashlib.sha256(b"x\n1\n").hexdigest()}} == manifest["outputs"]


def test_equal_studies_in_different_places_and_times_give_equal_manifests(tmp_path):
    first, second = make(tmp_path / "a"), make(tmp_path / "b ü")
    os.utime(tmp_path / "b ü" / "peaks.csv", (0, 0))
    assert to_json(first) == to_json(second)
    assert str(tmp_path) not in to_json(first)


def test_page_does_not_enter_the_run_digest_that_it_prints(tmp_path):
    manifest = make(tmp_path)
    with_page = {**manifest, "outputs": {**manifest["outputs"], "report.html": {"sha256": "0"}}}
    assert manifest["run_digest"] == digest_run(with_page)
    other = {**manifest, "outputs": {"tables/a.csv": {"sha256": "0"}}}
    assert manifest["run_digest"] != digest_run(other)


def test_run_digest_changes_with_seed_and_configuration(tmp_path):
    manifest = make(tmp_path)
    assert manifest["run_digest"] != digest_run({**manifest, "seed": 1})
    assert manifest["run_digest"] != digest_run({**manifest, "configuration": {}})


def test_every_missing_input_is_told_at_once(tmp_path):
    with pytest.raises(StudyFaults) as told:
        make(tmp_path, targets="none.csv", ledger="gone.csv")
    assert ["gone.csv", "none.csv"] == sorted(fault.value for fault in told.value.problems)


def test_former_manifest_cannot_name_files_outside_the_results(tmp_path):
    path = tmp_path / "manifest.json"
    path.write_text(json.dumps({"outputs": {"../a": {}, "/etc/b": {}, "tables/c.csv": {}}}), encoding="utf-8")
    assert ["tables/c.csv"] == [str(name) for name in written_files(path)]


@pytest.mark.parametrize("content", ["", "[]", "{}", '{"outputs": 3}', "\x00"])
def test_manifest_that_cannot_be_read_names_nothing(tmp_path, content):
    (tmp_path / "manifest.json").write_text(content, encoding="utf-8")
    assert [] == written_files(tmp_path / "manifest.json")
    assert [] == written_files(tmp_path / "none.json")


def test_digest_of_the_sources_changes_with_a_source_and_not_with_what_is_compiled(tmp_path):
    digests = []
    for name, source, compiled in (("a", "x = 1", "1"), ("b", "x = 1", "2"), ("c", "x = 2", "1")):
        (tmp_path / name / "room").mkdir(parents=True)
        (tmp_path / name / "room" / "module.py").write_text(source, encoding="utf-8")
        (tmp_path / name / "room" / "module.pyc").write_text(compiled, encoding="utf-8")
        digests.append(digest_sources(tmp_path / name))
    assert digests[0] == digests[1]
    assert digests[0] != digests[2]
