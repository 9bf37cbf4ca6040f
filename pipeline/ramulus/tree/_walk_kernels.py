"""Kernels that walk the graph: bridges, and the segment that each node is reached by."""

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
def walk(segment_nodes, ends_at, ends_offset, roots, upstream, entered):
    """Breadth first from the roots: upstream node of segments, segment into each node."""
    n_nodes = len(entered)
    queue = np.empty(n_nodes, np.int64)
    visited = np.zeros(n_nodes, np.bool_)
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
            w = segment_nodes[segment, 1 - half % 2]
            if not visited[w]:
                visited[w] = True
                entered[w] = segment
                queue[tail] = w
                tail += 1


@numba.njit(cache=True, nogil=True)
def walk_downstream(segment_nodes, ends_at, ends_offset, roots, upstream, size, entered):
    """Visit nodes once all that bring to them are visited (Kahn 1962, Commun ACM 5:558).

    A node is entered by the segment of greatest size from a node visited before it, so that no ring
    of parents can arise. Where rounding or a second source leaves no node ready, the one seen
    earliest is taken.
    """
    n_nodes = len(entered)
    waiting = np.zeros(n_nodes, np.int64)
    for s in range(len(upstream)):
        a, b = segment_nodes[s]
        if a != b:
            waiting[a + b - upstream[s]] += 1
    is_root = np.zeros(n_nodes, np.bool_)
    visited, seen = np.zeros(n_nodes, np.bool_), np.zeros(n_nodes, np.bool_)
    ready, found = np.empty(2 * n_nodes, np.int64), np.empty(n_nodes, np.int64)
    ready_head, ready_tail, found_head, found_tail = 0, 0, 0, 0
    for r in roots:
        is_root[r] = True
        ready[ready_tail] = r
        ready_tail += 1
    while ready_head < ready_tail or found_head < found_tail:
        if ready_head < ready_tail:
            v = ready[ready_head]
            ready_head += 1
        else:
            v = found[found_head]
            found_head += 1
        if visited[v]:
            continue
        visited[v] = True
        best = -1.0
        for k in range(ends_offset[v], ends_offset[v + 1]):
            half = ends_at[k]
            s = half // 2
            w = segment_nodes[s, 1 - half % 2]
            if w == v:
                continue
            if visited[w]:
                if upstream[s] == w and size[s] > best and not is_root[v]:
                    best = size[s]
                    entered[v] = s
                continue
            if upstream[s] == v:
                waiting[w] -= 1
                if waiting[w] == 0:
                    ready[ready_tail] = w
                    ready_tail += 1
            if not seen[w]:
                seen[w] = True
                found[found_tail] = w
                found_tail += 1
