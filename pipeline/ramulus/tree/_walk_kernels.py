"""Kernels that walk the graph: bridges, and distances from the inlets."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def bridges(segment_nodes, ends_at, ends_offset, n_nodes, is_bridge):
    """Mark segments on no cycle (Tarjan 1974, Inf Process Lett 2:160), without recursion."""
    order = np.full(n_nodes, -1, np.int64)
    low = np.zeros(n_nodes, np.int64)
    entered = np.full(n_nodes, -1, np.int64)
    place = ends_offset[:-1].copy()
    stack = np.empty(n_nodes, np.int64)
    clock = 0
    for root in range(n_nodes):
        if order[root] >= 0:
            continue
        order[root] = low[root] = clock
        clock += 1
        stack[0], top = root, 1
        while top:
            v = stack[top - 1]
            if place[v] < ends_offset[v + 1]:
                half = ends_at[place[v]]
                place[v] += 1
                segment = half // 2
                w = segment_nodes[segment, 1 - half % 2]
                if segment == entered[v]:
                    continue
                if order[w] < 0:
                    order[w] = low[w] = clock
                    clock += 1
                    entered[w] = segment
                    stack[top] = w
                    top += 1
                else:
                    low[v] = min(low[v], order[w])
            else:
                top -= 1
                if top:
                    u = stack[top - 1]
                    low[u] = min(low[u], low[v])
                    if low[v] > order[u]:
                        is_bridge[entered[v]] = True


@numba.njit(cache=True, nogil=True)
def walk(segment_nodes, ends_at, ends_offset, roots, upstream, parent, generation, visited):
    """Breadth first from the roots: upstream node, parent segment and generation of each segment."""
    queue = np.empty(len(visited), np.int64)
    came_by = np.full(len(visited), -1, np.int64)
    head, tail = 0, 0
    for r in roots:
        if not visited[r]:
            visited[r] = True
            queue[tail] = r
            tail += 1
    while head < tail:
        v = queue[head]
        head += 1
        for k in range(ends_offset[v], ends_offset[v + 1]):
            half = ends_at[k]
            segment = half // 2
            if upstream[segment] >= 0:
                continue
            upstream[segment] = v
            parent[segment] = came_by[v]
            generation[segment] = 0 if came_by[v] < 0 else generation[came_by[v]] + 1
            w = segment_nodes[segment, 1 - half % 2]
            if not visited[w]:
                visited[w] = True
                came_by[w] = segment
                queue[tail] = w
                tail += 1
