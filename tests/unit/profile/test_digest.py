"""Digests tell apart what differs in one bit, and nothing else."""

from __future__ import annotations

import hashlib

import numpy as np
import pytest

from breakstep.profile.digest import array_digest, overall_digest, tile_digests


def test_definition() -> None:
    """Name and shape, then the bytes; so that another program can check a profile."""
    values = np.array([[1.0, -2.5]])
    expected = hashlib.sha256(b"rho (1, 2)\n" + values.astype("<f8").tobytes()).hexdigest()
    assert array_digest("rho", values) == expected


def test_layout_in_memory_does_not_matter() -> None:
    values = np.arange(24.0).reshape(2, 3, 4)
    digest = array_digest("u", values)
    assert array_digest("u", np.asfortranarray(values)) == digest
    assert array_digest("u", values.astype(">f8")) == digest
    assert array_digest("u", np.repeat(values, 2, axis=1)[:, ::2]) == digest


@pytest.mark.parametrize(
    "other",
    [
        np.array([[0.0, np.nextafter(1.0, 2.0)]]),
        np.array([[-0.0, 1.0]]),
        np.array([[0.0], [1.0]]),
        np.array([0.0, 1.0]),
    ],
)
def test_one_bit_or_another_shape_matters(other: np.ndarray) -> None:
    assert array_digest("u", other) != array_digest("u", np.array([[0.0, 1.0]]))


def test_name_matters() -> None:
    assert array_digest("u", np.zeros(3)) != array_digest("v", np.zeros(3))


def test_other_numbers_are_refused() -> None:
    with pytest.raises(TypeError, match="field u: a digest covers float64 numbers, not float32"):
        array_digest("u", np.zeros(3, dtype=np.float32))  # type: ignore[arg-type]


def test_tiles_are_cut_from_the_mesh() -> None:
    values = np.random.default_rng(3).random((2, 5, 4, 1))
    tiles = [{"origin": [0, 0, 0], "shape": [3, 4, 1]}, {"origin": [3, 0, 0], "shape": [2, 4, 1]}]
    assert tile_digests("u", values, tiles) == [
        array_digest("u", values[:, :3]),
        array_digest("u", values[:, 3:]),
    ]


def test_overall_digest_ignores_the_order_of_fields_but_not_of_tiles() -> None:
    one = overall_digest({"u": ["a", "b"], "v": ["c"]})
    assert overall_digest({"v": ["c"], "u": ["a", "b"]}) == one
    assert overall_digest({"u": ["b", "a"], "v": ["c"]}) != one
    assert overall_digest({"u": ["a"], "v": ["b", "c"]}) != one
