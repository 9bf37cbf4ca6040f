"""A folder of slices: natural order, one shape, gaps reported."""

import numpy as np
import pytest
import tifffile
from stack_files import SPACING_UM, VOLUME, imagej, opened, refusal

from ramulus.errors import UnusableInputError
from ramulus.stack.open import InputSettings, describe
from ramulus.stack.slices import slice_files


def slices(folder, numbers=range(1, 6), *, name="slice_{}.tif"):
    folder.mkdir()
    for plane, number in zip(VOLUME, numbers, strict=True):
        path = folder / name.format(number)
        tifffile.imwrite(path, plane, photometric="minisblack", metadata=None)
    return folder


def problems(folder):
    return describe(folder, settings=InputSettings(spacing_um=SPACING_UM)).problems


def test_slices_are_stacked_in_the_order_of_their_numbers(tmp_path):
    # 8, 9, 10, 11, 12: by letters 10 would come before 8.
    folder = slices(tmp_path / "s", range(8, 13))
    stack = opened(folder, spacing_um=SPACING_UM)
    np.testing.assert_array_equal(stack.read(), VOLUME)
    assert stack.spacing_um == SPACING_UM
    assert [f.stem for f in slice_files(folder)] == [f"slice_{k}" for k in range(8, 13)]
    assert not any("gap" in problem for problem in problems(folder))


def test_planes_are_read_when_they_are_asked_for(tmp_path):
    voxels = opened(slices(tmp_path / "s"), spacing_um=SPACING_UM).voxels
    np.testing.assert_array_equal(voxels[2], VOLUME[2])
    np.testing.assert_array_equal(voxels[-1, 1:3], VOLUME[-1, 1:3])
    np.testing.assert_array_equal(voxels[1:4, :, 2], VOLUME[1:4, :, 2])
    np.testing.assert_array_equal(voxels[..., 2:5], VOLUME[..., 2:5])
    np.testing.assert_array_equal(voxels[1:3, ..., 0], VOLUME[1:3, ..., 0])
    np.testing.assert_array_equal(voxels[...], VOLUME)
    np.testing.assert_array_equal(voxels[[3, 0], ..., 1], VOLUME[[3, 0], ..., 1])


def test_other_files_in_the_folder_are_left_alone(tmp_path):
    folder = slices(tmp_path / "s")
    (folder / "notes.txt").write_text("words")
    (folder / "more.tif").mkdir()
    assert opened(folder, spacing_um=SPACING_UM).shape == VOLUME.shape


def test_a_gap_in_the_numbers_is_reported_with_its_place(tmp_path):
    found = problems(slices(tmp_path / "s", [1, 2, 4, 5, 6]))
    assert any("gap after slice_2.tif" in problem for problem in found)


def test_without_spacing_a_folder_is_refused(tmp_path):
    assert "--spacing-um Z Y X" in refusal(slices(tmp_path / "s"))


def test_spacing_of_the_slices_serves_in_plane_but_not_along_z(tmp_path):
    folder = tmp_path / "s"
    folder.mkdir()
    for k, plane in enumerate(VOLUME):
        tifffile.imwrite(
            folder / f"{k}.tif", plane, imagej=True, resolution=(2, 4),
            metadata={"axes": "YX", "unit": "um"},
        )  # fmt: skip
    assert "the z spacing is not known" in refusal(folder)
    assert "the user's x spacing" in refusal(folder, spacing_um=(3, 0.25, 1))
    assert opened(folder, spacing_um=(3, 0.25, 0.5)).spacing_um == (3.0, 0.25, 0.5)


def test_an_empty_folder_is_refused(tmp_path):
    (tmp_path / "s").mkdir()
    assert "no TIFF file" in refusal(tmp_path / "s")


def test_stacks_in_place_of_planes_are_refused(tmp_path):
    (tmp_path / "s").mkdir()
    imagej(tmp_path / "s" / "1.tif")
    assert "one plane a file" in refusal(tmp_path / "s", spacing_um=SPACING_UM)


@pytest.mark.parametrize("plane", [VOLUME[0][:-1], VOLUME[0].astype(np.uint8)])
def test_a_plane_that_differs_is_named(tmp_path, plane):
    folder = slices(tmp_path / "s")
    tifffile.imwrite(folder / "slice_3.tif", plane, photometric="minisblack", metadata=None)
    assert "slice_3.tif" in refusal(folder, spacing_um=SPACING_UM)


def test_a_truncated_plane_is_named(tmp_path):
    folder = slices(tmp_path / "s")
    path = folder / "slice_4.tif"
    path.write_bytes(path.read_bytes()[:-20])
    stack = opened(folder, spacing_um=SPACING_UM)
    with pytest.raises(UnusableInputError, match=r"slice_4\.tif"):
        stack.read()
