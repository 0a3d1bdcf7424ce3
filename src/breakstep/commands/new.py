"""``breakstep new``: a starting point for code of one's own."""

from __future__ import annotations

import keyword
import sys
from importlib import metadata, resources
from pathlib import Path
from string import Template

import click

from breakstep.errors import OutputError, ScenarioError

TEMPLATES = {".py": "code.txt", ".toml": "scenario.txt"}


@click.command()
@click.argument("name")
def new(name: str) -> None:
    """Write NAME.py and NAME.toml into the current folder: a small problem of one's own that runs."""
    if not (name.isidentifier() and name.isascii()):
        raise ScenarioError(f"{name!r} cannot name a file of code: expected letters, digits and underscores")
    _refuse_taken(name)
    paths = {Path(f"{name}{suffix}"): text for suffix, text in TEMPLATES.items()}
    _refuse_existing(list(paths))
    for path, template in paths.items():
        text = resources.files("breakstep.scenario").joinpath("starting", template).read_text(encoding="utf-8")
        _write(path, Template(text).substitute(name=name))
    click.echo(f"{name}.py and {name}.toml are written; try: breakstep run {name}.toml")


def _refuse_taken(name: str) -> None:
    """A file of that name would hide a module that Python needs, or could never be imported."""
    modules = {"breakstep", *sys.stdlib_module_names, *metadata.packages_distributions()}
    if keyword.iskeyword(name) or name in modules:
        raise ScenarioError(f"{name} is a word of Python's or an installed module; choose another name")


def _refuse_existing(paths: list[Path]) -> None:
    found = [str(path) for path in paths if path.exists() or path.is_symlink()]
    if found:
        raise OutputError(f"{' and '.join(found)} would be overwritten; choose another name, or move what is there")


def _write(path: Path, text: str) -> None:
    try:
        with path.open("x", encoding="utf-8") as file:
            file.write(text)
    except OSError as error:
        raise OutputError(f"{path} cannot be written ({error.strerror}); choose another folder") from error
