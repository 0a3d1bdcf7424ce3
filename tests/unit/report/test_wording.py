"""Numbers and names as the terminal shows them."""

from __future__ import annotations

import math

import pytest

from breakstep.report.wording import counted, listed, ratio, seconds, size, unevenness


@pytest.mark.parametrize(("count", "text"), [(0, "0 pairs"), (1, "1 pair"), (2, "2 pairs")])
def test_counted(count: int, text: str) -> None:
    assert counted(count, "pair") == text


@pytest.mark.parametrize(
    ("value", "text"), [(1.25, "1.25"), (1.004, "1.0040"), (0.996, "0.9960"), (1.0, "1.0000"), (0.5, "0.50")]
)
def test_a_ratio_is_never_rounded_onto_one(value: float, text: str) -> None:
    assert ratio(value) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [(0.0, "0 ms"), (0.00213, "2.13 ms"), (0.5, "500 ms"), (1.234, "1.23 s"), (43.21, "43.2 s"), (4321.0, "4321 s")],
)
def test_seconds(value: float, text: str) -> None:
    assert seconds(value) == text


@pytest.mark.parametrize(
    ("count", "text"),
    [(0, "0 B"), (999, "999 B"), (1000, "1.0 kB"), (1.5e6, "1.5 MB"), (2e9, "2.0 GB"), (3e15, "3000.0 TB")],
)
def test_size(count: float, text: str) -> None:
    assert size(count) == text


@pytest.mark.parametrize(
    ("names", "text"), [([], ""), (["a"], "a"), (["a", "b"], "a and b"), (["a", "b", "c"], "a, b and c")]
)
def test_listed(names: list[str], text: str) -> None:
    assert listed(names) == text


def test_unevenness() -> None:
    assert unevenness(1.234) == "1.23"
    assert unevenness(math.nan) == "-"
