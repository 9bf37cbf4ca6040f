import numpy as np
import pytest
from hypothesis import given
from hypothesis.extra.numpy import arrays

from ramulus.errors import UnusableInputError
from ramulus.image.topology import Betti, betti_numbers, euler_number


def ball(radius, *, hollow=0.0):
    z, y, x = np.ogrid[-radius - 1 : radius + 2, -radius - 1 : radius + 2, -radius - 1 : radius + 2]
    square = z * z + y * y + x * x
    return (square <= radius**2) & (square >= hollow**2)


def torus():
    z, y, x = np.ogrid[-3:4, -10:11, -10:11]
    return (np.hypot(y, x) - 7) ** 2 + z**2 <= 4


@pytest.mark.parametrize(
    ("inside", "expected"),
    [
        (np.zeros((3, 3, 3), dtype=bool), Betti(0, 0, 0)),
        (np.ones((3, 3, 3), dtype=bool), Betti(1, 0, 0)),
        (ball(5), Betti(1, 0, 0)),
        (ball(6, hollow=3), Betti(1, 0, 1)),
        (torus(), Betti(1, 1, 0)),
        (np.concatenate([np.pad(torus(), 2), np.pad(torus(), 2)]), Betti(2, 2, 0)),
    ],
)
def test_known_bodies(inside, expected):
    assert betti_numbers(inside) == expected


# Reference: skimage.measure.euler_number with connectivity 3 (26 neighbours).
@given(arrays(np.bool_, (4, 4, 5)))
def test_euler_number_equals_scikit_image(inside):
    from skimage.measure import euler_number as reference

    assert euler_number(inside) == reference(inside.astype(np.int64), 3)


def test_a_mask_that_is_not_bool_is_refused():
    with pytest.raises(UnusableInputError, match="float64"):
        betti_numbers(np.zeros((3, 3, 3)))
