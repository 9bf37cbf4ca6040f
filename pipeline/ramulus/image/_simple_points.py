"""Which voxels can be removed without changing the topology: the (26, 6) simple-point test.

A foreground voxel is simple when its foreground 26-neighbours form one 26-connected set and the
background voxels among its 18 nearest neighbours that touch it by a face form one 6-connected set
(Malandain & Bertrand 1992, ICPR 3:232-235; Bertrand & Malandain 1994, Pattern Recognit Lett
15:169-175). The neighbourhood is a number of 27 bits, bit 9 dz + 3 dy + dx with each offset counted
from 0 to 2; bit 13 is the voxel itself. Both conditions are tested by flooding within the number,
in shifts and masks, which measured as fast as a look-up in the 8 MiB table of all answers and needs
no table at start-up.
"""

from collections.abc import Sequence

import numba
import numpy as np

__all__ = ["CENTRE", "FACES", "NEAREST_18", "is_simple", "simple_table"]


_CELLS = [(z, y, x) for z in (-1, 0, 1) for y in (-1, 0, 1) for x in (-1, 0, 1)]


def _bits(wanted: Sequence[bool]) -> int:
    """Return the number whose bits are set where `wanted` holds, cell by cell."""
    return sum(1 << bit for bit, holds in enumerate(wanted) if holds)


CENTRE = 1 << 13
ALL_27 = (1 << 27) - 1
FACES = _bits([abs(z) + abs(y) + abs(x) == 1 for z, y, x in _CELLS])
NEAREST_18 = _bits([abs(z) + abs(y) + abs(x) in (1, 2) for z, y, x in _CELLS])
_NOT_FIRST_X = _bits([x >= 0 for _, _, x in _CELLS])
_NOT_LAST_X = _bits([x <= 0 for _, _, x in _CELLS])
_NOT_FIRST_Y = _bits([y >= 0 for _, y, _ in _CELLS])
_NOT_LAST_Y = _bits([y <= 0 for _, y, _ in _CELLS])


@numba.njit(cache=True, nogil=True)
def is_simple(code: int) -> bool:
    """Tell whether the voxel with this 27-bit neighbourhood is simple (its own bit is ignored)."""
    touching = ~code & FACES
    if touching == 0:
        return False
    neighbours = code & ALL_27 & ~CENTRE
    if neighbours == 0:
        return False
    return _is_one_26_set(neighbours) and _touches_one_6_set(~code & NEAREST_18, touching)


@numba.njit(cache=True, nogil=True)
def _is_one_26_set(cells: int) -> bool:
    """Flood from the lowest cell to 26-neighbours; tell whether it reaches every cell."""
    reached = cells & -cells
    while True:
        grown = reached | ((reached << 1) & _NOT_FIRST_X) | ((reached >> 1) & _NOT_LAST_X)
        grown |= ((grown << 3) & _NOT_FIRST_Y) | ((grown >> 3) & _NOT_LAST_Y)
        grown = (grown | (grown << 9) | (grown >> 9)) & cells
        if grown == cells:
            return True
        if grown == reached:
            return False
        reached = grown


@numba.njit(cache=True, nogil=True)
def _touches_one_6_set(cells: int, touching: int) -> bool:
    """Flood from one touching cell to 6-neighbours; tell whether it reaches all that touch."""
    reached = touching & -touching
    while True:
        grown = reached | ((reached << 1) & _NOT_FIRST_X) | ((reached >> 1) & _NOT_LAST_X)
        grown |= ((reached << 3) & _NOT_FIRST_Y) | ((reached >> 3) & _NOT_LAST_Y)
        grown = (grown | (reached << 9) | (reached >> 9)) & cells
        if grown & touching == touching:
            return True
        if grown == reached:
            return False
        reached = grown


@numba.njit(cache=True, nogil=True)
def simple_table(first: int, stop: int) -> np.ndarray:
    """Return whether each 26-bit neighbourhood in first..stop-1 is simple (the centre left out)."""
    simple = np.zeros(stop - first, dtype=np.bool_)
    low = CENTRE - 1
    for number in range(first, stop):
        simple[number - first] = is_simple((number & low) | ((number & ~low) << 1))
    return simple
