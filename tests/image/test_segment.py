"""Segmentation: local half levels, one threshold, wall-stained lumens, refusals."""

import numpy as np
import pytest

from ramulus.errors import UnusableInputError
from ramulus.image.background import BackgroundSettings, noise_sd
from ramulus.image.enhance import EnhanceSettings, enhance
from ramulus.image.segment import SegmentSettings, segment
from ramulus.image.threshold import closed_lumens, threshold_mask

UM = (1.0, 1.0, 1.0)


def two_tubes(noise, seed=1):
    """A bright wide tube beside a dim thin one, along x."""
    z, y, x = np.mgrid[:40, :48, :40]
    image = 20 + 100.0 * (np.hypot(z - 14, y - 14) < 6) + 40.0 * (np.hypot(z - 28, y - 34) < 2.5)
    rng = np.random.default_rng(seed)
    return (image + rng.normal(0, noise, image.shape)).astype(np.float32)


def found(image, **settings):
    tubes = enhance(image, spacing_um=UM, settings=EnhanceSettings())
    return segment(tubes, settings=SegmentSettings(**settings), background=BackgroundSettings())


def test_both_tubes_are_found_at_their_own_level():
    inside = found(two_tubes(4.0)).mask.inside
    z, y, _ = np.mgrid[:40, :48, :40]
    wide, thin = np.hypot(z - 14, y - 14), np.hypot(z - 28, y - 34)
    assert inside[(wide < 5) | (thin < 1.5)].mean() > 0.99
    assert inside[(wide > 8) & (thin > 5)].mean() < 0.001


def test_noise_alone_is_refused():
    rng = np.random.default_rng(2)
    with pytest.raises(UnusableInputError, match="no vessel found"):
        found(rng.normal(100, 10, (40, 40, 40)).astype(np.float32))


@pytest.mark.parametrize("method", ["otsu", "li", "triangle", "local_mean"])
def test_one_threshold_finds_the_bright_tube(method):
    inside = found(two_tubes(4.0), method=method).mask.inside
    assert inside[12:17, 12:17, 5:35].all()


def test_fixed_and_hysteresis_use_the_values_given():
    image = two_tubes(0.0)
    fixed = threshold_mask(image, method="fixed", threshold=90.0)
    both = threshold_mask(image, method="hysteresis", threshold=90.0, threshold_low=30.0)
    assert fixed[14, 14, 20]
    assert not fixed[28, 34, 20]
    assert both[14, 14, 20]
    assert not both[28, 34, 20]  # no voxel of the dim tube passes the high threshold


def test_a_missing_threshold_is_named():
    with pytest.raises(UnusableInputError, match=r"segment\.threshold"):
        threshold_mask(two_tubes(0.0), method="fixed")


def test_a_stained_wall_is_closed():
    z, y, x = np.mgrid[:30, :30, :30]
    distance = np.hypot(z - 15, y - 15)
    wall = (distance < 8) & (distance > 6)
    np.testing.assert_array_equal(closed_lumens(wall), distance < 8)


def test_noise_is_measured_beside_vessels():
    assert noise_sd(two_tubes(4.0)) == pytest.approx(4.0, rel=0.05)
