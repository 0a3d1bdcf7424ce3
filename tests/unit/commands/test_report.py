"""``breakstep report``: a page and its numbers from folders, and what is said of folders that hold none."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path

import pytest
from click.testing import CliRunner

from breakstep.cli import cli
from breakstep.errors import OutputError, PairsError, ProfileError

PAIR = Path(__file__).parents[3] / "profiles" / "single_spark"


def run(*arguments: object) -> str:
    found = CliRunner().invoke(cli, ["report", *map(str, arguments)], catch_exceptions=False)
    assert found.exit_code == 0, found.output
    return found.output


def numbers_in(page: Path) -> object:
    text = page.read_text(encoding="utf-8")
    embedded = re.search(r'<script type="application/json" id="numbers">(.*?)</script>', text, re.DOTALL)
    assert embedded is not None
    return json.loads(embedded[1])


def test_the_json_file_is_what_the_page_shows(tmp_path: Path) -> None:
    page, figures = tmp_path / "deep" / "page.html", tmp_path / "page.json"
    said = run(PAIR, "--out", page, "--json", figures)
    data = json.loads(figures.read_text())
    assert numbers_in(page) == data
    assert data["headline"]["sentence"] in said
    assert sorted(path.name for path in page.parent.iterdir()) == ["page.html"]


def test_profiles_are_told_apart_in_any_order(tmp_path: Path) -> None:
    one, other, both = tmp_path / "one.json", tmp_path / "other.json", tmp_path / "both.json"
    for file, folders in (
        (one, (PAIR / "lockstep", PAIR / "tasked")),
        (other, (PAIR / "tasked", PAIR / "lockstep")),
        (both, (PAIR,)),
    ):
        run(*folders, "--out", tmp_path / "page.html", "--json", file)
    assert one.read_text() == other.read_text() == both.read_text()


def test_of_several_pairs_the_one_with_the_median_gain_is_shown(tmp_path: Path) -> None:
    """The third pair is two lockstep runs, gain 1: the lowest of three, so one of the equal others is the median."""
    for number in (1, 2, 3):
        shutil.copytree(PAIR / "lockstep", tmp_path / f"lockstep-{number}")
        shutil.copytree(PAIR / ("lockstep" if number == 3 else "tasked"), tmp_path / f"tasked-{number}")
    run(tmp_path, "--out", tmp_path / "page.html", "--json", tmp_path / "page.json")
    data = json.loads((tmp_path / "page.json").read_text())
    assert [row["shown"] for row in data["measured"]["pairs"]] == [True, False, False]
    assert data["headline"]["gain"]["median"] == pytest.approx(data["measured"]["pairs"][1]["gain"], rel=1e-3)


def test_what_cannot_be_shown_is_said(tmp_path: Path) -> None:
    for folders, error, words in (
        ((tmp_path / "none",), ProfileError, "expected a profile folder, there is none"),
        ((tmp_path,), ProfileError, "manifest.json is missing"),
        ((PAIR / "tasked", PAIR / "tasked"), PairsError, "all 2 runs are tasked"),
    ):
        with pytest.raises(error, match=re.escape(words)):
            run(*folders, "--out", tmp_path / "page.html")
    with pytest.raises(OutputError, match="choose another path"):
        run(PAIR, "--out", tmp_path)
