"""What declarations show in a notebook: everything that was declared, as HTML that nothing in a name can break."""

from __future__ import annotations

from dataclasses import replace
from html.parser import HTMLParser

from breakstep.mesh.mesh import Edge, Mesh
from breakstep.scenario.setup import Setup
from breakstep.steps.step import Read, Step
from tests.toys import Toy


class Cells(HTMLParser):
    """The text of each cell and caption; refuses a tag that is not closed in its turn."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.cells: list[str] = []
        self.open: list[str] = []
        self.feed(text)
        assert not self.open

    def handle_starttag(self, tag: str, attrs: object) -> None:
        self.open.append(tag)
        if tag in ("td", "th", "caption"):
            self.cells.append("")

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        self.cells[-1] += data


def cells(shown: object) -> list[str]:
    """What an object shows."""
    return Cells(shown._repr_html_()).cells  # type: ignore[attr-defined]


def test_a_mesh() -> None:
    mesh = Mesh((4, 6), (0.5, 0.25), ((Edge.FIXED, Edge.OUTFLOW), (Edge.PERIODIC,) * 2), origin=(1.0, 0.0))
    shown = cells(mesh)
    assert shown[0] == "Mesh of 24 zones"
    assert shown[7:] == [
        "x",
        "4",
        "0.5",
        "1",
        "3",
        "fixed, outflow",
        "y",
        "6",
        "0.25",
        "0",
        "1.5",
        "periodic, periodic",
    ]


def spread(arrays: object, call: object) -> dict[str, object]:
    """Stands for a kernel."""
    return {}


def test_a_step() -> None:
    step = Step("spread", spread, (Read("u", (1, 0, 0), corners=True), Read("w")), ("u",), uses=("dt",), fraction=0.5)  # type: ignore[arg-type]
    shown = cells(step)
    assert shown[0] == "Step spread"
    assert dict(zip(shown[1::2], shown[2::2], strict=True)) == {
        "kernel": "spread",
        "reads": "u with halo (1, 0, 0) and corners, w",
        "writes": "u",
        "uses": "dt",
        "share of dt": "0.5",
    }


def test_a_problem_shows_all_that_it_declares() -> None:
    problem = replace(Toy((12, 8)).problem(), title="<b>bold</b> & more")
    shown = cells(problem)
    assert shown[0] == "<b>bold</b> & more"
    for word in (field.name for field in problem.fields):
        assert word in shown
    text = " ".join(shown)
    for step in problem.splitting.steps():
        assert step.name in text
    for reduction in problem.splitting.all_reductions():
        assert f"{reduction.name} " in text
    assert "Mesh of 96 zones" in shown
    assert "dispatch" in cells(Setup(problem, (3, 4)))
