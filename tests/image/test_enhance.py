"""Tube enhancement: against general-purpose libraries and the closed form at a tube's axis."""

import math

import numpy as np
import pytest

from ramulus.errors import UnusableInputError
from ramulus.image import _enhance_kernels as kernels
from ramulus.image.enhance import EnhanceSettings, enhance, tube_response

UM = (1.0, 1.0, 1.0)


def tube(radius, shape=(21, 41, 41), contrast=100.0):
    y, x = np.mgrid[: shape[1], : shape[2]]
    # Partial volume across one voxel at the wall.
    distance = np.hypot(y - shape[1] // 2, x - shape[2] // 2)
    plane = np.clip(radius + 0.5 - distance, 0, 1) * contrast
    return np.broadcast_to(plane, shape).astype(np.float32).copy()


def test_eigenvalues_equal_numpys():
    rng = np.random.default_rng(3)
    for _ in range(50):
        a = rng.normal(size=(3, 3))
        a += a.T
        expected = sorted(np.linalg.eigvalsh(a), key=abs)
        found = kernels.eigenvalues_by_magnitude(
            a[0, 0], a[1, 1], a[2, 2], a[0, 1], a[0, 2], a[1, 2]
        )
        np.testing.assert_allclose(found, expected, atol=1e-9)


@pytest.mark.parametrize("radius", [3.0, 5.0])
def test_contrast_at_the_axis_follows_the_closed_form(radius):
    # sigma**2 |second derivative| of a disc blurred with sigma, at its centre: A u exp(-u),
    # u = radius**2 / (2 sigma**2), greatest (A / e) at sigma = radius / sqrt(2).
    sigma = radius / math.sqrt(2)
    found = tube_response(tube(radius), spacing_um=UM, sigmas_um=(sigma,), filter="contrast")
    assert found[10, 20, 20] == pytest.approx(100 / math.e, rel=0.05)


def test_frangi_peaks_where_scikit_images_does():
    # Reference: scikit-image's hessian_matrix and eigenvalues, put into Frangi's formula (1998).
    from skimage.feature import hessian_matrix, hessian_matrix_eigvals

    image, sigma = tube(3.0, shape=(15, 31, 31)), 2.0
    h = hessian_matrix(image, sigma, mode="reflect", order="rc", use_gaussian_derivatives=True)
    values = sigma**2 * hessian_matrix_eigvals(h)
    l1, l2, l3 = np.take_along_axis(values, np.argsort(np.abs(values), axis=0), axis=0)
    c = 0.5 * np.sqrt((values**2).sum(0)).max()
    with np.errstate(divide="ignore", invalid="ignore"):
        ra, rb2 = l2 / l3, l1**2 / np.abs(l2 * l3)
    s2 = l1**2 + l2**2 + l3**2
    expected = np.where(
        (l2 < 0) & (l3 < 0),
        (1 - np.exp(-2 * ra**2)) * np.exp(-2 * rb2) * (1 - np.exp(-s2 / (2 * c * c))), 0,
    )  # fmt: skip
    found = tube_response(image, spacing_um=UM, sigmas_um=(sigma,), filter="frangi")
    inner = (slice(5, 10), slice(8, 23), slice(8, 23))
    np.testing.assert_allclose(found[inner], np.nan_to_num(expected[inner]), atol=0.06)


def test_objectness_of_simpleitk_agrees_on_the_axis_and_outside():
    itk = pytest.importorskip("SimpleITK")
    # Reference: SimpleITK's ObjectnessMeasure of dimension 1 on its own Hessian smoothing; both
    # measures are scaled to their value on the axis.
    image, sigma = tube(3.0, shape=(15, 31, 31)), 2.0
    smooth = itk.SmoothingRecursiveGaussian(itk.GetImageFromArray(image), sigma)
    other = itk.GetArrayFromImage(
        itk.ObjectnessMeasure(smooth, objectDimension=1, brightObject=True)
    )
    found = tube_response(image, spacing_um=UM, sigmas_um=(sigma,), filter="frangi")
    mine, theirs = found[7, 15] / found[7, 15, 15], other[7, 15] / other[7, 15, 15]
    assert np.argmax(mine) == np.argmax(theirs) == 15
    assert (np.abs(np.where(np.abs(np.arange(31) - 15) > 8, mine, 0)) < 0.02).all()
    assert (np.abs(np.where(np.abs(np.arange(31) - 15) > 8, theirs, 0)) < 0.05).all()


def test_a_scale_answers_the_same_whatever_the_strips():
    rng = np.random.default_rng(5)
    image = rng.normal(size=(20, 70, 24)).astype(np.float32)
    taps = np.array([0.25, 0.5, 0.25], np.float32)
    whole, parts = (np.zeros(image.shape, np.float32) for _ in range(2))
    best = np.zeros(image.shape, np.uint8)
    common = (taps, taps, taps, np.ones(3), 1.0, 0.0, kernels.CONTRAST, 0.0, 0)
    kernels.respond_strip(image, np.array([0, 20, 0, 70]), *common, whole, best)
    for z0, z1 in ((0, 7), (7, 20)):
        for y0, y1 in ((0, 33), (33, 70)):
            kernels.respond_strip(image, np.array([z0, z1, y0, y1]), *common, parts, best)
    np.testing.assert_array_equal(whole, parts)


def test_scales_cover_the_radii_and_large_ones_run_on_smaller_levels():
    found = enhance(
        tube(4.0), spacing_um=UM, settings=EnhanceSettings(radius_min_um=1.5, radius_max_um=9.0)
    )
    sigmas = [s.sigma_um for s in found.scales]
    assert sigmas[0] == pytest.approx(1.5 / math.sqrt(2))
    assert sigmas[-1] >= 9.0 / math.sqrt(2) / math.sqrt(2)
    assert found.scales[-1].level > found.scales[0].level


def test_empty_scales_are_refused_with_the_key():
    with pytest.raises(UnusableInputError, match=r"enhance\.sigmas_um"):
        enhance(tube(3.0), spacing_um=UM, settings=EnhanceSettings(sigmas_um=()))
