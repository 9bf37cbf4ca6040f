"""Murray's cost: its least value, where it lies, and the excess over it."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import minimize_scalar

from ramulus.flow.cost import CostSettings, murray_cost

# Source: Murray 1926, PNAS 12:207 (recalled from memory; the formulas derived): cost
# 8 mu L Q^2 / (pi a^4) + K pi a^2 L, least at a^6 = 16 mu Q^2 / (pi^2 K).
K = CostSettings(metabolic_w_per_m3=642.857)


def cost(flow, radius, length, *, mu=3.5, settings=K):
    values = (np.atleast_1d(np.asarray(v, dtype=float)) for v in (flow, radius, length))
    flow, radius, length = np.broadcast_arrays(*values)
    return murray_cost(flow, radius, length, np.full(len(flow), mu), settings=settings)


def test_the_worked_example():
    # 3.5 mPa s and a shear stress of 1.5 Pa give K = 642.857 W/m3; a = 50 um carries
    # 4.20749e7 um3/s, and 500 um cost 3.78674e-9 W (derived).
    assert pytest.approx(642.857, abs=1e-3) == 1.5**2 / 3.5e-3
    found = cost(4.20749e7, 50, 500)
    assert found.optimal_radius_um[0] == pytest.approx(50, rel=1e-5)
    assert found.cost_w[0] == pytest.approx(3.78674e-9, rel=1e-5)
    assert found.least_w[0] == pytest.approx(3.78674e-9, rel=1e-5)
    assert found.excess == pytest.approx(0, abs=1e-9)


flows, radii = st.floats(1e2, 1e9), st.floats(1, 500)


@given(flows, radii, st.floats(1, 2000))
def test_no_radius_costs_less_than_the_least(flow, radius, length):
    found = cost(flow, radius, length)
    assert found.cost_w[0] >= found.least_w[0] * (1 - 1e-12)
    best = cost(flow, found.optimal_radius_um[0], length)
    assert best.cost_w[0] == pytest.approx(found.least_w[0], rel=1e-9)
    # There the viscous part is half of the upkeep, and the wall shear stress is sqrt(K mu).
    a, q = found.optimal_radius_um[0] * 1e-6, flow * 1e-18
    upkeep = 642.857 * np.pi * a**2 * length * 1e-6
    assert found.least_w[0] == pytest.approx(1.5 * upkeep, rel=1e-9)
    assert 4 * 3.5e-3 * q / (np.pi * a**3) == pytest.approx(np.sqrt(642.857 * 3.5e-3), rel=1e-9)


def test_a_search_by_scipy_finds_the_same_radius():
    found = minimize_scalar(lambda r: cost(3e6, r, 100).cost_w[0] * 1e12, bounds=(1, 200),
                            method="bounded", options={"xatol": 1e-6})  # fmt: skip
    assert found.x == pytest.approx(cost(3e6, 10, 100).optimal_radius_um[0], rel=1e-5)


@given(st.floats(0.3, 1), radii)
def test_the_optimal_radii_at_a_junction_obey_the_cube_law(share, flow):
    found = cost([flow, share * flow, (1 - share) * flow + 1e-9], 10, 10)
    a0, a1, a2 = found.optimal_radius_um
    assert a1**3 + a2**3 == pytest.approx(a0**3, rel=1e-6)


@given(flows, radii)
def test_the_direction_of_flow_does_not_matter(flow, radius):
    assert cost(-flow, radius, 10).cost_w[0] == cost(flow, radius, 10).cost_w[0]


def test_without_a_constant_the_one_of_least_excess_is_taken():
    random = np.random.default_rng(4)
    flow, radius = random.uniform(1e4, 1e6, 9), random.uniform(5, 20, 9)
    own = cost(flow, radius, 100, settings=CostSettings())
    for factor in (0.5, 0.9, 0.99, 1.01, 1.1, 2.0):
        k = CostSettings(metabolic_w_per_m3=factor * own.metabolic_w_per_m3)
        assert cost(flow, radius, 100, settings=k).excess > own.excess
    # Flows as cubed radii are optimal under one constant, which is then found.
    optimal = cost(7.0 * radius**3, radius, 100, settings=CostSettings())
    assert optimal.excess == pytest.approx(0, abs=1e-9)
    np.testing.assert_allclose(optimal.optimal_radius_um, radius, rtol=1e-9)


def test_vessels_without_flow_or_radius_are_left_out():
    found = cost([1e5, 0.0, np.nan, 1e5], [10.0, 10.0, 10.0, np.nan], 100)
    assert np.isfinite(found.cost_w).tolist() == [True, False, False, False]
    assert found.excess == pytest.approx(cost(1e5, 10, 100).excess)


def test_a_network_without_flow_has_no_excess():
    assert np.isnan(cost([0.0], [5.0], 10).excess)
    assert np.isnan(cost([0.0], [5.0], 10, settings=CostSettings()).excess)
