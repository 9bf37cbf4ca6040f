import csv
from pathlib import Path

import networkx as nx
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from small_graphs import random_tree, ring_with_a_tail

from ramulus.errors import UnusableInputError
from ramulus.network.graph import NODE_KINDS
from ramulus.network.swc import read_swc, swc_text

TREES = Path(__file__).parents[2].parent / "shared" / "volumes" / "trees"

FORK = """# a comment
1 0 0 0 0 2.0 -1
2 0 10 0 0 2.0 1
3 0 10 5 0 1.5 2
4 0 10 9 0 1.5 3
5 0 10 0 6 1.0 2
"""


def read(tmp_path, text, **kwargs):
    file = tmp_path / "tree.swc"
    file.write_text(text, encoding="latin-1")
    return read_swc(file, **kwargs)


def test_unbranched_points_become_one_segment(tmp_path):
    graph = read(tmp_path, FORK)
    assert graph.segment_length_um().tolist() == [10.0, 9.0, 6.0]
    assert graph.points_per_segment.tolist() == [2, 3, 2]
    assert graph.node_degree().tolist() == [1, 3, 1, 1]


def test_positions_are_turned_to_z_y_x_and_scaled(tmp_path):
    graph = read(tmp_path, "1 0 1 2 3 0.5 -1\n2 0 4 5 6 0.5 1\n", unit="mm")
    assert graph.node_position_um.tolist() == [[3000.0, 2000.0, 1000.0], [6000.0, 5000.0, 4000.0]]
    assert graph.point_radius_um.tolist() == [500.0, 500.0]


def test_the_root_is_the_inlet(tmp_path):
    graph = read(tmp_path, FORK)
    assert graph.node_kind_names().tolist() == ["inlet", "junction", "end", "end"]
    assert NODE_KINDS[graph.node_kind[0]] == "inlet"


def test_a_branch_does_not_take_its_parents_radius(tmp_path):
    graph = read(tmp_path, FORK)
    assert graph.segment_radius_um().tolist() == [2.0, 1.5, 1.0]


def test_branches_at_the_root_have_their_own_radii_too(tmp_path):
    graph = read(tmp_path, "1 0 0 0 0 9 -1\n2 0 4 0 0 2 1\n3 0 0 4 0 3 1\n")
    assert graph.segment_radius_um().tolist() == [2.0, 3.0]


def test_parents_may_stand_after_their_children(tmp_path):
    lines = FORK.strip().splitlines()
    graph = read(tmp_path, "\n".join(lines[::-1]))
    assert sorted(graph.segment_length_um().tolist()) == [6.0, 9.0, 10.0]
    assert graph.node_kind_names()[graph.segment_nodes[:, 0]].tolist().count("inlet") == 1


def test_steps_of_no_length_are_merged(tmp_path):
    text = "1 0 0 0 0 2 -1\n2 0 0 0 0 2 1\n3 0 9 0 0 2 2\n4 0 9 0 0 2 3\n5 0 0 0 0 2 1\n"
    graph = read(tmp_path, text)
    assert graph.segment_length_um().tolist() == [9.0]
    assert graph.n_nodes == 2


def test_a_radius_of_zero_is_unknown(tmp_path):
    graph = read(tmp_path, "1 0 0 0 0 0 -1\n2 0 4 0 0 1 1\n3 0 8 0 0 0 2\n")
    assert np.isnan(graph.point_radius_um).tolist() == [True, False, True]


def test_two_roots_give_two_parts(tmp_path):
    graph = read(tmp_path, "1 0 0 0 0 1 -1\n2 0 4 0 0 1 1\n7 0 0 50 0 1 -1\n9 0 4 50 0 1 7\n")
    assert graph.n_segments == 2
    assert (graph.node_kind == NODE_KINDS.index("inlet")).sum() == 2


def test_a_root_alone_is_no_vessel(tmp_path):
    graph = read(tmp_path, "1 0 0 0 0 1 -1\n2 0 4 0 0 1 1\n3 0 0 50 0 1 -1\n")
    assert (graph.n_nodes, graph.n_segments) == (2, 1)


def test_comments_in_another_encoding_do_not_matter(tmp_path):
    assert read(tmp_path, "# M\xfcller, \xb5m\n" + FORK).n_segments == 3


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("", "found 0 points, expected at least two"),
        ("1 0 0 0 0 1 -1\n", "found 1 points, expected at least two"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 1\n", "line 2 is '2 0 1 0 0 1', expected id type x y z"),
        ("1 0 0 0 0 1 -1\n\n2 0 1 0 0 one 1\n", "line 3 is '2 0 1 0 0 one 1'"),
        ("1 0 0 0 0 1 -1\n2 0 nan 0 0 1 1\n", "line 2 is"),
        ("1 0 0 0 0 1 -1\n2 0 inf 0 0 1 1\n", "line 2 is"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 -1 1\n", "line 2 has the radius -1.0, expected a radius >= 0"),
        ("1 0 0 0 0 1 -1\n1 0 1 0 0 1 1\n", "line 2 repeats the id 1"),
        ("1 0 0 0 0 1 -1\n2.5 0 1 0 0 1 1\n", "line 2 has the id 2.5, expected a whole number"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 1 1e300\n", "line 2 has the parent 1e+300"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 1 7\n", "line 2 names the parent 7"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 1 -2\n", "line 2 names the parent -2"),
        ("1 0 0 0 0 1 2\n2 0 1 0 0 1 1\n", "the parents of line 1 form a cycle"),
        ("1 0 0 0 0 1 -1\n2 0 1 0 0 1 2\n", "the parents of line 2 form a cycle"),
        ("1 0 0 0 0 1 -1\n2 0 0 0 0 1 1\n", "all points coincide"),
        ("\x00\x01\x02", "line 1 is '\\x00"),
    ],
)
def test_unusable_files_are_refused_with_the_line(tmp_path, text, words):
    with pytest.raises(UnusableInputError) as refused:
        read(tmp_path, text)
    assert words in str(refused.value)
    assert "\n" not in str(refused.value)


def test_a_missing_file_and_an_unknown_unit_are_refused(tmp_path):
    with pytest.raises(UnusableInputError, match=r"absent\.swc: cannot be read"):
        read_swc(tmp_path / "absent.swc")
    with pytest.raises(UnusableInputError, match="pixel"):
        read(tmp_path, FORK, unit="pixel")


# Source: the data set's own table, shared/volumes/README.md (BraVa, Wright et al. 2013, NeuroImage
# 82). There an end counts that lies at the root itself, BG17's point 2: it has no length, is no
# vessel and would join the inlet to an outlet, hence one bifurcation and one tip fewer here.
@pytest.mark.parametrize(
    ("name", "bifurcations", "tips", "length_mm", "radii_mm"),
    [
        ("BG0002", 106, 107, 7454, (0.31, 0.42, 1.68)),
        ("BG07", 121, 122, 8650, (0.31, 0.47, 2.69)),
        ("BG17", 147 - 1, 148 - 1, 8249, (0.31, 0.44, 1.55)),
    ],
)
def test_published_trees_keep_their_counts(name, bifurcations, tips, length_mm, radii_mm):
    file = TREES / f"{name}.swc"
    if not file.exists():
        pytest.skip("the folder shared/volumes is absent")
    graph = read_swc(file, unit="mm")
    leaving = np.bincount(graph.segment_nodes[:, 0], minlength=graph.n_nodes)
    assert (leaving >= 2).sum() == bifurcations
    assert (leaving == 0).sum() == tips
    assert set(leaving.tolist()) <= {0, 1, 2}
    assert graph.segment_length_um().sum() / 1000 == pytest.approx(length_mm, abs=0.5)
    radius_mm = graph.point_radius_um / 1000
    found = [radius_mm.min(), np.median(radius_mm), radius_mm.max()]
    # Points of bifurcations count once a branch here, hence a median that differs a little.
    assert found == pytest.approx(radii_mm, abs=0.006)


@given(st.integers(1, 25), st.integers(0, 1000))
@settings(max_examples=40, deadline=None)
def test_a_written_tree_reads_back_the_same(tmp_path_factory, n_segments, seed):
    graph = random_tree(n_segments, seed=seed)
    file = tmp_path_factory.mktemp("swc") / "tree.swc"
    file.write_text(swc_text(graph))
    again = read_swc(file)
    assert again.segment_length_um().sum() == pytest.approx(graph.segment_length_um().sum())
    leaves = [np.bincount(g.segment_nodes[:, 0], minlength=g.n_nodes) for g in (graph, again)]
    assert (leaves[0] == 0).sum() == (leaves[1] == 0).sum()
    assert (leaves[0] >= 2).sum() == (leaves[1] >= 2).sum()


def test_a_written_tree_opens_in_networkx_with_the_same_branching(tmp_path):
    graph = random_tree(40, seed=5)
    (tmp_path / "tree.swc").write_text(swc_text(graph))
    with (tmp_path / "tree.swc").open() as file:
        lines = [row for row in csv.reader(file, delimiter=" ") if not row[0].startswith("#")]
    tree = nx.DiGraph((int(row[6]), int(row[0])) for row in lines if row[6] != "-1")
    assert nx.is_arborescence(tree)
    counts = {n: d for n, d in tree.out_degree() if d > 1}
    leaving = np.bincount(graph.segment_nodes[:, 0], minlength=graph.n_nodes)
    assert sorted(counts.values()) == sorted(leaving[leaving > 1].tolist())
    place = {int(row[0]): [float(v) for v in row[2:5]] for row in lines}
    length = sum(np.linalg.norm(np.subtract(place[a], place[b])) for a, b in tree.edges)
    assert length == pytest.approx(graph.segment_length_um().sum())
    assert place[1] == graph.node_position_um[0, ::-1].tolist()


def test_parents_are_written_before_their_children_and_from_the_inlet():
    graph = random_tree(12, seed=3)
    kind = graph.node_kind.copy()
    tip = int(np.flatnonzero(graph.node_degree() == 1)[-1])
    kind[tip] = NODE_KINDS.index("inlet")
    rows = [line.split() for line in swc_text(graph.replace(node_kind=kind)).splitlines()[1:]]
    assert [row[0] for row in rows if row[6] == "-1"] == ["1"]
    assert all(int(row[6]) < int(row[0]) for row in rows)
    assert [float(v) for v in rows[0][2:5]] == graph.node_position_um[tip, ::-1].tolist()


def test_a_graph_with_loops_is_no_swc():
    assert swc_text(ring_with_a_tail()) is None


def test_unknown_radii_are_written_as_zero():
    graph = random_tree(1).replace(point_radius_um=np.full(random_tree(1).n_points, np.nan))
    assert {line.split()[5] for line in swc_text(graph).splitlines()[1:]} == {"0"}
