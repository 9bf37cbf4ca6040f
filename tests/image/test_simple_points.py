import numba
import numpy as np
import pytest
from scipy import ndimage as ndi

from ramulus.image._simple_points import CENTRE, is_simple, simple_table

_ALL_26 = np.ones((3, 3, 3), dtype=int)
_FACES_6 = ndi.generate_binary_structure(3, 1)
_NEAREST_18 = ndi.generate_binary_structure(3, 2)


def plain_is_simple(code):
    """The definition, with scipy's labelling of the cube of 27 voxels."""
    cube = np.array([code >> bit & 1 for bit in range(27)], dtype=bool).reshape(3, 3, 3)
    cube[1, 1, 1] = False
    _, parts = ndi.label(cube, structure=_ALL_26)
    gaps = ~cube & _NEAREST_18
    gaps[1, 1, 1] = False
    labels, _ = ndi.label(gaps, structure=_FACES_6)
    touching = labels[_FACES_6 & gaps]
    return parts == 1 and len(np.unique(touching)) == 1


@pytest.mark.parametrize("fill", [0.1, 0.3, 0.5, 0.7, 0.9])
def test_test_equals_its_definition(fill):
    rng = np.random.default_rng(11)
    for cube in rng.random((300, 27)) < fill:
        code = int((cube << np.arange(27)).sum())
        assert is_simple(code) == plain_is_simple(code)


def test_own_bit_does_not_count():
    rng = np.random.default_rng(2)
    for code in rng.integers(0, 1 << 27, 200).tolist():
        assert is_simple(code | CENTRE) == is_simple(code & ~CENTRE)


@pytest.mark.parametrize(
    ("neighbours", "simple"),
    [
        ([], False),  # an isolated voxel
        ([(0, 0, -1)], True),  # the end of a line
        ([(0, 0, -1), (0, 0, 1)], False),  # inside a line
        ([(0, 0, -1), (0, 1, 0)], True),  # a corner whose two neighbours touch
    ],
)
def test_plain_cases(neighbours, simple):
    code = sum(1 << (9 * (z + 1) + 3 * (y + 1) + x + 1) for z, y, x in neighbours)
    assert is_simple(code) == simple


# Source: the number of simple configurations of 26 neighbours for (26, 6) connectivity as known in
# digital topology, 25,985,144 of 67,108,864; recalled from memory.
@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="67 million tests need the compiled kernel")
def test_count_of_simple_neighbourhoods():
    step = 1 << 22
    found = sum(int(simple_table(first, first + step).sum()) for first in range(0, 1 << 26, step))
    assert found == 25_985_144
