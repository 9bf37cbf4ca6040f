"""Small graphs for the tests of the file formats."""

import numpy as np

from ramulus.network.graph import CentrelineGraph


def random_tree(n_segments, *, seed=0):
    """Return a tree directed away from node 0; whole numbers of um, two to six points a segment."""
    rng = np.random.default_rng(seed)
    nodes = [rng.integers(-40, 40, 3).astype(float)]
    ends, lines, radii = [], [], []
    for k in range(n_segments):
        start = int(rng.integers(0, k + 1))
        steps = rng.integers(1, 9, (int(rng.integers(1, 6)), 3))
        line = nodes[start] + np.concatenate([np.zeros((1, 3)), np.cumsum(steps, axis=0)])
        nodes.append(line[-1])
        ends.append((start, k + 1))
        lines.append(line)
        radii.append(np.full(len(line), rng.integers(1, 30) / 4))
    return CentrelineGraph.from_polylines(nodes, ends, lines, radii)


def ring_with_a_tail():
    """Return two nodes joined twice, a tail, and a loop from the tail's end to itself."""
    nodes = [[0, 0, 0], [0, 0, 8], [0, 0, 20]]
    lines = [
        [[0, 0, 0], [0, 3, 4], [0, 0, 8]],
        [[0, 0, 0], [0, -3, 4], [0, 0, 8]],
        [[0, 0, 8], [0, 0, 20]],
        [[0, 0, 20], [4, 0, 24], [-4, 0, 24], [0, 0, 20]],
    ]
    radii = [[2.0, 2.0, 2.0], [1.5, np.nan, 1.5], [3.0, 2.5], [1.0, 1.0, 1.0, 1.0]]
    return CentrelineGraph.from_polylines(nodes, [[0, 1], [0, 1], [1, 2], [2, 2]], lines, radii)
