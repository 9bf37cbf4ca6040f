"""Woven loop networks: degree, rings, clearance and borders."""

import networkx as nx
import numpy as np
import pytest
from scipy.spatial.distance import cdist

from ramulus.errors import UnusableInputError
from ramulus.phantom.lattice import LatticeSettings, _mesh, weave
from ramulus.phantom.paths import Box

SHAPE, SPACING = (48, 96, 96), (2.0, 1.0, 1.0)
SETTINGS = LatticeSettings(spacing_um=15, radius_um=2.2, max_radius_um=3)


@pytest.fixture(scope="module")
def net():
    return weave(SETTINGS, shape=SHAPE, spacing_um=SPACING, seed=2)


def test_junctions_join_three_vessels_and_all_ends_are_cut_by_a_face(net):
    degree, kind = net.node_degree(), net.node_kind_names()
    assert set(degree) == {1, 3}
    assert (kind[degree == 1] == "border").all()
    assert (kind[degree == 3] == "junction").all()
    depth = Box.of(SHAPE, SPACING).depth_um(net.node_position_um).min(axis=1)
    assert np.abs(depth[degree == 1]).max() < 1e-9
    assert depth[degree == 3].min() > SETTINGS.max_radius_um


def test_it_is_connected_and_has_loops(net):
    graph = net.to_networkx()
    assert nx.is_connected(graph)
    # the number of independent cycles, counted by networkx on a spanning forest's chords
    assert len(nx.minimum_cycle_basis(nx.Graph(graph))) == net.n_segments - net.n_nodes + 1 > 1


def test_radii_keep_their_limits_and_differ(net):
    radius = net.point_radius_um[net.point_offsets[:-1]]
    assert radius.min() >= SETTINGS.min_radius_um
    assert radius.max() <= SETTINGS.max_radius_um
    assert len(np.unique(radius)) == net.n_segments


def test_vessels_that_share_no_junction_keep_their_clearance(net):
    radius = net.segment_radius_um()
    for a in range(net.n_segments):
        for b in range(a):
            if set(net.segment_nodes[a]) & set(net.segment_nodes[b]):
                continue
            pair = [net.point_position_um[net.points_of(s)] for s in (a, b)]
            assert cdist(*pair).min() - radius[a] - radius[b] >= SETTINGS.clearance_um


def test_vessels_lie_inside(net):
    assert Box.of(SHAPE, SPACING).depth_um(net.point_position_um).min() > -1e-9


def test_the_mesh_has_degree_three_and_rings_of_ten():
    settings = LatticeSettings(spacing_um=8, jitter=0, max_radius_um=2, clearance_um=0)
    box = Box.of((80, 80, 80), (1.0, 1.0, 1.0))
    mesh = _mesh(settings, box, np.random.default_rng(0))
    places = {n: mesh.nodes[n]["place"] for n in mesh if not mesh.nodes[n]["cut"]}
    inner = [n for n in places if box.depth_um(places[n][None]).min() > 20]
    assert {mesh.degree[n] for n in inner} == {3}
    lengths = [np.linalg.norm(places[a] - places[b]) for a in inner for b in mesh[a]]
    assert lengths == pytest.approx([8.0] * len(lengths))
    # (10,3)-a: all shortest rings have ten edges (Wells 1977, recalled from memory)
    assert nx.girth(nx.Graph(mesh.subgraph(places))) == 10


def test_the_same_seed_gives_the_same_network(net):
    again = weave(SETTINGS, shape=SHAPE, spacing_um=SPACING, seed=2)
    assert again.point_position_um.tobytes() == net.point_position_um.tobytes()


def test_a_volume_too_small_for_a_loop_is_refused():
    with pytest.raises(UnusableInputError, match=r"lattice\.spacing_um"):
        weave(LatticeSettings(), shape=(30, 30, 30), spacing_um=(1, 1, 1), seed=0)


def test_radius_limits_in_the_wrong_order_are_refused():
    with pytest.raises(UnusableInputError, match="min_radius_um"):
        weave(LatticeSettings(min_radius_um=5), shape=SHAPE, spacing_um=SPACING, seed=0)
