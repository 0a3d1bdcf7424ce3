"""Overrides from the command line: ``key.path=value``, put into the tables before they are checked.

This module knows which paths a scenario can have; whether the values are sound is for the check that follows.
"""

from __future__ import annotations

import re
import tomllib
from collections.abc import Mapping, Sequence
from typing import Any

from breakstep.scenario.faults import Fault, did_you_mean, in_words, join, likeliest
from breakstep.scenario.model import SWITCHES, ScenarioFile
from breakstep.scenario.reading import Model, kind_of, tables_of

BARE_WORD = re.compile(r"[A-Za-z][\w .,/-]*")


class _OverrideError(Exception):
    """An override that cannot be applied. Never seen outside."""

    def __init__(self, key: str, text: str) -> None:
        super().__init__(text)
        self.fault = Fault(key, text)


def apply_overrides(
    tables: dict[str, Any], overrides: Sequence[str], model: Model = ScenarioFile
) -> tuple[list[Fault], set[str]]:
    """Change tables in place.

    Parameters
    ----------
    overrides : sequence of str
        ``key.path=value``; the value as TOML, where a bare word stands for text, and a number in the path
        for an entry of a list.
    model : type of Section
        What the tables as a whole may hold.

    Returns
    -------
    faults : list of Fault
        Of overrides that could not be applied; the others were.
    paths : set of str
        What was changed.
    """
    faults: list[Fault] = []
    paths: set[str] = set()
    for override in overrides:
        path, equals, text = override.partition("=")
        path = path.strip()
        try:
            if not equals or not path:
                raise _OverrideError(override, "expected key.path=value, such as run.cycles=10")
            _check([model], tables, path.split("."), "")
            _put(tables, path, _value(text.strip(), path))
        except _OverrideError as error:
            faults.append(error.fault)
        else:
            paths.add(path)
    return faults, paths


def apply_switches(tables: dict[str, Any]) -> None:
    """Turn ``true`` and ``false`` in place of a step's table into an empty table and none."""
    for name in SWITCHES:
        if isinstance(tables.get(name), bool):
            _switch(tables, name, tables.pop(name))


def _switch(tables: dict[str, Any], name: str, on: bool) -> None:
    if on:
        tables.setdefault(name, {})
    else:
        tables.pop(name, None)


def _value(text: str, path: str) -> Any:
    """What the text says as a TOML value; a bare word is text."""
    try:
        parsed = tomllib.loads(f"value = {text}")
    except (ValueError, RecursionError):  # no TOML, or a monster that Python gives up on
        parsed = {"value": text} if BARE_WORD.fullmatch(text) else {}
    if set(parsed) != {"value"}:
        what = f"expected a TOML value or a bare word, came {in_words(text)}"
        raise _OverrideError(path, f"{what}; put text with other signs in quotes")
    return parsed["value"]


def _check(models: list[Model], here: Any, steps: list[str], done: str) -> None:
    """Refuse a path that no scenario can have, naming the likeliest that it can.

    Parameters
    ----------
    models : list of Model
        What the table at ``done`` may be.
    here : object
        The table as it stands, if it does.
    """
    if not steps:
        return
    step, *rest = steps
    path = join(done, step)
    known = list(dict.fromkeys(name for model in models for name in model.model_fields))
    if step not in known:
        close = likeliest(step, known)
        hint = f"; did you mean {join(done, close)}?" if close else did_you_mean(step, known)
        raise _OverrideError(".".join([path, *rest]), f"unknown key{hint}")
    there = here.get(step) if isinstance(here, Mapping) else None
    inner, is_list = _below(models, step)
    if is_list and rest:
        there, path = _entry(there, rest.pop(0), path)
    if inner:
        _check(_of_kind(inner, there), there, rest, path)


def _below(models: list[Model], step: str) -> tuple[list[Model], bool]:
    """The models of the tables at a key, and whether they stand in a list."""
    found: list[Model] = []
    is_list = False
    for model in models:
        if step in model.model_fields:
            inner, listed = tables_of(model.model_fields[step])
            found.extend(inner)
            is_list = is_list or listed
    return found, is_list


def _of_kind(models: list[Model], table: Any) -> list[Model]:
    """The model that the table's ``kind`` chooses, or all of them."""
    kind = table.get("kind") if isinstance(table, Mapping) else None
    return [model for model in models if "kind" in model.model_fields and kind_of(model) == kind] or models


def _entry(items: Any, step: str, path: str) -> tuple[Any, str]:
    """One entry of a list by its number, from 0."""
    count = len(items) if isinstance(items, list) else 0
    if not step.isdecimal() or int(step) >= count:
        have = f"from 0 to {count - 1}" if count else "but there are none"
        raise _OverrideError(join(path, step), f"expected the number of an entry, {have}, came {step}")
    return items[int(step)], join(path, step)


def _put(tables: dict[str, Any], path: str, value: Any) -> None:
    if path in SWITCHES and isinstance(value, bool):
        return _switch(tables, path, value)
    *steps, last = path.split(".")
    here: Any = tables
    done = ""
    for step in steps:
        done = join(done, step)
        here = _entry(here, step, done)[0] if isinstance(here, list) else _inside(here, step, done)
    if isinstance(here, list):
        _entry(here, last, done)
        here[int(last)] = value
    elif isinstance(here, dict):
        here[last] = value
    else:
        raise _OverrideError(path, f"{done} is {in_words(here)}, which has no keys")
    return None


def _inside(table: Any, step: str, path: str) -> Any:
    if not isinstance(table, dict):
        raise _OverrideError(path, f"there is {in_words(table)} above it, which has no keys")
    if table.get(step) is None:  # a resolved scenario says None where nothing was said
        table[step] = {}
    return table[step]
