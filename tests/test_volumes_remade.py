"""The shipped test volumes are what their command makes, and hold what their README says."""

import importlib.util
from pathlib import Path

import numba
import numpy as np
import pytest
import tifffile

from ramulus.phantom.phantom import make_phantom
from ramulus.phantom.truth import read_truth, truth_of

FOLDER = Path(__file__).parents[1] / "test_volumes"
_spec = importlib.util.spec_from_file_location("make_test_volumes", FOLDER / "make.py")
make = importlib.util.module_from_spec(_spec)
_spec.loader.exec_module(make)


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="whole stacks take minutes without the JIT")
@pytest.mark.parametrize("name", list(make.VOLUMES))
def test_the_command_makes_the_shipped_volume_again(name):
    settings, seed = make.VOLUMES[name]
    stack, graph = make_phantom(settings, seed)
    np.testing.assert_array_equal(tifffile.imread(FOLDER / name), stack.read())
    shipped = read_truth(FOLDER / name.replace(".ome.tif", ".truth.json"))
    np.testing.assert_array_equal(shipped.graph.segment_nodes, graph.segment_nodes)
    np.testing.assert_allclose(shipped.graph.point_position_um, graph.point_position_um, atol=1e-6)
    np.testing.assert_allclose(shipped.graph.point_radius_um, graph.point_radius_um, atol=1e-6)
    assert shipped.hindrance_per_um3 == pytest.approx(truth_of(graph).hindrance_per_um3)


@pytest.mark.parametrize(
    ("sample", "segments", "junctions", "loops", "length_mm", "hindrance"),
    [("a", 45, 22, 0, 1.087, 0.24969), ("b", 53, 28, 4, 1.397, 2.30364)],
)
def test_the_truth_is_what_the_readme_says(
    sample, segments, junctions, loops, length_mm, hindrance
):
    truth = read_truth(FOLDER / f"sample_{sample}.truth.json")
    graph = truth.graph
    assert (graph.n_segments, (graph.node_degree() > 2).sum()) == (segments, junctions)
    assert truth.loops == loops
    assert graph.segment_length_um().sum() / 1000 == pytest.approx(length_mm, abs=5e-4)
    assert truth.hindrance_per_um3 == pytest.approx(hindrance, abs=6e-6)


def test_the_volumes_are_small_and_carry_their_spacing():
    for name, (settings, _) in make.VOLUMES.items():
        assert (FOLDER / name).stat().st_size < 1_500_000
        with tifffile.TiffFile(FOLDER / name) as file:
            pixels = tifffile.xml2dict(file.ome_metadata)["OME"]["Image"]["Pixels"]
        assert [pixels[f"PhysicalSize{a}"] for a in "ZYX"] == list(settings.spacing_um)
