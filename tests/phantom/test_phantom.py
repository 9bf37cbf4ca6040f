"""Phantoms as a whole, and their files."""

import numba
import numpy as np
import pytest
import tifffile

from ramulus.errors import UnusableInputError
from ramulus.phantom.grow import TreeSettings
from ramulus.phantom.lattice import LatticeSettings
from ramulus.phantom.phantom import PhantomSettings, make_phantom
from ramulus.phantom.save import save_phantom
from ramulus.phantom.truth import read_truth

SETTINGS = PhantomSettings(
    shape=(20, 44, 44), spacing_um=(2.0, 1.0, 1.0), name="sample A",
    tree=TreeSettings(root_radius_um=2.6, max_segments=3),
)  # fmt: skip


@pytest.fixture(scope="module")
def phantom():
    return make_phantom(SETTINGS, 3)


def test_a_phantom_is_bright_along_its_true_centrelines_alone(phantom):
    stack, truth = phantom
    voxels = stack.read()
    assert (stack.shape, stack.spacing_um, stack.name) == (
        (20, 44, 44),
        (2.0, 1.0, 1.0),
        "sample A",
    )
    assert truth.extent_um == stack.size_um
    index = np.rint(truth.point_position_um / stack.spacing_um).astype(int)
    inside = ((index >= 1) & (index < np.array(stack.shape) - 1)).all(axis=1)
    on_axis = voxels[tuple(index[inside].T)].astype(float)
    assert on_axis.mean() > 110  # background 40, contrast 100, less the blur
    assert np.median(voxels) == pytest.approx(40, abs=3)


def test_a_phantom_repeats_byte_for_byte(phantom):
    stack, truth = make_phantom(SETTINGS, 3)
    assert stack.read().tobytes() == phantom[0].read().tobytes()
    assert truth.point_position_um.tobytes() == phantom[1].point_position_um.tobytes()


@pytest.mark.skipif(numba.config.DISABLE_JIT, reason="a whole stack takes minutes without the JIT")
def test_a_loop_phantom_has_loops():
    settings = SETTINGS.model_copy(
        update={
            "kind": "loops", "shape": (45, 90, 90),
            "lattice": LatticeSettings(spacing_um=15, max_radius_um=3),
        }
    )  # fmt: skip
    _, truth = make_phantom(settings, 1)
    assert truth.n_segments > truth.n_nodes


def test_the_files_hold_spacing_in_micrometres_and_the_truth(phantom, tmp_path):
    stack, truth = phantom
    beside = save_phantom(tmp_path / "a.ome.tif", stack, truth, settings=SETTINGS, seed=3)
    assert beside == tmp_path / "a.truth.json"
    with tifffile.TiffFile(tmp_path / "a.ome.tif") as file:
        np.testing.assert_array_equal(file.asarray(), stack.read())
        pixels = tifffile.xml2dict(file.ome_metadata)["OME"]["Image"]["Pixels"]
    assert (pixels["PhysicalSizeZ"], pixels["PhysicalSizeX"]) == (2.0, 1.0)
    assert {pixels[f"PhysicalSize{a}Unit"] for a in "XYZ"} == {"µm"}
    record = read_truth(beside)
    assert record.graph.n_segments == truth.n_segments
    assert record.made_with["seed"] == 3
    assert PhantomSettings(**record.made_with["settings"]) == SETTINGS


def test_the_files_repeat_byte_for_byte(phantom, tmp_path):
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        save_phantom(tmp_path / name / "p.tif", *phantom, settings=SETTINGS, seed=3)
    for file in ("p.tif", "p.truth.json"):
        assert (tmp_path / "a" / file).read_bytes() == (tmp_path / "b" / file).read_bytes()


@pytest.mark.parametrize(("name", "message"), [("p.png", "tif"), ("no/p.tif", "folder")])
def test_an_unusable_path_is_refused(phantom, tmp_path, name, message):
    with pytest.raises(UnusableInputError, match=message):
        save_phantom(tmp_path / name, *phantom, settings=SETTINGS, seed=3)
