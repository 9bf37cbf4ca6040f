"""Kernel of `clearance`: the smallest gap between two sets of centreline points."""

import numba
import numpy as np


@numba.njit(cache=True, nogil=True)
def smallest_gap(points, radius, arc, others, other_radius, slope, enough):
    """Return the smallest of: distance less both radii, each pair of points taken.

    With `slope` > 0 the two lines share a node, from which `arc` runs: a pair that is apart by at
    least slope * arc stands for a gap of `enough`, since lines part gradually at a junction. The
    search ends at the first gap below `enough`.
    """
    smallest = np.inf
    for i in range(len(points)):
        for j in range(len(others)):
            square = 0.0
            for k in range(3):
                square += (points[i, k] - others[j, k]) ** 2
            reach = radius[i] + other_radius[j] + enough
            if square >= reach * reach:
                continue
            distance = np.sqrt(square)
            if slope > 0.0 and distance >= slope * arc[i]:
                continue
            gap = distance - radius[i] - other_radius[j]
            smallest = min(smallest, gap)
            if smallest < enough:
                return smallest
    return smallest
