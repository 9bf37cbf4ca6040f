"""A volume of single bits with an empty voxel all round, and the addresses of its voxels."""

from dataclasses import dataclass

import numpy as np

from ._thin_kernels import addresses_of, neighbour_lists, set_bits

__all__ = ["BitGrid"]


@dataclass(frozen=True, slots=True)
class BitGrid:
    """The layout of a padded bit volume: an address is a bit number, rising in raster order.

    Parameters
    ----------
    shape : tuple of int
        Number of voxels along z, y, x, the padding left out.
    """

    shape: tuple[int, int, int]

    @property
    def row_words(self) -> int:
        """Number of words of 32 voxels that a row takes."""
        return (self.shape[2] + 2 + 31) // 32

    @property
    def plane_words(self) -> int:
        """Number of words that a plane takes."""
        return self.row_words * (self.shape[1] + 2)

    def address(self, linear: np.ndarray) -> np.ndarray:
        """Return the addresses of voxels given by their place in the flattened volume."""
        _, ny, nx = self.shape
        addresses: np.ndarray = addresses_of(linear, ny, nx, self.row_words * 32)
        return addresses

    def index(self, address: np.ndarray) -> np.ndarray:
        """Return the (n, 3) indices z, y, x of addresses."""
        row, x = np.divmod(address, self.row_words * 32)
        z, y = np.divmod(row, self.shape[1] + 2)
        index: np.ndarray = np.stack([z - 1, y - 1, x - 1], axis=1)
        return index

    def linear(self, index: np.ndarray) -> np.ndarray:
        """Return the places in the flattened volume of (n, 3) indices."""
        _, ny, nx = self.shape
        linear: np.ndarray = (index[:, 0] * ny + index[:, 1]) * nx + index[:, 2]
        return linear

    def words(self, address: np.ndarray) -> np.ndarray:
        """Return a volume of bits (see `_thin_kernels`) in which these voxels are set."""
        words = np.zeros(self.plane_words * (self.shape[0] + 2) + 1, dtype=np.int64)
        set_bits(words, address)
        return words

    def neighbours(self, address: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Return 26-neighbour lists of voxels given by rising address: starts, and neighbours."""
        cells = [(z, y, x) for z in (-1, 0, 1) for y in (-1, 0, 1) for x in (-1, 0, 1)]
        steps = [32 * (z * self.plane_words + y * self.row_words) + x for z, y, x in cells]
        later = np.array(sorted(step for step in steps if step > 0), dtype=np.int64)
        start, neighbour = neighbour_lists(address, later)
        return start, neighbour
