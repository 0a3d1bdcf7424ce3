"""Finding a scenario file, by path or by the name of one that comes with the package, and parsing it."""

from __future__ import annotations

import re
import tomllib
from pathlib import Path
from typing import Any, NoReturn

from breakstep.errors import ScenarioError
from breakstep.scenario.faults import did_you_mean

SUFFIX = ".toml"


def library() -> Path:
    """The folder of the scenarios that come with the package.

    A wheel holds them beside this module; a clone has them at its top level.
    """
    inside = Path(__file__).parent / "library"
    return inside if inside.is_dir() else Path(__file__).parents[3] / "scenarios"


def shipped() -> dict[str, Path]:
    """Scenarios that come with the package, by name."""
    return {path.stem: path for path in sorted(library().glob(f"*{SUFFIX}"))}


def find(name_or_path: str) -> Path:
    """The file of a scenario.

    Parameters
    ----------
    name_or_path : str
        A path is whatever ends in ``.toml`` or holds a separator; anything else is a name.

    Raises
    ------
    ScenarioError
        There is no such file or no such name.
    """
    path = Path(name_or_path).expanduser()
    if name_or_path.endswith(SUFFIX) or "/" in name_or_path or "\\" in name_or_path:
        if path.is_file():
            return path
        is_what = "is a folder; expected a scenario file" if path.is_dir() else "there is no such file"
        raise refusal(f"{name_or_path}: {is_what}")
    known = shipped()
    if name_or_path in known:
        return known[name_or_path]
    hint = did_you_mean(name_or_path, known)
    if Path(f"{name_or_path}.py").is_file():
        hint = f"; did you mean {name_or_path}.py?"
    raise refusal(
        f"no scenario is named {name_or_path!r}{hint} (a file is given by a path that ends in {SUFFIX} or .py)"
    )


def refusal(*faults: str) -> ScenarioError:
    """The error that carries faults: one on a line, and all of them as data."""
    return ScenarioError("\n".join(faults), faults=list(faults))


def parse(path: Path) -> dict[str, Any]:
    """The tables of a file, unchecked.

    Raises
    ------
    ScenarioError
        It cannot be read, is not UTF-8, or is not TOML; the latter with the line.
    """
    try:
        text = path.read_bytes().decode("utf-8-sig")
        return tomllib.loads(text)
    except OSError as error:
        _refuse(path, f"cannot be read: {error.strerror or error}", error)
    except UnicodeDecodeError as error:
        _refuse(path, f"expected UTF-8 text, came byte {error.object[error.start]:#04x} at {error.start}", error)
    except tomllib.TOMLDecodeError as error:
        _refuse(path, _where_not_toml(str(error)), error)
    except ValueError as error:  # an integer of thousands of digits
        _refuse(path, f"expected TOML, but: {error}", error)
    except RecursionError as error:  # thousands of nested brackets
        _refuse(path, "expected TOML, came brackets nested too deep", error)


def _refuse(path: Path, text: str, cause: Exception) -> NoReturn:
    raise refusal(f"{path}: {text}") from cause


def _where_not_toml(message: str) -> str:
    """tomllib puts the place last; sentences here put it first."""
    found = re.fullmatch(r"(.*) \(at (line \d+, column \d+|end of document)\)", message, re.DOTALL)
    if found is None:
        return f"expected TOML: {message}"
    reason, place = found.groups()
    return f"{place}: expected TOML, but: {reason[:1].lower()}{reason[1:]}"
