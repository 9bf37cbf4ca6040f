"""Topological orders: the worked tree, plain twins, and what must not matter."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from tree_cases import daughters_of, parents, relabelled, worked_tree

from ramulus.errors import UnusableInputError
from ramulus.tree.strahler import topological_orders, walking_order

# A tree small enough to do by hand; of the daughters drawn together the left one is the wider.
#
#    segments            Strahler 1952       Horton 1945
#
#    3   4               1   1               3   1
#     \ /                 \ /                 \ /
#      1   2   6 7 8       2   1   1 1 1       3   1   2 1 1
#       \ /     \|/         \ /     \|/         \ /     \|/
#        9       5           2       2           3       2
#         \     /             \     /             \     /
#            0                   3                   3
PICTURE_PARENT = [-1, 9, 9, 1, 1, 0, 5, 5, 5, 0]
PICTURE_WIDTH = [9, 7, 3, 5, 4, 6, 5, 4, 3, 8]
PICTURE_STRAHLER = [3, 2, 1, 1, 1, 2, 1, 1, 1, 2]
PICTURE_HORTON = [3, 3, 1, 3, 1, 2, 2, 1, 1, 3]


def plain_strahler(parent):
    """Return Strahler's rule as he words it, by recursion."""
    below = daughters_of(parent)

    def order(k):
        found = sorted((order(d) for d in below[k]), reverse=True)
        if not found:
            return 1
        return found[0] + (len(found) > 1 and found[0] == found[1])

    return [order(k) for k in range(len(parent))]


def plain_tips(parent):
    below = daughters_of(parent)

    def tips(k):
        return sum(map(tips, below[k])) if below[k] else 1

    return [tips(k) for k in range(len(parent))]


def plain_horsfield(parent):
    below = daughters_of(parent)

    def order(k):
        return 1 + max(map(order, below[k]), default=0)

    return [order(k) for k in range(len(parent))]


def plain_generation(parent):
    out = []
    for segment in range(len(parent)):
        steps, above = 0, parent[segment]
        while above >= 0:
            steps, above = steps + 1, parent[above]
        out.append(steps)
    return out


def test_the_picture_has_the_orders_beside_its_segments():
    found = topological_orders(PICTURE_PARENT, diameter_um=PICTURE_WIDTH)
    assert found.strahler.tolist() == PICTURE_STRAHLER
    assert found.horton.tolist() == PICTURE_HORTON


@pytest.mark.parametrize(
    ("rule", "column"),
    [
        ("strahler", "strahler"),
        ("horsfield", "horsfield"),
        ("horton", "horton"),
        ("magnitude", "shreve_magnitude"),
        ("generation", "generation"),
    ],
)
def test_worked_tree_has_its_orders_by_every_rule(rule, column):
    # Source: tests/reference/worked_tree.csv, derived by hand from the rules' definitions.
    frame = worked_tree()
    found = topological_orders(frame["parent"], diameter_um=frame["diameter_um"])
    assert getattr(found, rule).tolist() == frame[column].tolist()


def test_worked_tree_counts_its_orders():
    # Source: tests/reference/worked_tree_orders.csv: 7, 5 and 1 segments; by Horton's definition
    # there are as many streams as tips.
    frame = worked_tree()
    found = topological_orders(frame["parent"], diameter_um=frame["diameter_um"])
    assert np.bincount(found.strahler)[1:].tolist() == [7, 5, 1]
    starts = [
        k for k in range(13)
        if frame["parent"][k] < 0 or found.horton[frame["parent"][k]] != found.horton[k]
    ]  # fmt: skip
    assert len(starts) == found.magnitude[0] == 7


@given(parents())
def test_orders_equal_their_definitions(parent):
    found = topological_orders(parent)
    assert found.strahler.tolist() == plain_strahler(parent)
    assert found.horsfield.tolist() == plain_horsfield(parent)
    assert found.magnitude.tolist() == plain_tips(parent)
    assert found.generation.tolist() == plain_generation(parent)


@given(parents())
def test_horton_streams_are_as_many_as_tips(parent):
    # Horton 1945: every stream has one source. Streams are chains of heirs, so each ends in a tip.
    found = topological_orders(parent)
    tips = np.setdiff1d(np.arange(len(parent)), parent)
    assert (found.horton >= found.strahler).all()
    for k in np.flatnonzero(parent >= 0):
        assert found.horton[k] <= found.horton[parent[k]]
    carried = sum(
        found.horton[parent == k].max(initial=0) == found.horton[k] for k in range(len(parent))
    )
    assert len(parent) - carried == len(tips)


@given(parents(), st.randoms(use_true_random=False))
def test_numbering_does_not_matter(parent, random):
    number = np.arange(len(parent))
    random.shuffle(number)
    first, second = topological_orders(parent), topological_orders(relabelled(parent, number))
    for rule in ("strahler", "horsfield", "magnitude", "generation"):
        assert getattr(second, rule)[number].tolist() == getattr(first, rule).tolist()


@given(parents(), st.data())
def test_subdividing_a_segment_changes_no_strahler_order(parent, data):
    cut = data.draw(st.integers(0, len(parent) - 1))
    # The new segment takes over the daughters of the one that is cut.
    longer = np.append(np.where(parent == cut, len(parent), parent), cut)
    before, after = topological_orders(parent), topological_orders(longer)
    assert after.strahler[:-1].tolist() == before.strahler.tolist()
    assert after.strahler[-1] == before.strahler[cut]
    assert after.magnitude[:-1].tolist() == before.magnitude.tolist()


@given(parents())
def test_walking_order_puts_parents_first(parent):
    order = walking_order(parent)
    place = np.empty(len(parent), int)
    place[order] = np.arange(len(parent))
    assert sorted(order.tolist()) == list(range(len(parent)))
    for k in np.flatnonzero(parent >= 0):
        assert place[parent[k]] < place[k]


def test_a_long_chain_needs_no_recursion():
    m = 20_000
    found = topological_orders(np.arange(-1, m - 1))
    assert found.strahler.max() == 1
    assert found.horsfield[0] == m
    assert found.generation[-1] == m - 1


@pytest.mark.parametrize(
    ("parent", "words"),
    [
        ([1, 0], "ring of parents above 2"),
        ([0], "ring of parents above 1"),
        ([-1, 7], "found 7, expected -1 or a segment from 0 to 1"),
        ([-2], "found -2"),
    ],
)
def test_no_tree_is_refused(parent, words):
    with pytest.raises(UnusableInputError, match=words):
        topological_orders(parent)
