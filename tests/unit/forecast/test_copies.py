"""Compiled loops use nothing from another file (its edits would not be noticed), so a few helpers exist in copies."""

from __future__ import annotations

import inspect

import pytest

from breakstep.forecast import dynamic, free, implicit, sweep

HEAP = ("_push", "_pop", "_push_key", "_pop_key")
DRAWING = ("_key", "_variate", "_drawn")


@pytest.mark.parametrize(
    ("name", "module"),
    [*((name, module) for name in HEAP for module in (free, implicit)), *((name, implicit) for name in DRAWING)],
)
def test_copies_are_the_same_text(name: str, module: object) -> None:
    original = getattr(dynamic if name in HEAP else sweep, name)
    copy = getattr(module, name)
    assert inspect.getsource(copy.py_func) == inspect.getsource(original.py_func)
