"""Kernels of the tracing: neighbours of centreline voxels, and walks along them."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def neighbour_lists(linear, voxels, shape):
    """(n, 26) numbers of the 26-neighbours of each voxel, -1 beyond the last; linear is sorted."""
    n = len(linear)
    out = np.full((n, 26), -1, np.int64)
    count = np.zeros(n, np.int64)
    for v in range(n):
        z, y, x = voxels[v, 0], voxels[v, 1], voxels[v, 2]
        for dz in range(-1, 2):
            zz = z + dz
            if zz < 0 or zz >= shape[0]:
                continue
            for dy in range(-1, 2):
                yy = y + dy
                if yy < 0 or yy >= shape[1]:
                    continue
                # The up to three neighbours of one row lie next to each other in the sorted list.
                start = (zz * shape[1] + yy) * shape[2]
                low, high = start + max(x - 1, 0), start + min(x + 1, shape[2] - 1)
                k = np.searchsorted(linear, low)
                while k < n and linear[k] <= high:
                    if k != v:
                        out[v, count[v]] = k
                        count[v] += 1
                    k += 1
    return out, count


@numba.njit(cache=True, nogil=True)
def label_clusters(neighbours, count, is_node, label):
    """Number the connected sets of node voxels in order of their first voxel; returns how many."""
    stack = np.empty(len(is_node), np.int64)
    found = 0
    for v in range(len(is_node)):
        if not is_node[v] or label[v] >= 0:
            continue
        label[v] = found
        stack[0], top = v, 1
        while top:
            top -= 1
            u = stack[top]
            for k in range(count[u]):
                w = neighbours[u, k]
                if is_node[w] and label[w] < 0:
                    label[w] = found
                    stack[top] = w
                    top += 1
        found += 1
    return found


@numba.njit(cache=True, nogil=True)
def walk_segments(neighbours, count, is_node, label, chain, offsets, ends):
    """Walk every chain of path voxels between two nodes; returns segments found.

    chain gets the inner voxels, offsets where each segment's start, ends the two node labels and the
    two node voxels that the chain leaves from.
    """
    visited = np.zeros(len(is_node), np.bool_)
    m, top = 0, 0
    offsets[0] = 0
    for v in range(len(is_node)):
        if not is_node[v]:
            continue
        for k in range(count[v]):
            u = neighbours[v, k]
            if is_node[u]:
                continue
            if visited[u]:
                continue
            previous, here = v, u
            begin = top
            while not is_node[here]:
                visited[here] = True
                chain[top] = here
                top += 1
                follow = -1
                for j in range(count[here]):
                    w = neighbours[here, j]
                    if w == previous:
                        continue
                    if is_node[w]:
                        # Back into the cluster just left only after a real loop.
                        if label[w] == label[v] and top - begin == 1 and count[here] > 1 and w != v:
                            if follow < 0:
                                follow = w
                            continue
                        follow = w
                        break
                    if not visited[w]:
                        follow = w
                if follow < 0:
                    break
                previous, here = here, follow
            if is_node[here]:
                ends[m, 0], ends[m, 1], ends[m, 2], ends[m, 3] = label[v], label[here], v, here
                m += 1
                offsets[m] = top
            else:
                top = begin
    return m
