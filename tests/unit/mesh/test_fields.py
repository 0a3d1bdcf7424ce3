"""Fields: what they declare, and which declarations contradict themselves."""

from __future__ import annotations

import pytest

from breakstep.errors import DeclarationError
from breakstep.mesh.fields import Field


def test_one_unit_serves_all_components_or_each_has_its_own() -> None:
    assert [Field("w", ("a", "b"), ("cm",)).unit(i) for i in (0, 1)] == ["cm", "cm"]
    assert [Field("w", ("a", "b"), ("cm", "s")).unit(i) for i in (0, 1)] == ["cm", "s"]


def test_arrays_hold_zones_or_one_value_a_tile() -> None:
    assert Field("w", ("a", "b")).shape((3, 4, 1)) == (2, 3, 4, 1)
    assert Field("w", ("a", "b"), scratch=True, per_tile=True).shape((3, 4, 1)) == (2, 1, 1, 1)


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        ({"name": "two words", "components": ("a",)}, "must be an identifier, not 'two words'"),
        ({"name": "w", "components": ()}, "at least one component"),
        ({"name": "w", "components": ("a",), "per_tile": True}, "one value a tile, so it must be scratch"),
        ({"name": "w", "components": ("a", "b"), "fixed": {(0, 1): (1.0,)}}, "gives 1 values for 2 components"),
        ({"name": "w", "components": ("a", "b", "c"), "units": ("cm", "s")}, "gives 2 units for 3 components"),
        ({"name": "w", "components": ("a",), "normal": {0: (1,)}}, "has no component 1"),
    ],
)
def test_contradictions_are_refused(arguments: dict[str, object], sentence: str) -> None:
    with pytest.raises(DeclarationError, match=sentence):
        Field(**arguments)  # type: ignore[arg-type]
