"""Kernel of the tracing: walks along chains of voxels from node to node."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def walk_chains(start, neighbour, node_of):
    """Walk every chain of path voxels between node voxels, and every contact of two nodes.

    `start`, `neighbour` are neighbour lists, `node_of` the node of each voxel or -1 for a path
    voxel, which has two neighbours. Returns the path voxels chain after chain, where each chain
    starts (one more entry than chains), and the two nodes of each chain.
    """
    n = len(node_of)
    order = np.empty(n, dtype=np.int64)
    chain_start = np.zeros(n + 2, dtype=np.int64)
    ends = np.empty((n + 1, 2), dtype=np.int64)
    visited = np.zeros(n, dtype=np.bool_)
    chains, placed = 0, 0
    for voxel in range(n):
        if node_of[voxel] < 0:
            continue
        for k in range(start[voxel], start[voxel + 1]):
            before, here = voxel, neighbour[k]
            if node_of[here] >= 0:
                if here < voxel or node_of[here] == node_of[voxel]:
                    continue
            elif visited[here]:
                continue
            while node_of[here] < 0:
                visited[here] = True
                order[placed] = here
                placed += 1
                first = neighbour[start[here]]
                following = first if first != before else neighbour[start[here] + 1]
                before, here = here, following
            ends[chains, 0], ends[chains, 1] = node_of[voxel], node_of[here]
            chains += 1
            chain_start[chains] = placed
    return order[:placed], chain_start[: chains + 1], ends[:chains]
