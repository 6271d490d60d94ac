"""Unfolding as arithmetic: every range of tile order against a brute-force walk through the tiles."""

from __future__ import annotations

import itertools
import pickle
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from bigsvd.errors import OptionError, UnsupportedMatrixError
from bigsvd.source.array_axes import ArrayAxes
from bigsvd.source.axis_choice import check_mask, plan_unfolding, region_of, sample_axes_of
from bigsvd.source.unfolding import Side


def walk(side: Side) -> list[int]:
    """Places in file order, as somebody would list them who knows nothing of edges: tile by tile, entry by entry."""
    spans = [list(itertools.pairwise(cuts.tolist())) for cuts in side.cuts]
    found = []
    for tile in itertools.product(*spans):
        for place in itertools.product(*(range(*span) for span in tile)):
            if side.chosen is None or side.chosen[place]:
                found.append(int(np.ravel_multi_index(place, side.lengths)))
    return found


@st.composite
def sides(draw: st.DrawFn) -> Side:
    cuts = []
    for _ in range(draw(st.integers(1, 3))):
        pieces = draw(st.lists(st.integers(1, 4), min_size=1, max_size=4))
        cuts.append(np.cumsum([0, *pieces]))
    if not draw(st.booleans()):
        return Side(tuple(cuts))
    size = int(np.prod([each[-1] for each in cuts]))
    bits = draw(st.lists(st.booleans(), min_size=size, max_size=size))
    chosen = np.array(bits).reshape([each[-1] for each in cuts])
    chosen[(0,) * chosen.ndim] = True
    return Side(tuple(cuts), chosen)


@given(sides(), st.data())
@settings(max_examples=150, deadline=None)
def test_every_range_of_a_side_is_made_of_the_boxes_that_are_said(side: Side, data: st.DataObject) -> None:
    order = walk(side)
    assert side.size == len(order)
    assert not side.in_file_order or order == sorted(order)
    start = data.draw(st.integers(0, side.size))
    stop = data.draw(st.integers(start, side.size))
    assert side.file_order(start, stop).tolist() == order[start:stop]
    whole = np.arange(np.prod(side.lengths)).reshape(side.lengths)
    found: list[int] = []
    for tile, first, last in side.touched(start, stop):
        box, pick = side.part(tile, first, last)
        values = whole[tuple(slice(*span) for span in box)].reshape(-1)
        assert all(a <= b <= c <= d for (a, d), (b, c) in zip(side.spans(tile), box, strict=True)), "within its tile"
        found += (values if pick is None else values[pick]).tolist()
    assert found == order[start:stop]


@given(sides())
@settings(max_examples=80, deadline=None)
def test_a_side_in_file_order_is_known_as_such(side: Side) -> None:
    bare = Side(side.cuts)
    order = walk(bare)
    # Pieces of one entry each, or one piece: the words must be exact where nothing is left out.
    assert bare.in_file_order == (order == sorted(order))
    again = pickle.loads(pickle.dumps(side))
    assert again.edges.tolist() == side.edges.tolist()
    assert side.even == (len({*np.diff(side.edges)[:-1]}) <= 1 and np.diff(side.edges)[-1] <= np.diff(side.edges)[0])


@given(st.integers(1, 40), st.integers(1, 9), st.data())
@settings(max_examples=150, deadline=None)
def test_pieces_of_a_region_lie_in_one_chunk_each_and_chunks_outside_are_not_touched(
    side: int, chunk: int, data: st.DataObject
) -> None:
    start = data.draw(st.integers(0, side - 1))
    stop, step = data.draw(st.integers(start + 1, side)), data.draw(st.integers(1, 5))
    axes, places = ArrayAxes((side, 2), (chunk, 2)), range(start, stop, step)
    unfolding = plan_unfolding(axes, (0,), (places, range(2)), None, 8)
    chunks = []
    for first, last in itertools.pairwise(unfolding.rows.cuts[0].tolist()):
        touched = {place // chunk for place in places[first:last]}
        assert len(touched) == 1
        chunks += [*touched]
    assert chunks == sorted({place // chunk for place in places})


def test_trailing_samples_turn_the_matrix_and_others_do_not() -> None:
    axes = ArrayAxes((4, 6, 5), (2, 3, 5), ("y", "x", "time"))
    turned = plan_unfolding(axes, (2,), tuple(map(range, axes.shape)), None, 2)
    assert (turned.rows.size, turned.columns.size, turned.samples_are_rows) == (24, 5, False)
    middle = plan_unfolding(axes, (1,), tuple(map(range, axes.shape)), None, 2)
    assert (middle.rows.size, middle.columns.size, middle.samples_are_rows) == (6, 20, True)
    assert turned.words() == "5 samples (axis time) × 24 features (y 4 × x 6)"
    assert turned.tile_words(0) == "in tiles of 2 × 3"
    # Row 7 is the second entry of the second tile: y 0, x 4.
    assert turned.place(7, 3) == "y 0, x 4, time 3"


NAMED = ArrayAxes((20, 6, 5), (1, 6, 5), ("time", "y", "x"), samples=(0,), why="the marker")
BARE = ArrayAxes((20, 6, 5))


@pytest.mark.parametrize(
    ("axes", "asked", "found"),
    [
        *((NAMED, None, (0,)), (NAMED, "x", (2,)), (NAMED, "time,x", (0, 2)), (NAMED, ["x", 0], (0, 2))),
        *((BARE, 0, (0,)), (BARE, "-1", (2,)), (BARE, "2, 0", (0, 2)), (BARE, (1,), (1,))),
        (ArrayAxes((4, 5)), None, (0,)),
    ],
)
def test_samples_are_named_by_number_or_name(axes: ArrayAxes, asked: Any, found: tuple[int, ...]) -> None:
    assert sample_axes_of(axes, asked, "film.h5:/s") == found


@pytest.mark.parametrize(
    ("axes", "asked", "error", "words"),
    [
        (BARE, None, UnsupportedMatrixError, "--sample-axes 0"),
        (ArrayAxes((3, 4, 5), names=("z", "y", "x")), None, UnsupportedMatrixError, "--sample-axes z"),
        (BARE, "time", OptionError, "names the axis 'time', which film.h5:/s does not have"),
        (BARE, 3, OptionError, "Give a number from 0 to 2"),
        (BARE, "0,0", OptionError, "names an axis twice"),
        (BARE, "0,1,2", OptionError, "takes all 3 axes"),
        (NAMED, "", OptionError, "names the axis ''"),
    ],
)
def test_axes_that_are_not_there_are_refused_with_what_is(
    axes: ArrayAxes, asked: Any, error: type[Exception], words: str
) -> None:
    with pytest.raises(error) as caught:
        sample_axes_of(axes, asked, "film.h5:/s")
    assert words in str(caught.value)
    assert "1 y 6" in str(caught.value) or axes is BARE or "twice" in words or axes.shape == (3, 4, 5)


@pytest.mark.parametrize(
    ("asked", "found"),
    [
        ("time=0:10:2,y=1:3", (range(0, 10, 2), range(1, 3), range(5))),
        ("0:10:2,1:3,:", (range(0, 10, 2), range(1, 3), range(5))),
        ("time=4", (range(4, 5), range(6), range(5))),
        ("x=-2:", (range(20), range(6), range(3, 5))),
        ("-1", (range(19, 20), range(6), range(5))),
        ({"y": slice(2, None)}, (range(20), range(2, 6), range(5))),
        ([slice(None), 3], (range(20), range(3, 4), range(5))),
    ],
)
def test_a_region_is_told_by_name_or_position(asked: Any, found: tuple[range, ...]) -> None:
    assert region_of(NAMED, asked, "film.h5:/s") == found


@pytest.mark.parametrize(
    ("asked", "words"),
    [
        ("time=0:30", "reaches beyond it"),
        ("y=3:3", "holds nothing"),
        ("z=0:3", "names the axis 'z'"),
        ("0:3,0:3,0:3,0:3", "has 4 parts"),
        ("time=0:3,1:2", "mixes parts with and without a name"),
        ("time=a:b", "is no part of an axis"),
        ("time=0:9:0", "is no part of an axis"),
        ("time=9:0:-1", "is no part of an axis"),
        ("y=6", "holds nothing"),
        ("", "is no part of an axis"),
    ],
)
def test_a_region_that_is_not_there_is_refused(asked: Any, words: str) -> None:
    with pytest.raises(OptionError) as caught:
        region_of(NAMED, asked, "film.h5:/s")
    assert words in str(caught.value)
    assert caught.value.remedy


@pytest.mark.parametrize(
    ("mask", "words"),
    [
        (np.ones((5, 6)), "has the shape 5 × 6, and the axes of the features 6 × 5"),
        (np.full((6, 5), 2), "holds other values than true and false"),
        (np.full((6, 5), np.nan), "holds other values than true and false"),
        (np.full((6, 5), "a"), "holds other values than true and false"),
    ],
)
def test_a_mask_of_another_shape_or_kind_is_refused(mask: np.ndarray, words: str) -> None:
    with pytest.raises(OptionError, match=words):
        check_mask(mask, (6, 5), "the mask m.npy")
