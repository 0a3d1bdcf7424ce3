"""Programs that start worker processes must be able to be imported: the workers of this machine import them again.

A call at the top level of the program itself would be made again in each worker. Knows only the program's text and
where in it the call stands.
"""

from __future__ import annotations

import ast
import sys
from pathlib import Path
from types import FrameType

from breakstep.errors import ClusterError


def check_guard() -> None:
    """Refuse a call that stands in the main program outside ``if __name__ == "__main__":``.

    Notebooks, consoles and ``python -c`` are not imported by workers, and need nothing.

    Raises
    ------
    ClusterError
    """
    main = sys.modules["__main__"]
    path, spec = getattr(main, "__file__", None), getattr(main, "__spec__", None)
    if path is not None and spec is None and not Path(path).is_file():
        raise ClusterError(
            f"worker processes import the program that starts them, and this one is in no file ({path}): write it into"
            ' one, or pass dispatch="serial" or a Dask client'
        )
    frame = _top_level(sys._getframe(1), vars(main))
    is_package = spec is not None and spec.name.endswith(".__main__")  # those are not imported again
    if path is None or is_package or frame is None:
        return
    try:
        tree = ast.parse(Path(path).read_bytes())
    except (OSError, SyntaxError, ValueError):
        return
    line = frame.f_lineno
    within = [node for node in ast.walk(tree) if isinstance(node, ast.stmt) and _spans(node, line)]
    if within and not any(_is_guard(statement) for statement in within):
        raise ClusterError(
            f"{path}, line {line}: worker processes import this program, and would run it again; put what it runs"
            ' under a line  if __name__ == "__main__":  or pass dispatch="serial" or a Dask client'
        )


def _top_level(frame: FrameType | None, namespace: object) -> FrameType | None:
    """The frame of the main program's own lines, if the call came from there."""
    while frame is not None and not (frame.f_globals is namespace and frame.f_code.co_name == "<module>"):
        frame = frame.f_back
    return frame


def _spans(statement: ast.stmt, line: int) -> bool:
    return statement.lineno <= line <= (statement.end_lineno or line)


def _is_guard(statement: ast.stmt) -> bool:
    """Whether a statement is an ``if`` that asks for the module's name."""
    if not isinstance(statement, ast.If):
        return False
    return any(isinstance(node, ast.Name) and node.id == "__name__" for node in ast.walk(statement.test))
