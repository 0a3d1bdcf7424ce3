"""Carrying a program into a fresh process: pickled, with the places its modules come from."""

from __future__ import annotations

import importlib.util
import pickle
import pickletools
import sys
from pathlib import Path
from typing import Any

from breakstep.errors import DeclarationError


def save(thing: Any, path: Path) -> None:
    """Write an object so that :func:`load` finds its modules again.

    Raises
    ------
    DeclarationError
        It holds what no other process could get: a lambda, an inner function, an open file.
    """
    try:
        data = pickle.dumps(thing)
    except Exception as error:
        raise DeclarationError(
            f"the steps cannot be carried into another process ({error}); use functions and classes that stand at"
            " the top level of a module, as workers need them too"
        ) from error
    path.write_bytes(pickle.dumps((list(sys.path), _modules(data), data)))


def load(path: Path) -> Any:
    """Read what :func:`save` wrote; modules that were loaded from a file by hand are loaded from it again."""
    places, modules, data = pickle.loads(path.read_bytes())
    sys.path[:] = [*sys.path, *(place for place in places if place not in sys.path)]
    for name, file in modules:
        if name not in sys.modules and not _is_found(name):
            spec = importlib.util.spec_from_file_location(name, file)
            if spec is None or spec.loader is None:
                continue
            module = importlib.util.module_from_spec(spec)
            sys.modules[name] = module
            spec.loader.exec_module(module)
    return pickle.loads(data)


def _modules(data: bytes) -> list[tuple[str, str]]:
    """Names and files of the modules that a pickle refers to, as far as they have files."""
    words = {argument for _, argument, _ in pickletools.genops(data) if isinstance(argument, str)}
    found = ((word, getattr(sys.modules.get(word), "__file__", None)) for word in sorted(words))
    return [(name, file) for name, file in found if file]


def _is_found(name: str) -> bool:
    try:
        return importlib.util.find_spec(name) is not None
    except (ImportError, ValueError):
        return False
