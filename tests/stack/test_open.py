"""Opening anything: endings, arrays, names, checks of the grey values."""

import hashlib
from pathlib import Path

import numpy as np
import pytest
from stack_files import SPACING_UM, VOLUME, nifti, ome, opened, refusal

from ramulus.errors import UnusableInputError
from ramulus.stack.open import (
    InputSettings,
    checked_grey_values,
    describe,
    file_sha256,
    sample_name,
)
from ramulus.stack.stack import Stack

VOLUMES = Path(__file__).parents[2].parent / "shared" / "volumes"


def array(path, values):
    np.save(path, values)
    return path


def test_an_array_is_opened_with_the_users_spacing(tmp_path):
    stack = opened(array(tmp_path / "a.npy", VOLUME), spacing_um=SPACING_UM)
    np.testing.assert_array_equal(stack.read(), VOLUME)
    assert stack.spacing_origin == ("user",) * 3
    assert "--spacing-um" in refusal(tmp_path / "a.npy")


@pytest.mark.parametrize(
    "values", [VOLUME[0], VOLUME[None], VOLUME[:0], VOLUME.astype(complex)],
    ids=["plane", "4-D", "empty", "complex"],
)  # fmt: skip
def test_an_array_that_is_no_stack_is_refused(tmp_path, values):
    assert "found shape" in refusal(array(tmp_path / "a.npy", values), spacing_um=SPACING_UM)


def test_an_array_of_objects_is_never_unpickled(tmp_path):
    path = tmp_path / "a.npy"
    np.save(path, np.array([[[object]]]), allow_pickle=True)
    assert "a.npy" in refusal(path, spacing_um=SPACING_UM)


def test_a_truncated_array_is_refused(tmp_path):
    path = array(tmp_path / "a.npy", VOLUME)
    for length in (5, 90, 300):
        path.write_bytes(path.read_bytes()[: -length if length == 5 else length])
        assert "a.npy" in refusal(path, spacing_um=SPACING_UM)


def test_what_is_not_there_or_has_no_reader_is_refused(tmp_path):
    assert "no such file" in refusal(tmp_path / "a.tif")
    (tmp_path / "a.png").write_bytes(b"x")
    assert "expected TIFF" in refusal(tmp_path / "a.png")


def test_a_file_of_another_kind_under_a_known_ending_is_refused(tmp_path):
    whole = ome(tmp_path / "a.ome.tif").read_bytes()
    for name in ("a.nii", "a.nii.gz", "a.npy"):
        (tmp_path / name).write_bytes(whole)
        assert name in refusal(tmp_path / name, spacing_um=SPACING_UM)
    nifti(tmp_path / "b.nii").rename(tmp_path / "b.tif")
    assert "b.tif" in refusal(tmp_path / "b.tif", spacing_um=SPACING_UM)


@pytest.mark.parametrize(
    ("file", "name"),
    [("a.ome.tif", "a"), ("a.b.nii.gz", "a.b"), ("x.TIF", "x"), ("folder", "folder"),
     (".tif", ".tif"), ("t.swc", "t")],
)  # fmt: skip
def test_a_sample_is_named_after_its_file(file, name):
    assert sample_name(Path(file)) == name


def test_a_description_reads_no_voxel_and_lists_every_problem(tmp_path):
    both = np.stack([VOLUME[:2], VOLUME[:2]], axis=1)
    path = ome(tmp_path / "a.ome.tif", volume=both, axes="ZCYX", spacing_um=(9, 1, 1))
    report = describe(path, settings=InputSettings())
    assert report.shape == (2, 7, 9)
    assert report.channels == ("0", "1")
    assert report.spacing_um == pytest.approx((9, 1, 1))
    text = " ".join(report.problems)
    assert "channels" in text
    assert "fewer than 4" in text
    assert "coarser" in text


def test_a_good_file_has_no_problem(tmp_path):
    report = describe(ome(tmp_path / "a.ome.tif"), settings=InputSettings())
    assert report.problems == ()
    assert report.dtype == "uint16"
    assert report.time_points == 1


def test_the_checksum_is_sha256_of_the_file_or_of_the_slices_in_order(tmp_path):
    path = ome(tmp_path / "a.ome.tif")
    assert file_sha256(path) == hashlib.sha256(path.read_bytes()).hexdigest()
    folder = tmp_path / "s"
    folder.mkdir()
    for k in (10, 9):
        (folder / f"{k}.tif").write_bytes(bytes([k]))
    assert file_sha256(folder) == hashlib.sha256(bytes([9, 10])).hexdigest()


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf])
def test_values_that_are_not_finite_are_counted_and_placed(value):
    volume = VOLUME.astype(np.float32)
    volume[1, 2, 3] = volume[4, 0, 0] = value
    with pytest.raises(UnusableInputError, match=r"2 voxels .*\(1, 2, 3\)"):
        checked_grey_values(volume, name="a")


def test_a_constant_stack_is_refused():
    with pytest.raises(UnusableInputError, match="every voxel is 7"):
        checked_grey_values(np.full((4, 4, 4), 7, np.uint8), name="a")


def test_good_grey_values_come_back_untouched():
    assert checked_grey_values(VOLUME, name="a") is VOLUME


def test_a_stack_knows_its_size():
    stack = Stack(VOLUME, SPACING_UM, ("user",) * 3)
    assert stack.shape == (5, 7, 9)
    assert stack.size_um == (12.5, 5.25, 4.5)
    assert stack.replace(name="b").name == "b"
    with pytest.raises(UnusableInputError, match="voxels"):
        Stack(VOLUME[0], SPACING_UM, ("user",) * 3)


@pytest.mark.skipif(not VOLUMES.is_dir(), reason="the folder of real volumes is absent")
def test_every_real_volume_is_described_without_reading_it():
    # Source: the README of the volumes: z, y, x in um for the two-photon stacks.
    for path in sorted(VOLUMES.glob("2p_*.ome.tif")):
        report = describe(path, settings=InputSettings())
        assert report.spacing_um == pytest.approx((5.0, 0.994, 0.994), abs=5e-4)
        assert report.problems == ()
    for path in sorted(VOLUMES.glob("*.nii.gz")):
        assert describe(path, settings=InputSettings()).format == "NIfTI"
