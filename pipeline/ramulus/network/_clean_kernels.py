"""Kernel of the cleaning: chains of segments through nodes of degree two."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def chains(segment_nodes, degree, ends_at, ends_offset, chain, flip, offsets, chain_nodes):
    """Order segments into chains that run through degree-2 nodes; returns the number of chains.

    ends_at lists, node by node, 2 * segment + side. A closed ring without any other node starts at
    its first segment's first node.
    """
    m = len(segment_nodes)
    done = np.zeros(m, np.bool_)
    n_chain, top = 0, 0
    offsets[0] = 0
    for turn in range(2):
        for s in range(m):
            if done[s]:
                continue
            side = 0
            if turn == 0:
                a, b = segment_nodes[s, 0], segment_nodes[s, 1]
                if degree[a] == 2 and degree[b] == 2:
                    continue
                side = 0 if degree[a] != 2 else 1
            here, entry = s, side
            chain_nodes[n_chain, 0] = segment_nodes[s, side]
            while True:
                done[here] = True
                chain[top], flip[top] = here, entry == 1
                top += 1
                leave = segment_nodes[here, 1 - entry]
                chain_nodes[n_chain, 1] = leave
                if degree[leave] != 2:
                    break
                follow = -1
                for k in range(ends_offset[leave], ends_offset[leave + 1]):
                    if ends_at[k] != 2 * here + (1 - entry):
                        follow = ends_at[k]
                if follow < 0 or done[follow // 2]:
                    break
                here, entry = follow // 2, follow % 2
            n_chain += 1
            offsets[n_chain] = top
    return n_chain
