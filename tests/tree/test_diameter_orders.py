"""Diameter-defined orders: the worked iteration, and what is decided at its edges."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tree_cases import daughters_of, parents, relabelled, rows_of, table, worked_tree

from ramulus.errors import UnusableInputError
from ramulus.tree.diameter_orders import OrderSettings, diameter_orders, tip_loss


def worked(**changes):
    frame = worked_tree()
    return diameter_orders(frame["parent"], frame["diameter_um"], settings=OrderSettings(**changes))


def plain_walk(parent, diameter, cuts):
    """Return the rule of the walk by recursion."""
    below = daughters_of(parent)
    out = [0] * len(parent)

    def order(k):
        by_diameter = 1 + sum(diameter[k] > cut for cut in cuts)
        out[k] = max([by_diameter, *(order(d) for d in below[k])])
        return out[k]

    for root in np.flatnonzero(parent < 0):
        order(root)
    return out


def plain_cut(low, high):
    """Return the published cut between two lists of diameters."""
    s_low = np.std(low, ddof=1) if len(low) > 1 else 0.0
    s_high = np.std(high, ddof=1) if len(high) > 1 else 0.0
    return ((np.mean(low) + s_low) + (np.mean(high) - s_high)) / 2


def test_worked_tree_has_its_diameter_defined_orders():
    # Source: tests/reference/worked_tree.csv, derived by hand.
    assert worked().order.tolist() == worked_tree()["diameter_defined_order"].tolist()


def test_worked_tree_goes_through_the_published_iteration():
    # Source: tests/reference/worked_tree_iterations.csv, derived by hand from Kassab 1993, eq. 1.
    found = worked()
    rows = table("worked_tree_iterations")
    for turn, step in enumerate(found.steps):
        mine = rows[rows["iteration"] == turn]
        assert step.count.tolist() == mine["segments"].tolist()
        np.testing.assert_allclose(step.mean_um, mine["diameter_um_mean"], atol=5e-5)
        np.testing.assert_allclose(step.sd_um, mine["diameter_um_sd"], atol=5e-5)
        np.testing.assert_allclose(step.cuts_um, mine["upper_cut_um"].dropna(), atol=5e-5)
    assert len(found.steps) == 2
    assert (found.iterations, found.converged, found.note) == (2, True, "")


def test_elements_as_the_basis_give_the_worked_tree_the_same_orders():
    # Source: the reference's README: "then fixed"; elements 10, 20.3333, 41 um.
    found = worked(basis="elements")
    assert found.order.tolist() == worked().order.tolist()
    np.testing.assert_allclose(found.mean_um, [10, 61 / 3, 41])


def test_published_cuts_of_the_right_coronary_artery():
    # Source: Kassab 1993, table 1 (segments), seen in a transcription; cuts derived, to three
    # digits.
    rows = rows_of("kassab1993_coronary_orders", tree="RCA")
    mean, sd = rows["segment_diameter_um_mean"], rows["segment_diameter_um_sd"]
    expected = [11.1, 15.6, 25.0, 44.7, 92.5, 194, 342, 552, 955, 2320]
    # Two members at D - S / sqrt 2 and D + S / sqrt 2 have mean D and sample SD S.
    half = sd / np.sqrt(2)
    diameter = np.concatenate([[d - h, d + h] for d, h in zip(mean, half, strict=True)])
    order = np.repeat(np.arange(1, 12), 2)
    found = diameter_orders(np.full(22, -1), diameter, start=order)
    np.testing.assert_allclose(found.steps[0].cuts_um, expected, rtol=6e-3)


@given(parents(), st.data())
def test_walk_equals_its_definition(parent, data):
    diameter = np.array(data.draw(st.lists(
        st.floats(1, 100), min_size=len(parent), max_size=len(parent))))  # fmt: skip
    cuts = sorted(data.draw(st.sets(st.floats(1, 100), max_size=4)))
    found = diameter_orders(parent, diameter, settings=OrderSettings(cuts_um=tuple(cuts)))
    assert found.order.tolist() == plain_walk(parent, diameter, cuts)


@settings(deadline=None)
@given(parents(), st.data())
def test_a_fixed_point_reproduces_itself(parent, data):
    diameter = np.array(data.draw(st.lists(
        st.floats(1, 100), min_size=len(parent), max_size=len(parent))))  # fmt: skip
    found = diameter_orders(parent, diameter)
    assert set(found.order) == set(range(1, len(found.mean_um) + 1))
    if found.note == "":
        again = diameter_orders(parent, diameter, start=found.order)
        assert again.order.tolist() == found.order.tolist()
        assert again.iterations == 1
    else:
        assert "does not settle" in found.note or "in the last turn" in found.note


@settings(deadline=None)
@given(parents(), st.data())
def test_neither_numbering_nor_the_unit_of_length_matters(parent, data):
    m = len(parent)
    diameter = np.array(data.draw(st.lists(st.integers(1, 60), min_size=m, max_size=m)), float)
    number = np.array(data.draw(st.permutations(range(m))))
    moved = np.empty(m)
    moved[number] = diameter
    first = diameter_orders(parent, diameter)
    second = diameter_orders(relabelled(parent, number), 4.0 * moved)
    # Sums in another order may move a cut by a rounding step; only a diameter on a cut could turn.
    gap = np.abs(diameter[:, None] - first.cuts_um[None, :]).min(initial=np.inf)
    if gap > 1e-9 and first.note == "" == second.note:
        assert second.order[number].tolist() == first.order.tolist()
        np.testing.assert_allclose(second.cuts_um, 4.0 * first.cuts_um)


def test_a_cut_end_goes_by_its_diameter():
    # A wide branch that the image cuts off is a tip of Strahler's order 1, but no small vessel:
    #
    #    9  10        39 (cut)
    #      \ |       /
    #  11   20     /           and the same three twigs on the other side
    #    \   |   /
    #       40
    parent = [-1, 0, 0, 1, 1, 1, 0, 6, 6, 6]
    diameter = [40, 20, 39, 9, 10, 11, 21, 9, 10, 11]
    found = diameter_orders(parent, diameter)
    assert found.order.tolist() == [3, 2, 3, 1, 1, 1, 2, 1, 1, 1]


def test_an_order_that_empties_is_dropped_and_those_above_move_down():
    # Three orders to start from, but only two kinds of diameter: the cuts between orders 1 and 2
    # and between 2 and 3 leave nothing between them.
    parent = [-1, 0, 0, 1, 1, 2, 2]
    found = diameter_orders(parent, [40, 40, 40, 10, 10, 10, 10])
    assert found.order.tolist() == [2, 2, 2, 1, 1, 1, 1]
    assert found.mean_um.tolist() == [10, 40]
    assert found.converged


def test_frozen_cuts_keep_the_number_of_an_order_that_is_missing():
    found = diameter_orders([-1, 0, 0], [40, 10, 9], settings=OrderSettings(cuts_um=(12, 24)))
    assert found.order.tolist() == [3, 1, 1]
    assert np.isnan(found.mean_um[1])
    assert found.mean_um[[0, 2]].tolist() == [9.5, 40]
    assert found.note == "cuts given"


def test_crossing_means_meet_in_the_middle_and_the_order_between_empties():
    # Order 2 to start from is thinner than order 1 (two wide ends that are cut): their cut is the
    # midpoint, (30 + 10) / 2 = 20, and no order is below its daughters'.
    #
    #   30   30
    #     \ /
    #     10      then both sides are above the cut, and one order is left
    found = diameter_orders([-1, 0, 0], [10, 30, 30])
    assert found.steps[0].mean_um.tolist() == [30, 10]
    assert found.steps[0].cuts_um.tolist() == [20]
    assert found.order.tolist() == [1, 1, 1]
    assert found.converged


def test_a_cut_outside_its_means_is_taken_back_to_their_midpoint():
    # S_2 is so large that ((D_1 + S_1) + (D_2 - S_2)) / 2 lies below D_1.
    parent, diameter = [-1, 0, 1, 2, 2], [200, 14, 12, 10, 9.5]
    found = diameter_orders(parent, diameter)
    low, high = [10, 9.5], [200, 14, 12]
    assert plain_cut(low, high) < np.mean(low)
    assert found.steps[0].cuts_um == pytest.approx([(np.mean(low) + np.mean(high)) / 2])


def test_a_parent_thinner_than_its_daughter_keeps_the_daughters_order():
    #   10   9   10  9
    #     \ /     \ /
    #     22      20
    #       \    /
    #        15         thinner than both, and not above the cut between orders 2 and 3
    found = diameter_orders([-1, 0, 0, 1, 1, 2, 2], [15, 22, 20, 10, 9, 10, 9])
    assert found.order.tolist() == [2, 2, 2, 1, 1, 1, 1]


def test_the_start_is_strahler_unless_another_is_given():
    parent, diameter = [-1, 0, 0, 1, 1], [30.0, 20.0, 19.0, 10.0, 9.0]
    assert diameter_orders(parent, diameter).order.max() == 2
    by_hand = diameter_orders(parent, diameter, start=[3, 2, 2, 1, 1])
    assert by_hand.order.tolist() == [3, 2, 2, 1, 1]
    assert by_hand.converged


def test_a_tree_that_does_not_settle_keeps_the_second_turn_and_says_so():
    # Diameters without gaps: the cuts run away towards the thin vessels, and the share that changes
    # rises again.
    random = np.random.default_rng(3)
    parent = np.array([-1, *(random.integers(k // 3, k) for k in range(1, 400))])
    diameter = random.lognormal(2, 0.4, 400)
    found = diameter_orders(parent, diameter)
    assert not found.converged
    assert found.note.startswith("the iteration does not settle: never less than")
    assert "those after turn 2 are kept" in found.note
    twice = diameter_orders(parent, diameter, settings=OrderSettings(max_iterations=2))
    assert found.order.tolist() == twice.order.tolist()
    np.testing.assert_array_equal(found.cuts_um, twice.cuts_um)
    assert len(found.steps) == 3


def test_too_few_turns_are_told():
    frame = worked_tree()
    found = diameter_orders(
        frame["parent"], frame["diameter_um"], settings=OrderSettings(max_iterations=1)
    )
    assert found.note == (
        "the iteration does not settle: never less than 15 % of the segments change their order;"
        " those after turn 1 are kept"
    )
    assert not found.converged


def test_same_order_side_branches_add_an_order_to_start_from():
    # A trunk of order 2 with a side branch of order 2: Strahler's rule takes that for a fork.
    #
    #   10   9       9   10
    #     \ /         \ /
    #     20    10    21
    #       \  /     /
    #        22     /
    #          \  /
    #           23
    parent, diameter = [-1, 0, 0, 1, 1, 2, 2, 3, 3], [23, 22, 21, 20, 10, 9, 10, 10, 9]
    found = diameter_orders(parent, diameter)
    assert found.steps[0].count.tolist() == [5, 3, 1]
    own = diameter_orders(parent, diameter, start=[2, 2, 2, 2, 1, 1, 1, 1, 1])
    assert own.order.tolist() == [2, 2, 2, 2, 1, 1, 1, 1, 1]
    assert own.converged


def test_losing_the_thinnest_tips_shifts_orders_by_less_than_their_number():
    frame = worked_tree()
    some, most = tip_loss(frame["parent"], frame["diameter_um"], shares=(0.2, 1.0))
    assert (some.share, some.orders) == (0.2, 3)
    assert some.shift == 0
    # Without any tip of order 1 the numbers start one lower.
    assert most.orders == 2
    assert most.shift < 0


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (([-1, 0], [5.0, 0.0]), "found 0.0, expected diameters > 0"),
        (([-1, 0], [5.0, float("nan")]), "found nan, expected diameters > 0"),
        (([-1, 0], [5.0]), r"found shape \(1,\), expected \(2,\)"),
    ],
)
def test_impossible_diameters_are_refused(arguments, words):
    with pytest.raises(UnusableInputError, match=words):
        diameter_orders(*arguments)


@pytest.mark.parametrize("cuts", [(5.0, 5.0), (7.0, 6.0), (-1.0, 3.0)])
def test_impossible_cuts_are_refused(cuts):
    with pytest.raises(UnusableInputError, match=r"orders\.cuts_um: found"):
        diameter_orders([-1], [5.0], settings=OrderSettings(cuts_um=cuts))


def test_an_impossible_start_is_refused():
    with pytest.raises(UnusableInputError, match="start: found"):
        diameter_orders([-1, 0], [5.0, 4.0], start=[0, 1])
