"""Orders by cuts that are pooled over the cohort and frozen."""

import io

import cohort_fakes as fakes
import numpy as np
import pandas as pd
import pytest

from ramulus.cohort.pooled_orders import pooled_orders
from ramulus.tree.diameter_orders import OrderSettings, diameter_orders


def segments(radii_um, *, depth=3):
    """Return a full binary tree of so many levels; radii from the root's level downwards."""
    rows, level_of = [], {0: 0}
    for k in range(2**depth - 1):
        level = level_of[k]
        level_of[2 * k + 1] = level_of[2 * k + 2] = level + 1
        parent_end = (k + 1) // 2 if k else 0
        rows.append(
            (k, parent_end, k + 1, 100.0, radii_um[level], depth - level, 1 / (2**depth - 1))
        )
    names = [
        "segment_id",
        "node_a",
        "node_b",
        "length_um",
        "radius_um",
        "order",
        "resistance_share",
    ]
    return pd.DataFrame(rows, columns=names)


def test_orders_mean_the_same_diameters_in_every_sample():
    # The second sample's image stops one level earlier: its own orders would be one too low.
    whole, short = segments([16.0, 8.0, 4.0]), segments([16.0, 8.0], depth=2)
    found = pooled_orders({"whole": whole, "whole2": whole, "short": short})
    assert found.tables["whole"]["order"].tolist() == [1, 2, 3]
    assert found.tables["short"]["order"].tolist() == [2, 3]
    assert found.tables["short"]["diameter_um_mean"].tolist() == [16.0, 32.0]
    # Each cut lies half-way between means without spread: (8 + 16) / 2 and (16 + 32) / 2.
    assert found.cuts_um == pytest.approx([12.0, 24.0])


def test_one_sample_alone_gets_the_cuts_that_it_finds_itself():
    random = np.random.default_rng(1)
    table = segments([20.0, 9.0, 5.0, 2.0], depth=4)
    table["radius_um"] *= random.uniform(0.9, 1.1, len(table))
    parent = np.array([-1, *((np.arange(1, 15) + 1) // 2 - 1)])
    alone = diameter_orders(parent, 2 * table["radius_um"].to_numpy(), settings=OrderSettings())
    found = pooled_orders({"m": table})
    np.testing.assert_allclose(found.cuts_um, alone.cuts_um)
    counts = found.tables["m"].set_index("order")["n_segments"]
    assert counts.to_dict() == dict(zip(*np.unique(alone.order, return_counts=True), strict=True))


def test_order_of_the_samples_and_of_their_rows_does_not_matter():
    one, other = segments([16.0, 8.0, 4.0]), segments([15.0, 7.0, 3.0])
    found = pooled_orders({"a": one, "b": other})
    turned = pooled_orders({"b": other.iloc[::-1].reset_index(drop=True), "a": one})
    np.testing.assert_allclose(found.cuts_um, turned.cuts_um, rtol=1e-12)
    assert found.tables["b"]["n_elements"].tolist() == turned.tables["b"]["n_elements"].tolist()


def test_elements_and_shares_are_summed_by_order():
    table = segments([16.0, 8.0, 4.0])
    found = pooled_orders({"m": table}).tables["m"].set_index("order")
    assert found["n_segments"].tolist() == [4, 2, 1]
    assert found["resistance_share"].to_numpy() == pytest.approx(np.array([4, 2, 1]) / 7)


def test_cells_as_text_are_read_and_segments_without_order_left_out():
    text = pd.read_csv(io.StringIO(fakes.segments_csv()), dtype=str, keep_default_na=False)
    text.loc[6, "order"] = ""
    found = pooled_orders({"m": text}).tables["m"]
    assert found["n_segments"].sum() == 6
    assert "resistance_share" not in found


def test_a_ring_of_vessels_is_cut_and_ordered():
    ring = pd.DataFrame(
        {"node_a": [0, 1, 2], "node_b": [1, 2, 0], "order": 1, "radius_um": 5.0, "length_um": 10.0}
    )
    assert pooled_orders({"m": ring}).tables["m"]["n_segments"].sum() == 3


@pytest.mark.parametrize("radius", ["", "0"])
def test_no_ordered_segment_gives_no_cuts(radius):
    table = segments([5.0], depth=1).astype(object)
    table["radius_um"] = radius
    for given in ({}, {"m": table}):
        found = pooled_orders(given)
        assert (len(found.cuts_um), found.tables) == (0, {})
        assert found.note
