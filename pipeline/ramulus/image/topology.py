"""Betti numbers of a mask: how many parts, loops and cavities it has."""

from dataclasses import dataclass
from functools import reduce
from itertools import product

import numpy as np

from .._checks import checked_volume

__all__ = ["Betti", "betti_numbers", "euler_number"]


@dataclass(frozen=True, slots=True)
class Betti:
    """The topology of a set of voxels, neighbours being those that share a corner.

    Parameters
    ----------
    components : int
        26-connected parts.
    loops : int
        Independent loops (tunnels).
    cavities : int
        6-connected pockets of background that are closed off from the outside.
    """

    components: int
    loops: int
    cavities: int


def betti_numbers(inside: np.ndarray) -> Betti:
    """Count parts, loops and cavities; what lies beyond the volume's faces is background.

    Parameters
    ----------
    inside : (z, y, x) bool array
        The set of voxels.

    Returns
    -------
    Betti
        The loops follow from the Euler number: components - loops + cavities.

    Raises
    ------
    UnusableInputError
        If `inside` is not a 3-D bool array.

    Examples
    --------
    >>> ring = np.zeros((3, 5, 5), dtype=bool)
    >>> ring[1, 1:4, 1:4] = True
    >>> ring[1, 2, 2] = False
    >>> betti_numbers(ring)
    Betti(components=1, loops=1, cavities=0)
    """
    import cc3d  # noqa: PLC0415 - a tenth of a second that few runs need

    inside = checked_volume("inside", inside, dtype=np.bool_)
    _, components = cc3d.connected_components(inside, connectivity=26, return_N=True)
    around = ~np.pad(inside, 1)
    _, pockets = cc3d.connected_components(around, connectivity=6, return_N=True)
    cavities = int(pockets) - 1
    return Betti(int(components), int(components) + cavities - euler_number(inside), cavities)


def euler_number(inside: np.ndarray) -> int:
    """Return the Euler number of the union of the voxels, taken as closed cubes.

    It is the number of corners less edges plus faces less cubes, each counted once; cubes that
    touch at a corner are joined, which is 26-connectivity.

    Parameters
    ----------
    inside : (z, y, x) bool array
        The set of voxels.

    Returns
    -------
    int
        components - loops + cavities.

    Examples
    --------
    >>> euler_number(np.ones((2, 3, 4), dtype=bool))
    1
    """
    padded = np.pad(checked_volume("inside", inside, dtype=np.bool_), 1)
    total = 0
    for spanned in product((False, True), repeat=3):
        # A cell that does not span an axis lies between two voxels there: it exists if either does.
        between = [axis for axis in range(3) if not spanned[axis]]
        count = int(np.count_nonzero(reduce(_either_neighbour, between, padded)))
        total += -count if sum(spanned) % 2 else count
    return total


def _either_neighbour(cells: np.ndarray, axis: int) -> np.ndarray:
    """Return, between neighbours along an axis, whether either is set."""
    along = np.moveaxis(cells, axis, 0)
    either: np.ndarray = np.moveaxis(along[1:] | along[:-1], 0, axis)
    return either
