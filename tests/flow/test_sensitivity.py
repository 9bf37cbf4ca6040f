"""Resistance shares as derivatives, and what radius errors make of the resistance."""

import numpy as np
import pytest
from flow_cases import between, connected, solved, wires
from hypothesis import given, settings
from hypothesis import strategies as st
from tree_cases import graph_of, worked_tree

from ramulus.flow.hindrance import segment_hindrance_per_um3
from ramulus.flow.sensitivity import (
    effective_segments,
    log_resistance_common,
    log_resistance_sd,
    monte_carlo_log_resistance,
)

few = settings(max_examples=30, deadline=None)


def log_resistance(graph, inlet, outlets, hindrance):
    found = solved(graph, inlet, outlets, hindrance_per_um3=hindrance)
    return np.log(found.network_resistance_pa_s_per_m3)


@few
@given(connected(), st.data())
def test_shares_are_the_derivatives_of_ln_r(case, data):
    # Cohn 1950, Proc IRE 38:188: dR/dR_e = (i_e / i)^2, so d ln R / d ln R_e is the share, and
    # d ln R / d ln r_e is -4 times it; against central finite differences.
    graph, inlet, outlets = case
    hindrance = segment_hindrance_per_um3(graph)
    share = solved(graph, inlet, outlets).resistance_share
    k = data.draw(st.integers(0, graph.n_segments - 1))
    step = 1e-4
    factor = np.ones(graph.n_segments)
    factor[k] = np.exp(step)
    up = log_resistance(graph, inlet, outlets, hindrance * factor**-4)
    down = log_resistance(graph, inlet, outlets, hindrance * factor**4)
    assert (up - down) / (2 * step) == pytest.approx(-4 * share[k], rel=1e-4, abs=1e-6)


@few
@given(connected(), st.floats(-0.3, 0.3))
def test_one_error_of_all_radii_shifts_ln_r_by_minus_four_times_it(case, error):
    graph, inlet, outlets = case
    hindrance = segment_hindrance_per_um3(graph)
    before = log_resistance(graph, inlet, outlets, hindrance)
    after = log_resistance(graph, inlet, outlets, hindrance * np.exp(-4 * error))
    share = solved(graph, inlet, outlets).resistance_share
    common = log_resistance_common(share, np.full(graph.n_segments, abs(error)))
    assert abs(after - before) == pytest.approx(common, rel=1e-6, abs=1e-9)


def test_one_vessel_decides_alone_and_equal_ones_together():
    assert effective_segments(np.array([1.0])) == pytest.approx(1.0)
    assert effective_segments(np.array([0.25] * 4 + [0.0, np.nan])) == pytest.approx(4.0)
    assert np.isnan(effective_segments(np.array([np.nan, 0.0])))


def test_the_worked_tree_is_decided_by_about_three_segments():
    # Source: the reference tables' README, derived: effective segments 2.95203.
    tree = worked_tree()
    graph = graph_of(tree["parent"].to_numpy(), tree["diameter_um"], tree["length_um"])
    outlets = np.flatnonzero(graph.node_degree() == 1)[1:]
    share = solved(graph, 0, outlets).resistance_share
    assert effective_segments(share) == pytest.approx(2.95203, abs=1e-5)


def test_independent_errors_add_as_squares():
    share, error = np.array([0.6, 0.4]), np.array([0.1, 0.2])
    assert log_resistance_sd(share, error) == pytest.approx(4 * np.hypot(0.06, 0.08))
    assert log_resistance_common(share, error) == pytest.approx(4 * 0.14)
    assert log_resistance_sd(share, np.array([0.1, np.nan])) == pytest.approx(0.24)


def drawn(graph, conditions, error, **more):
    return monte_carlo_log_resistance(graph, conditions, relative_se=error, **more)


def test_draws_spread_as_the_first_order_says():
    graph = wires(4, [(0, 1), (1, 2), (1, 3), (2, 3)], radius_um=[9.0, 5.0, 6.0, 4.0])
    conditions = between(0, 3)
    share = solved(graph, 0, 3).resistance_share
    error = np.array([0.02, 0.01, 0.03, 0.02])
    values = drawn(graph, conditions, error, draws=400, seed=2)
    # A sample SD of 400 draws is within 12 % at four standard errors (one is 1 / sqrt(800)).
    assert np.std(values) == pytest.approx(log_resistance_sd(share, error), rel=0.15)


def test_draws_without_errors_are_the_value_itself_and_the_same_seed_gives_the_same():
    graph = wires(3, [(0, 1), (1, 2)], radius_um=5.0)
    conditions = between(0, 2)
    still = drawn(graph, conditions, np.zeros(2), draws=3, seed=1)
    unit = np.log(solved(graph, 0, 2).network_resistance_pa_s_per_m3)
    np.testing.assert_allclose(still, unit, rtol=1e-12)
    error = np.array([0.1, np.nan])
    first, again = (drawn(graph, conditions, error, draws=5, seed=7) for _ in range(2))
    assert first.tolist() == again.tolist()
    assert len(set(first)) == 5
