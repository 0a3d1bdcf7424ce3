"""A profile in a notebook: what it says of itself, and small figures with their numbers in them."""

from __future__ import annotations

import re
import xml.etree.ElementTree as ElementTree
from pathlib import Path

import pytest

from breakstep.errors import ChoiceError
from breakstep.profile.run import Profile
from breakstep.profile.store import read_profile
from breakstep.profile.words import LABELS
from tests.unit.profile.sketch import draw

FOLDER = Path(__file__).parents[3] / "profiles" / "single_spark"


@pytest.fixture(scope="module")
def profile() -> Profile:
    return read_profile(FOLDER / "lockstep")


def parsed(page: str) -> ElementTree.Element:
    """The page as XML, which it must be."""
    return ElementTree.fromstring(f"<div>{page}</div>")


def test_in_one_line(profile: Profile) -> None:
    assert repr(profile).startswith("<Profile single_spark, lockstep: 60 tasks, 3 cycles, 2 workers, complete from ")
    assert repr(Profile.from_record(draw("0.0 |AA|"))) == (
        "<Profile drawn, tasked: 1 tasks, 1 cycles, 1 workers, complete>"
    )


def test_on_one_page(profile: Profile) -> None:
    page = profile._repr_html_()
    root = parsed(page)
    words = "".join(root.itertext())
    assert "single_spark, lockstep" in words
    assert "the longest wait is" in words
    cells = [["".join(cell.itertext()) for cell in row] for row in root.iter("tr")]
    shares = {row[0]: row[2] for row in cells if row[0] in LABELS.values()}
    expected = {
        LABELS[name]: f"{100 * ns / profile.ledger.available_ns:.1f} %"
        for name, ns in profile.ledger.accounts_ns.items()
    }
    assert shares == expected


def test_figures_are_well_formed_and_hold_their_numbers(profile: Profile) -> None:
    figures = profile.figures
    for figure in (figures.accounts, figures.chain, figures.live, figures.steps):
        root = parsed(figure._repr_html_())
        assert root.find(".//figcaption") is not None
        assert not re.search(r"(href|src)=", figure.body)
    burn = "".join(parsed(figures.map("burn").body).itertext())
    kernels = profile.intervals[(profile.intervals["step"] == "burn") & (profile.intervals["what"] == "kernel")]
    tiles = profile.tasks.set_index("task")["tile"].loc[kernels["task"]].to_numpy()
    assert f"tile 0,1: {kernels['cpu_ns'][tiles == 1].sum() / 1e6:.4g} ms" in burn
    assert "accounts" in repr(figures)


def test_a_map_of_no_step_is_refused(profile: Profile) -> None:
    with pytest.raises(ChoiceError, match="step melt: expected a step of the run, which has burn, dt, sweep_x"):
        profile.figures.map("melt")


def test_a_run_that_did_nothing() -> None:
    empty = Profile.from_record(draw("0.0 |....|"))
    assert "longest waitnone" in "".join(parsed(empty._repr_html_()).itertext())
    assert "nothing" in empty.figures.live.body
    assert "<tbody></tbody>" in empty.figures.chain.body
