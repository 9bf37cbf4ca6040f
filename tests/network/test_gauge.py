"""Gauging: tubes of exact size at sub-voxel offsets and any direction."""

import numpy as np
import pytest

from ramulus.network.gauge import blurred_disc_table


def test_table_holds_the_blurred_disc():
    # At the centre of a disc of radius R blurred with SD 1: 1 - exp(-R**2 / 2).
    table = blurred_disc_table()[0]
    for row in (10, 20, 40):
        radius = 0.1 * row
        column = round((6.0 - radius) / 0.05)
        assert table[row, column] == pytest.approx(1 - np.exp(-(radius**2) / 2), abs=1e-6)


def test_an_edge_far_from_the_centre_is_half():
    table = blurred_disc_table()[0]
    # The half level of a wide disc lies 1 / (2 R) inside its wall.
    shift = np.interp(0.5, table[200, ::-1], np.arange(-6, 6.001, 0.05)[::-1])
    assert shift == pytest.approx(-1 / 40, abs=2e-3)
