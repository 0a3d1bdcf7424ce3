"""What stands on maps of tiles beside the tiles: borders between workers, faces that bytes cross, chains of causes.

Maps are SVG with cells ten units wide; the style sheet colours them.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Mapping
from typing import Any

from markupsafe import Markup

from breakstep.report.page.palette import DASHES

CELL = 10
#: Centres this close are neighbours on the map, corner to corner at most; others meet around a periodic edge.
NEAR = 1.6 * CELL
_DASH_LENGTHS = {"solid": "", "dashed": "6 3", "dotted": "2 2", "dashdot": "6 2 2 2"}


def box(cells: Mapping[str, Any]) -> str:
    """The view box of a map, with room for thick borders."""
    return f"-1 -1 {cells['columns'] * CELL + 2} {cells['rows'] * CELL + 2}"


def borders(cells: Mapping[str, Any]) -> str:
    """Path along the edges between cells of different workers, and around the mesh."""
    owner = {tuple(place): cells["owners"][cell] for cell, place in enumerate(cells["places"])}
    edges = []
    for (column, row), own in owner.items():
        x, y = column * CELL, row * CELL
        if owner.get((column + 1, row)) != own or own < 0:
            edges.append(f"M{x + CELL} {y}v{CELL}")
        if owner.get((column, row + 1)) != own or own < 0:
            edges.append(f"M{x} {y + CELL}h{CELL}")
        if (column - 1, row) not in owner:
            edges.append(f"M{x} {y}v{CELL}")
        if (column, row - 1) not in owner:
            edges.append(f"M{x} {y}h{CELL}")
    return "".join(edges)


def _centre(cells: Mapping[str, Any], cell: int) -> tuple[float, float]:
    column, row = cells["places"][cell]
    return column * CELL + CELL / 2, row * CELL + CELL / 2


def corners(cells: Mapping[str, Any]) -> tuple[str, str]:
    """The names of the cells at a map's lower left and upper right; nothing where no cell is."""
    at = {tuple(place): str(cells["labels"][cell]) for cell, place in enumerate(cells["places"])}
    return at.get((0, cells["rows"] - 1), ""), at.get((cells["columns"] - 1, 0), "")


def _apart(cells: Mapping[str, Any], a: int, b: int) -> float:
    (x, y), (u, v) = _centre(cells, a), _centre(cells, b)
    return math.hypot(u - x, v - y)


def goes_around(data: Mapping[str, Any], side: str) -> bool:
    """Whether bytes cross a periodic edge, from one rim of the map to the other."""
    return any(_apart(data["cells"], a, b) >= NEAR for a, b, _ in data["traffic"][side]["faces"])


def face_lines(data: Mapping[str, Any], side: str) -> Markup:
    """Lines between cells that exchange bytes; arrows at both ends where they meet around a periodic edge."""
    cells, faces = data["cells"], data["traffic"][side]["faces"]
    most = max((count for _, _, count in faces), default=1)
    lines = []
    for a, b, count in faces:
        start, end = _centre(cells, a), _centre(cells, b)
        width = 0.3 + 1.4 * count / most
        if _apart(cells, a, b) < NEAR:
            lines.append(_face(*start, *end, width))
        else:
            lines += [_arrow(*start, *end, width), _arrow(*end, *start, width)]
    return Markup("".join(lines))


def _face(x: float, y: float, u: float, v: float, width: float) -> str:
    return f'<path class="face" stroke-width="{width:.2f}" d="M{x:.1f} {y:.1f}L{u:.1f} {v:.1f}"/>'


def _arrow(x: float, y: float, u: float, v: float, width: float) -> str:
    """From one cell's centre away from the other cell, with its tip inside the cell's edge."""
    apart = math.hypot(u - x, v - y)
    p, q = (x - u) / apart, (y - v) / apart
    neck, tip, half = 0.2 * CELL, 0.44 * CELL, 0.55 * width + 0.5
    left, right = (f"{x + neck * p + s * q:.1f} {y + neck * q - s * p:.1f}" for s in (half, -half))
    head = f'<path class="tip-of-face" d="M{left}L{x + tip * p:.1f} {y + tip * q:.1f}L{right}Z"/>'
    return _face(x, y, x + neck * p, y + neck * q, width).replace('class="face"', 'class="face to-rim"') + head


def _balls(data: Mapping[str, Any], side: str) -> list[tuple[int, int]]:
    """Links with a number on the map, in order: place in the list and cell; each cell once in a row."""
    found: list[tuple[int, int]] = []
    for place, link in enumerate(data["chain"][side]["links"]):
        small = link["ns"] < 0.01 * data["chain"][side]["wait_ns"]
        if link["cell"] >= 0 and not small and (not found or found[-1][1] != link["cell"]):
            found.append((place, link["cell"]))
    return found


def link_number(data: Mapping[str, Any], side: str, place: int) -> str:
    """The number that a link has on the map; nothing for a link without."""
    for number, (at, cell) in enumerate(_balls(data, side), 1):
        if at == place:
            return str(number)
        nearby = data["chain"][side]["links"][place]
        if at < place and nearby["cell"] == cell and _is_run(data["chain"][side]["links"][at : place + 1], cell):
            return str(number)
    return ""


def _is_run(links: list[dict[str, Any]], cell: int) -> bool:
    return all(link["cell"] == cell for link in links)


def chain_marks(data: Mapping[str, Any], side: str) -> Markup:
    """Numbered balls on the tiles of a chain, larger for longer links, joined by lines; a square where it waits."""
    cells, chain = data["cells"], data["chain"][side]
    balls = _balls(data, side)
    spots = [(*_spread(cells, balls, place), place) for place in range(len(balls))]
    marks = []
    if chain["cell"] >= 0:
        x, y = _centre(cells, chain["cell"])
        marks.append(f'<rect class="here" x="{x - 4.2}" y="{y - 4.2}" width="8.4" height="8.4"/>')
    begin = [(*_centre(cells, chain["cell"]), -1)] if chain["cell"] >= 0 else []
    for (x, y, _), (u, v, _) in itertools.pairwise([*begin, *spots]):
        marks.append(f'<path class="link" d="M{x:.2f} {y:.2f}L{u:.2f} {v:.2f}"/>')
    for x, y, place in spots:
        links = chain["links"]
        spent = sum(link["ns"] for at, link in enumerate(links) if link_number(data, side, at) == str(place + 1))
        radius = 1.9 + 2.3 * math.sqrt(min(1.0, spent / (chain["wait_ns"])))
        marks.append(f'<circle class="ball" cx="{x:.2f}" cy="{y:.2f}" r="{radius:.2f}"/>')
        marks.append(f'<text class="in-ball" x="{x:.2f}" y="{y:.2f}">{place + 1}</text>')
    return Markup("".join(marks))


def _spread(cells: Mapping[str, Any], balls: list[tuple[int, int]], place: int) -> tuple[float, float]:
    """Where a ball goes: the cell's centre, or around it where the chain comes back to a cell."""
    cell = balls[place][1]
    same = [at for at, (_, other) in enumerate(balls) if other == cell]
    x, y = _centre(cells, cell)
    if len(same) == 1:
        return x, y
    angle = 2 * math.pi * same.index(place) / len(same) - math.pi / 2
    return x + 2.6 * math.cos(angle), y + 2.6 * math.sin(angle)


def line_sample(tokens: Mapping[str, str], step: str, place: int) -> Markup:
    """A short piece of a step's line, as the figure of unevenness draws it."""
    token = tokens.get(step, "machine").replace("_", "-")
    dash = _DASH_LENGTHS[DASHES[place % len(DASHES)]]
    return Markup(
        '<svg class="sample" viewBox="0 0 26 12" aria-hidden="true"><path d="M0 6H26" fill="none"'
        ' style="stroke: var(--{})" stroke-width="3" stroke-dasharray="{}"/></svg>'
    ).format(token, dash)
