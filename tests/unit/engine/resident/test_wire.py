"""Parcels through Dask's serialisation and back, bit for bit and without pickle."""

from __future__ import annotations

from typing import Any

import msgpack
import numpy as np
import pytest
from distributed.protocol import deserialize, serialize
from distributed.protocol.serialize import dask_deserialize, dask_serialize, families
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from breakstep.engine.resident.wire import Item, Parcel, size_of

DOUBLES = hnp.arrays(np.float64, hnp.array_shapes(min_dims=4, max_dims=4, min_side=0, max_side=3))
OFFSETS = st.tuples(*[st.integers(-1, 1)] * 3)
RIMS = st.dictionaries(st.tuples(st.sampled_from("uvw"), st.integers(0, 99), OFFSETS), DOUBLES, max_size=4)
VECTORS = hnp.arrays(np.float64, st.tuples(st.integers(1, 3), st.integers(1, 4)))
NUMBERS = st.integers(0, 2**40)
ITEMS = st.one_of(
    st.tuples(st.tuples(st.just("rims"), NUMBERS, NUMBERS, NUMBERS), RIMS),
    st.tuples(st.tuples(st.just("part"), NUMBERS, NUMBERS, NUMBERS), st.one_of(st.none(), VECTORS.map(lambda v: v[0]))),
    st.tuples(st.tuples(st.just("value"), NUMBERS), VECTORS),
    st.tuples(st.tuples(st.just("count"), NUMBERS, NUMBERS), st.none()),
    st.tuples(st.tuples(st.just("release"), NUMBERS), st.none()),
)


def travelled(parcel: Parcel) -> Parcel:
    """What another process makes of it: the header through msgpack, frames as bytes that are somebody else's."""
    header, frames = serialize(parcel, serializers=["dask"], on_error="raise")
    assert header["serializer"] == "dask"
    header = msgpack.loads(msgpack.dumps(header, use_bin_type=True), use_list=True, strict_map_key=False)
    copies = [bytes(frame) for frame in frames]
    made = deserialize(header, copies, deserializers={"dask": families["dask"]})
    assert isinstance(made, Parcel)
    return made


def same(ours: Any, theirs: Any) -> bool:
    """Equal bits, so that NaN equals itself and 0 does not equal -0."""
    if ours is None or theirs is None:
        return ours is theirs
    if isinstance(ours, dict):
        return list(ours) == list(theirs) and all(same(array, theirs[key]) for key, array in ours.items())
    return ours.shape == theirs.shape and ours.tobytes() == theirs.tobytes()


@settings(deadline=None, max_examples=60)
@given(st.lists(ITEMS, max_size=5))
def test_items_come_back_bit_for_bit(items: list[Item]) -> None:
    made = travelled(Parcel(items)).items
    assert [key for key, _ in made] == [key for key, _ in items]
    for (key, ours), (_, theirs) in zip(items, made, strict=True):
        assert same(ours, theirs), key


def test_arrays_that_are_not_contiguous() -> None:
    whole = np.arange(120.0).reshape(2, 5, 4, 3)
    views = {("u", t, (0, 0, 0)): view for t, view in enumerate((whole[:, ::2], whole[..., 1:2], whole[:, :, ::-1]))}
    assert not any(view.flags.c_contiguous for view in views.values())
    ((_, made),) = travelled(Parcel([(("rims", 1, 2, 3), views)])).items
    assert same(views, made)


def test_a_big_array_and_a_small_one_behind_it() -> None:
    """32 MB, more than one frame of a message."""
    big, small = np.random.default_rng(1).normal(size=(4, 1000, 1000, 1)), np.full((1, 1, 1, 1), -0.0)
    rims = {("u", 0, (1, 0, 0)): big, ("v", 0, (1, 0, 0)): small}
    ((_, made),) = travelled(Parcel([(("rims", 1, 2, 3), rims)])).items
    assert same(rims, made)


def test_what_arrives_is_its_own_and_cannot_be_written_to() -> None:
    """A view would keep the whole message alive, and may not be aligned."""
    ((_, made),) = travelled(Parcel([(("rims", 1, 2, 3), {("u", 0, (1, 0, 0)): np.ones((1, 2, 1, 1))})])).items
    (array,) = made.values()
    assert array.flags.aligned
    assert array.base is None or array.base.nbytes == array.nbytes
    with pytest.raises(ValueError, match="read-only"):
        array[:] = 0.0


def test_times_of_the_journey_are_noted() -> None:
    made = travelled(Parcel([(("value", 3), np.ones((1, 2)))]))
    assert made.sent > 0
    assert made.packed > 0
    assert made.unpacked > 0


def test_parcels_are_registered_with_dask_and_need_no_pickle() -> None:
    assert dask_serialize.dispatch(Parcel) is not None
    assert dask_deserialize.dispatch(Parcel) is not None


def test_sizes_by_field() -> None:
    rims = {
        ("u", 0, (1, 0, 0)): np.zeros((1, 2, 1, 1)),
        ("u", 1, (1, 0, 0)): np.zeros(3),
        ("v", 0, (0, 1, 0)): np.zeros(1),
    }
    assert size_of(rims) == {"u": 40, "v": 8}
    assert size_of(np.zeros((1, 2))) == {"value": 16}
    assert size_of(None) == {"control": 0}
