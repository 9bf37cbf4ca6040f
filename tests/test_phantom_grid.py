"""The grid of judging phantoms: seeds apart, every network as its condition asks."""

import numba
import pytest
from phantom_grid import CONDITIONS, HELD_OUT, TUNING
from scoring import loops

from ramulus.phantom.grow import grow
from ramulus.phantom.lattice import weave
from ramulus.phantom.paths import segments_keep_clear


def test_held_out_phantoms_are_many_and_none_is_for_tuning():
    assert len(HELD_OUT) >= 60
    assert len(set(HELD_OUT)) == len(HELD_OUT)
    assert not set(HELD_OUT) & set(TUNING)
    assert {name for name, _ in HELD_OUT} == set(CONDITIONS)


def test_conditions_span_the_stated_ranges():
    conditions = CONDITIONS.values()
    assert {c.ratio for c in conditions} == {1, 3, 5}
    assert {c.exponent for c in conditions if c.kind == "tree"} == {2.3, 2.7, 3.0}
    assert (min(c.snr for c in conditions), max(c.snr for c in conditions)) == (4, 12)
    assert {min(c.sigma_voxels) for c in conditions} >= {0.5, 1.0, 1.5}
    assert {(c.kind, c.hard) for c in conditions} == {
        (kind, hard) for kind in ("tree", "loops") for hard in (True, False)
    }


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="whole networks take minutes without the JIT")
@pytest.mark.parametrize("name", ["tree-clean", "tree-hard-3to1", "loops-clean", "loops-hard-3to1"])
def test_networks_keep_their_clearance_and_radii(name):
    condition = CONDITIONS[name]
    settings = condition.settings
    make, shape_of_it = (
        (grow, settings.tree) if condition.kind == "tree" else (weave, settings.lattice)
    )
    graph = make(shape_of_it, shape=settings.shape, spacing_um=settings.spacing_um, seed=1)
    assert segments_keep_clear(graph, clearance_um=shape_of_it.clearance_um, step_um=0).all()
    assert graph.point_radius_um.min() >= condition.min_radius_um
    assert (loops(graph) > 3) == (condition.kind == "loops")
