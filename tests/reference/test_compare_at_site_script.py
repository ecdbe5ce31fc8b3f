"""The documented comparison of published and obtained numbers runs, and agrees where methods are the same."""

from __future__ import annotations

import importlib.util
from pathlib import Path

import pytest

SCRIPT = Path(__file__).with_name("compare_at_site.py")


@pytest.fixture(scope="module")
def script():
    spec = importlib.util.spec_from_file_location("compare_at_site", SCRIPT)
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_every_published_number_stands_beside_the_one_obtained_or_a_reason(script, capsys) -> None:
    script.main()
    printed = capsys.readouterr().out
    for example in script.load_examples():
        assert example["source"] in printed
        rows = script.compare(example)
        assert all(obtained is not None or remark for _, _, obtained, remark in rows)
        assert len(rows) >= len(example["published"])


@pytest.mark.parametrize("name", ["mean_log10", "sd_log10"])
def test_means_and_standard_deviations_agree_to_half_of_the_last_printed_digit(script, name: str) -> None:
    # Four printed decimals; 3.722 was written down without its last zero.
    for example in script.load_examples():
        for key, published, obtained, _ in script.compare(example):
            if key == name:
                assert published == pytest.approx(obtained, abs=0.5e-4), example["id"]
