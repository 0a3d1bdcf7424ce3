"""Compiled routines for tests, made in a test's own folder; where there is no compiler, the test is skipped."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from breakstep.scenario.find import library as shipped_folder
from breakstep.steps.foreign import Library

COMPILERS = {".c": "cc", ".f90": "gfortran"}


def built(text: str, folder: Path, suffix: str = ".c") -> Library:
    """The library of a source text."""
    compiler = needed(suffix)
    source = folder / f"routines{suffix}"
    source.write_text(text, encoding="utf-8")
    return Library.build(source, compiler)


def needed(suffix: str) -> str:
    """The compiler for a kind of source; skips the test when this machine has none."""
    compiler = COMPILERS[suffix]
    if shutil.which(compiler) is None:
        pytest.skip(f"no {compiler} here")
    return compiler


def example(name: str) -> Path:
    """One of the compiled examples that come with the package."""
    needed({"heat_c": ".c", "heat_fortran": ".f90"}[name])
    return shipped_folder() / "compiled" / f"{name}.py"
