"""Blind ends: the half level of a rounded, blurred end against a drawing of it."""

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter

from ramulus.network.tips import half_level_radii


def half_level_of_a_drawn_end(radius, sigma):
    """Radii beyond the centre at which the mean over the inner half falls to half of its height."""
    z = np.arange(-6 * radius, 4 * radius)
    y = np.arange(-4 * radius, 4 * radius + 1)
    across = y[:, None] ** 2 + y[None, :] ** 2
    vessel = (across[None] < radius**2) & (z[:, None, None] < 0)
    vessel |= across[None] + z[:, None, None] ** 2 < radius**2
    image = gaussian_filter(vessel.astype(np.float32), sigma, mode="nearest")
    c, k = 4 * radius, round(0.4 * radius)
    line = sum(image[:, c + a, c + b] for a, b in ((0, 0), (k, 0), (-k, 0), (0, k), (0, -k)))
    half = 0.5 * line[2 * radius]
    first = int(np.flatnonzero(line < half)[0])
    return (z[first - 1] + (line[first - 1] - half) / (line[first - 1] - line[first])) / radius


@pytest.mark.parametrize("blur_radii", [0.2, 0.5, 0.8])
def test_the_table_holds_for_a_drawn_end(blur_radii):
    # One cell of ten a radius: the drawing's own error is some hundredths of a radius.
    assert half_level_radii(blur_radii) == pytest.approx(
        half_level_of_a_drawn_end(10, 10 * blur_radii), abs=0.03
    )


def test_the_limits_are_the_caps_depth_and_its_equal_volume():
    # Mean depth of a unit cap at the centre and four places 0.4 off the axis; 2/3: a half ball's
    # volume over its base.
    assert half_level_radii(0.0) == pytest.approx((1 + 4 * np.sqrt(1 - 0.16)) / 5, abs=1e-3)
    assert half_level_radii(100.0) == pytest.approx(2 / 3, abs=1e-3)
