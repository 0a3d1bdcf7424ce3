"""Colours can be told apart by everybody, and text in them can be read."""

from __future__ import annotations

import itertools
from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray

from breakstep.report.page.palette import DARK, LIGHT, STEPS

Colours = NDArray[np.float64]

#: Linear RGB as seen with full colour vision, without the long-wave and without the middle-wave cones. Source: G. M.
#: Machado, M. M. Oliveira, L. A. F. Fernandes, A physiologically-based model for simulation of color vision deficiency,
#: IEEE Trans. Vis. Comput. Graph. 15 (2009) 1291, severity 1 (from memory).
VISIONS = {
    "full": np.eye(3),
    "protanopia": np.array(
        [[0.152286, 1.052583, -0.204868], [0.114503, 0.786281, 0.099216], [-0.003882, -0.048116, 1.051998]]
    ),
    "deuteranopia": np.array(
        [[0.367322, 0.860646, -0.227968], [0.280085, 0.672501, 0.047413], [-0.011820, 0.042940, 0.968881]]
    ),
}
#: sRGB primaries in CIE XYZ, white of D65 (IEC 61966-2-1).
XYZ = np.array(
    [[0.4124564, 0.3575761, 0.1804375], [0.2126729, 0.7151522, 0.0721750], [0.0193339, 0.1191920, 0.9503041]]
)
WHITE = np.array([0.95047, 1.0, 1.08883])
#: Distance in CIELAB (CIE 1976) of any two steps. 2.3 is just noticeable side by side (Mahy, Van Eycken, Oosterlinck
#: 1994); several times that is needed for areas that stand apart. Chosen: 18, which the search reached with room.
APART = 18.0
READABLE = 4.5  # WCAG 2.2, success criterion 1.4.3
SEEN = 3.0  # WCAG 2.2, success criterion 1.4.11, for what is no text


def linear(colour: str) -> Colours:
    values = np.array([int(colour[at : at + 2], 16) / 255 for at in (1, 3, 5)])
    return np.where(values <= 0.04045, values / 12.92, ((values + 0.055) / 1.055) ** 2.4)


def lab(rgb: Colours) -> Colours:
    ratio = XYZ @ np.clip(rgb, 0.0, 1.0) / WHITE
    f = np.where(ratio > 216 / 24389, np.cbrt(ratio), (24389 / 27 * ratio + 16) / 116)
    return np.array([116 * f[1] - 16, 500 * (f[0] - f[1]), 200 * (f[1] - f[2])])


def contrast(one: str, other: str) -> float:
    """WCAG 2.2: relative luminances, the lighter first, 0.05 of stray light added to each."""
    low, high = sorted(float(XYZ[1] @ linear(colour)) for colour in (one, other))
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("vision", VISIONS)
def test_any_two_steps_differ_for_every_vision(theme: Mapping[str, str], vision: str) -> None:
    seen = {step: lab(VISIONS[vision] @ linear(theme[step])) for step in STEPS}
    distances = {
        pair: float(np.linalg.norm(seen[pair[0]] - seen[pair[1]])) for pair in itertools.combinations(STEPS, 2)
    }
    assert min(distances.values()) >= APART, min(distances, key=lambda pair: distances[pair])


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
@pytest.mark.parametrize("vision", VISIONS)
def test_lockstep_and_tasked_differ_for_every_vision(theme: Mapping[str, str], vision: str) -> None:
    for pair in (("lockstep", "tasked"), ("shade_lockstep", "shade_tasked")):
        one, other = (lab(VISIONS[vision] @ linear(theme[name])) for name in pair)
        assert float(np.linalg.norm(one - other)) >= APART


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
def test_text_on_its_background_can_be_read(theme: Mapping[str, str]) -> None:
    """Also the words that figures write on tinted areas, which no accessibility checker sees on a canvas."""
    pairs = [(text, "paper") for text in ("ink", "soft", "lockstep", "tasked")]
    pairs += [(text, "back") for text in ("lockstep", "tasked")]
    pairs += [("ink", "raised"), ("soft", "raised"), ("ink", "wait"), ("paper", "tasked"), ("ink", "ramp_low")]
    pairs += [("ink", "shade_tasked"), ("ink", "shade_lockstep")]
    for text, background in pairs:
        assert contrast(theme[text], theme[background]) >= READABLE, (text, background)


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=["light", "dark"])
def test_lines_and_areas_stand_out_from_the_page(theme: Mapping[str, str]) -> None:
    for name in (*STEPS, "axis", "machine", "lockstep", "tasked"):
        assert contrast(theme[name], theme["paper"]) >= SEEN, name


def test_the_switch_of_themes_can_replace_colours_one_by_one() -> None:
    assert set(LIGHT) == set(DARK)
    assert len(set(LIGHT.values())) == len(LIGHT)
    assert len(set(DARK.values())) == len(DARK)
