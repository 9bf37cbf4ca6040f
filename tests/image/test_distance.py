import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays
from scipy import ndimage as ndi

from ramulus.errors import UnusableInputError
from ramulus.image.distance import distance_um, vessel_voxels

SPACINGS = [(1.0, 1.0, 1.0), (3.0, 1.0, 1.0), (0.7, 1.3, 2.9)]


# Reference: scipy.ndimage.distance_transform_edt, which also takes centres of voxels and no faces.
@pytest.mark.parametrize("spacing_um", SPACINGS)
@pytest.mark.parametrize("fill", [0.3, 0.9, 0.995])
def test_distance_equals_scipy(spacing_um, fill):
    inside = np.random.default_rng(3).random((11, 14, 17)) < fill
    expected = ndi.distance_transform_edt(inside, sampling=spacing_um)
    np.testing.assert_allclose(distance_um(inside, spacing_um=spacing_um), expected, rtol=1e-6)


@given(arrays(np.bool_, (4, 5, 6)).filter(lambda inside: not inside.all()))
def test_distance_equals_scipy_on_any_small_mask(inside):
    expected = ndi.distance_transform_edt(inside, sampling=(2.0, 1.5, 1.0))
    np.testing.assert_allclose(distance_um(inside, spacing_um=(2.0, 1.5, 1.0)), expected, rtol=1e-6)


# Reference: the edt package (euclidean distance, black_border=False), on runs long enough for the
# envelope of parabolas to take over from the search.
def test_distance_equals_edt_package_in_a_wide_vessel():
    edt = pytest.importorskip("edt")
    z, y, x = np.ogrid[:40, :70, :9]
    inside = (z - 20.0) ** 2 / 300 + (y - 33.0) ** 2 / 1000 + 0 * x < 1
    expected = edt.edt(inside, anisotropy=(1.0, 1.2, 0.8), black_border=False)
    found = distance_um(inside, spacing_um=(1.0, 1.2, 0.8))
    np.testing.assert_allclose(found, expected, rtol=1e-6)


@given(st.floats(0.1, 10))
def test_distance_scales_with_the_voxel(scale):
    inside = np.random.default_rng(5).random((5, 6, 7)) < 0.8
    one = distance_um(inside, spacing_um=(2.0, 1.0, 1.0))
    grown = distance_um(inside, spacing_um=(2.0 * scale, scale, scale))
    np.testing.assert_allclose(grown, scale * one, rtol=1e-5)


def test_faces_of_the_volume_are_not_background():
    inside = np.zeros((9, 9, 20), dtype=bool)
    inside[3:6, 3:6, :] = True
    assert distance_um(inside, spacing_um=(1, 1, 1))[4, 4].tolist() == [2.0] * 20


def test_background_is_zero_and_no_background_is_infinite():
    assert not distance_um(np.zeros((2, 3, 4), dtype=bool), spacing_um=(1, 1, 1)).any()
    assert np.isinf(distance_um(np.ones((2, 3, 4), dtype=bool), spacing_um=(1, 1, 1))).all()


def test_voxels_come_in_raster_order_with_the_maps_values():
    inside = np.random.default_rng(1).random((6, 5, 4)) < 0.5
    voxels = vessel_voxels(inside, spacing_um=(1, 2, 3))
    np.testing.assert_array_equal(voxels.linear, np.flatnonzero(inside))
    np.testing.assert_array_equal(
        voxels.distance_um, distance_um(inside, spacing_um=(1, 2, 3))[inside]
    )


def test_a_mask_that_is_not_bool_is_refused_by_name():
    with pytest.raises(UnusableInputError, match=r"inside.*uint8"):
        distance_um(np.zeros((3, 3, 3), dtype=np.uint8), spacing_um=(1, 1, 1))
