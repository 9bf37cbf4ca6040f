"""Trees grown from published tables: orders, counts, ratios and cross-sections come back."""

from dataclasses import dataclass

import numpy as np
import pytest
from tree_cases import drawn_diameters, grow, matrix_of, rows_of, table

from ramulus.tree.diameter_orders import OrderSettings, diameter_orders
from ramulus.tree.elements import connectivity, elements, order_table
from ramulus.tree.horton import horton_fit

# Sources: pig coronary arteries: Kassab 1993, Am J Physiol 265:H350, tables 1 to 3 and 5 to 9 (seen
# in a transcription). Rat pulmonary arteries: Jiang 1994, J Appl Physiol 76:882 (seen in two
# transcriptions); its SDs were not found: 15 % of the mean is a judgement. Trees are grown down to
# the lowest order given, and diameters drawn between the published cuts with the published SDs.
TREES = [("RCA", 5), ("LAD", 5), ("LCX", 5), ("rat", 4)]


@dataclass(frozen=True)
class Published:
    """A published tree from its lowest order kept: matrix with errors, diameters, numbers."""

    matrix: np.ndarray
    se: np.ndarray
    mean_um: np.ndarray
    sd_um: np.ndarray
    number: np.ndarray
    lowest: int

    @property
    def cuts_um(self):
        low, high = self.mean_um + self.sd_um, self.mean_um - self.sd_um
        return 0.5 * (low[:-1] + high[1:])[self.lowest - 1 :]


def published(tree, lowest):
    if tree == "rat":
        rows = table("rat_pulmonary_orders")
        matrix = matrix_of(table("rat_pulmonary_connectivity"), "daughters_per_parent_element")
        mean = rows["element_diameter_um"].to_numpy(dtype=float)
        number = rows["n_elements_from_connectivity"].to_numpy(dtype=float)
        return Published(matrix, 0.05 * matrix, mean, 0.15 * mean, number, lowest)
    rows = rows_of("kassab1993_coronary_orders", tree=tree)
    links = rows_of("kassab1993_connectivity", tree=tree)
    return Published(
        matrix_of(links, "elements_per_parent_mean"), matrix_of(links, "elements_per_parent_se"),
        rows["segment_diameter_um_mean"].to_numpy(dtype=float),
        rows["segment_diameter_um_sd"].to_numpy(dtype=float),
        rows["elements_total"].to_numpy(dtype=float), lowest,
    )  # fmt: skip


def grown(tree, lowest, *, diagonal=True):
    known, random = published(tree, lowest), np.random.default_rng(1)
    matrix = known.matrix if diagonal else known.matrix * (1 - np.eye(len(known.matrix)))
    made = grow(matrix, lowest, random)
    return known, made, drawn_diameters(made.order, known.mean_um, known.sd_um, random)


@pytest.mark.parametrize(("tree", "lowest"), TREES)
def test_published_cuts_give_back_the_published_tree(tree, lowest):
    known, made, diameter = grown(tree, lowest)
    cuts = OrderSettings(cuts_um=tuple(known.cuts_um))
    found = diameter_orders(made.parent, diameter, settings=cuts)
    assert (found.order + lowest - 1 == made.order).all()
    length = np.ones(len(diameter))
    group = elements(made.parent, found.order, length, diameter)
    rows = order_table(group, found.order, length, diameter)
    # Numbers: those of the matrix, but for rounding at the top; the published totals lie up to a
    # quarter higher, since the matrix is short of them by up to 19 % at the top (seven elements)
    # and passes that on.
    gain = np.linalg.inv(np.eye(len(known.number)) - known.matrix)[:, -1]
    np.testing.assert_allclose(rows["n_elements"], gain[lowest - 1 :], rtol=0.1, atol=1)
    np.testing.assert_allclose(rows["n_elements"], known.number[lowest - 1 :], rtol=0.26, atol=1)
    matrix, again = known.matrix[lowest - 1 :, lowest - 1 :], connectivity(group)
    spread = 2 * np.nan_to_num(known.se[lowest - 1 :, lowest - 1 :]) + 1 / again.n_parents
    assert (np.abs(again.mean - matrix) <= spread).all()
    number = horton_fit(rows["order"], rows["n_elements"]).ratio.value
    wide = horton_fit(rows["order"], rows["diameter_um_mean"]).ratio.value
    kept = np.arange(lowest, len(known.number) + 1)
    assert number == pytest.approx(
        horton_fit(kept, known.number[lowest - 1 :]).ratio.value, rel=0.04
    )
    assert wide == pytest.approx(
        horton_fit(kept, known.mean_um[lowest - 1 :]).ratio.value, rel=0.04
    )
    area = known.number * np.pi / 4 * (known.mean_um**2 + known.sd_um**2)
    np.testing.assert_allclose(rows["cross_section_um2"], area[lowest - 1 :], rtol=0.3)


@pytest.mark.parametrize(("tree", "lowest"), TREES)
def test_the_iteration_finds_the_published_cuts_from_near_by(tree, lowest):
    # From cuts that are a tenth too high. From cuts too low the iteration runs away: the populous
    # order below spoils the mean and the SD of the one above, and the cut falls on.
    known, made, diameter = grown(tree, lowest)
    off = OrderSettings(cuts_um=tuple(1.1 * known.cuts_um))
    start = diameter_orders(made.parent, diameter, settings=off).order
    found = diameter_orders(made.parent, diameter, start=start)
    assert found.converged
    np.testing.assert_allclose(found.cuts_um, known.cuts_um, rtol=0.1)
    assert np.mean(found.order + lowest - 1 == made.order) > 0.98


@pytest.mark.parametrize(("tree", "lowest"), [("RCA", 5), ("LAD", 5), ("LCX", 5)])
def test_from_strahler_the_iteration_finds_the_published_orders(tree, lowest):
    # Without the matrix's diagonal: Strahler's rule takes a side branch of the parent's order for a
    # fork. The rat's tree has too few direct daughters at the top for Strahler's orders.
    known, made, diameter = grown(tree, lowest, diagonal=False)
    found = diameter_orders(made.parent, diameter)
    assert found.converged
    assert found.note == "" or "changed their order in the last turn" in found.note
    np.testing.assert_allclose(found.cuts_um, known.cuts_um, rtol=0.1)
    assert np.mean(found.order + lowest - 1 == made.order) > 0.98
    by_element = diameter_orders(made.parent, diameter, settings=OrderSettings(basis="elements"))
    assert np.mean(by_element.order + lowest - 1 == made.order) > 0.97
    # "Two or three" cycles (Jiang 1994), "one or two" (Kassab 1993).
    changed = [
        np.mean(np.abs(a.count - b.count).sum() / a.count.sum())
        for a, b in zip(found.steps[2:], found.steps[1:], strict=False)
    ]
    assert changed[0] < 0.01


def test_human_pulmonary_arteries_have_their_diameters_lengths_and_cross_sections_back():
    # Source: Huang 1996, J Appl Physiol 81:2123, table 2 (seen in a transcription); branching ratio
    # 3.36 recalled from memory; the CV of 10 % is a judgement. Common practice, no source: about 15
    # orders from the trunk to the capillaries, numbers growing faster than areas fall.
    rows = rows_of("human_pulmonary_orders", side="artery").query("order >= 10")
    mean, length = rows["element_diameter_mm"] * 1000, rows["element_length_mm"] * 1000
    matrix = np.diag(np.full(5, 3.36), 1)
    random = np.random.default_rng(7)
    made = grow(matrix, 1, random)
    wide = mean.to_numpy()[made.order - 1]
    # One diameter an element, with its CV; its length shared out among its segments.
    per_element = np.bincount(made.element)
    diameter = wide * random.lognormal(0, 0.1, len(per_element))[made.element]
    long = length.to_numpy()[made.order - 1] / per_element[made.element]
    found = diameter_orders(made.parent, diameter)
    assert np.mean(found.order == made.order) > 0.97
    group = elements(made.parent, found.order, long, diameter)
    mine = order_table(group, found.order, long, diameter)
    se = 0.1 / np.sqrt(mine["n_elements"])
    assert (np.abs(mine["diameter_um_mean"] / mean.to_numpy() - 1) < 4 * se + 0.03).all()
    np.testing.assert_allclose(mine["element_length_um_mean"][:4], length.to_numpy()[:4], rtol=0.1)
    assert horton_fit(mine["order"], mine["n_elements"]).ratio.value == pytest.approx(
        3.36, rel=0.06
    )
    assert mine["cross_section_um2"].iloc[0] > 1.5 * mine["cross_section_um2"].iloc[-1]
