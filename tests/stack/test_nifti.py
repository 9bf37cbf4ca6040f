"""NIfTI: axes, units and affines against nibabel and SimpleITK; what is refused."""

import gzip
import struct
from pathlib import Path

import nibabel
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from stack_files import SPACING_UM, VOLUME, mutated, nifti, opened, refusal, zipped

from ramulus.errors import UnusableInputError
from ramulus.stack.open import InputSettings, describe
from ramulus.stack.stack import Stack

VOLUMES = Path(__file__).parents[2].parent / "shared" / "volumes"


@pytest.mark.parametrize("ending", [".nii", ".nii.gz"])
def test_a_volume_comes_back_as_z_y_x_with_its_spacing(tmp_path, ending):
    stack = opened(nifti(tmp_path / f"a{ending}"))
    np.testing.assert_array_equal(stack.read(), VOLUME)
    assert stack.read().dtype == VOLUME.dtype
    assert stack.spacing_um == pytest.approx(SPACING_UM)
    assert stack.spacing_origin == ("header",) * 3
    assert stack.name == "a"


@pytest.mark.parametrize(("unit", "um"), [("micron", 1.0), ("mm", 1e3), ("meter", 1e6)])
def test_units_are_obeyed(tmp_path, unit, um):
    stack = opened(nifti(tmp_path / "a.nii", unit=unit))
    assert stack.spacing_um == pytest.approx(tuple(um * s for s in SPACING_UM))


def test_a_volume_without_a_unit_is_refused_until_the_user_gives_the_spacing(tmp_path):
    path = nifti(tmp_path / "a.nii", unit="unknown")
    assert "without a known unit" in refusal(path)
    assert opened(path, spacing_um=(4, 2, 1)).spacing_um == (4.0, 2.0, 1.0)


def test_pixels_and_spacing_are_those_of_simpleitk(tmp_path):
    # SimpleITK reads x, y, z in mm and hands its array on as z, y, x.
    sitk = pytest.importorskip("SimpleITK")
    path = nifti(tmp_path / "a.nii.gz", unit="mm")
    image, stack = sitk.ReadImage(str(path)), opened(path)
    np.testing.assert_array_equal(sitk.GetArrayFromImage(image), stack.read())
    spacing_um = tuple(1000 * s for s in reversed(image.GetSpacing()))
    assert stack.spacing_um == pytest.approx(spacing_um)


def rotated(angle):
    c, s = np.cos(angle), np.sin(angle)
    z, y, x = SPACING_UM
    turn = np.array([[c, -s, 0], [s, c, 0], [0, 0, 1]])
    affine = np.eye(4)
    affine[:3, :3] = turn @ np.diag([-x, y, z])
    affine[:3, 3] = [-40, 3, 900]
    return affine


@settings(max_examples=15, deadline=None)
@given(st.floats(-3, 3))
def test_an_oblique_affine_keeps_the_edges_of_the_voxel(tmp_path_factory, angle):
    path = nifti(tmp_path_factory.mktemp("oblique") / "a.nii", affine=rotated(angle))
    stack = opened(path)
    x, y, z = nibabel.affines.voxel_sizes(nibabel.load(path).affine)
    assert stack.spacing_um == pytest.approx((z, y, x), rel=1e-5)


def test_an_oblique_volume_says_so(tmp_path):
    oblique = opened(nifti(tmp_path / "a.nii", affine=rotated(0.3))).provenance.header
    straight = opened(nifti(tmp_path / "b.nii", affine=rotated(0.0))).provenance.header
    assert oblique["oblique"] == "True"
    assert straight["oblique"] == "False"
    assert straight["orientation"] == "LAS"


def test_scaled_values_come_out_scaled(tmp_path):
    path = tmp_path / "a.nii"
    blob = bytearray(nifti(path, dtype=np.int16).read_bytes())
    struct.pack_into("<2f", blob, 112, 0.5, -3.0)  # scl_slope, scl_inter, NIfTI-1 header
    path.write_bytes(bytes(blob))
    read, expected = opened(path).read(), nibabel.load(path).get_fdata().transpose(2, 1, 0)
    assert read.dtype == np.float32
    np.testing.assert_allclose(read, expected, rtol=1e-6)


def test_big_endian_files_are_read_in_the_native_order(tmp_path):
    path = tmp_path / "a.nii"
    header = nibabel.Nifti1Header(endianness=">")
    header.set_data_dtype(np.int16)
    header.set_xyzt_units("mm")
    image = nibabel.Nifti1Image(VOLUME.transpose(2, 1, 0).astype(">i2"), np.eye(4), header)
    nibabel.save(image, path)
    read = opened(path).read()
    assert read.dtype.isnative
    np.testing.assert_array_equal(read, VOLUME.astype(np.int16))


def test_a_fourth_axis_is_a_channel_to_choose(tmp_path):
    path = tmp_path / "a.nii"
    data = np.stack([VOLUME.transpose(2, 1, 0), VOLUME.transpose(2, 1, 0) + 1], axis=3)
    image = nibabel.Nifti1Image(data, np.eye(4))
    image.header.set_xyzt_units("mm")
    nibabel.save(image, path)
    assert "2 channels" in refusal(path)
    np.testing.assert_array_equal(opened(path, channel="1").read(), VOLUME + 1)


def test_a_plane_or_five_axes_are_refused(tmp_path):
    path = tmp_path / "a.nii"
    for shape in [(4, 5), (4, 5, 6, 2, 2)]:
        nibabel.save(nibabel.Nifti1Image(np.zeros(shape, np.uint8), np.eye(4)), path)
        assert "found shape" in refusal(path, spacing_um=(1, 1, 1))


def contradicting(path):
    """Write a pixdim that the affine does not agree with."""
    nifti(path, unit="mm")
    blob = bytearray(path.read_bytes())
    struct.pack_into("<f", blob, 76 + 4, 9.0)  # pixdim[1], NIfTI-1 header
    path.write_bytes(bytes(blob))
    return path


def test_an_affine_and_a_pixdim_that_contradict_one_another_are_refused(tmp_path):
    path = contradicting(tmp_path / "a.nii")
    text = refusal(path)
    assert "the affine" in text
    assert "pixdim" in text
    spacing_um = tuple(1000 * s for s in SPACING_UM)
    assert opened(path, spacing_um=spacing_um).spacing_um == spacing_um


@pytest.mark.parametrize("share", [0.05, 0.5, 0.99])
@pytest.mark.parametrize("ending", [".nii", ".nii.gz"])
def test_a_truncated_file_is_refused(tmp_path, ending, share):
    path = nifti(tmp_path / f"a{ending}")
    blob = path.read_bytes()
    path.write_bytes(blob[: int(share * len(blob))])
    assert path.name in refusal(path)


def test_a_zipped_file_that_promises_terabytes_is_refused_before_memory_is_taken(tmp_path):
    plain = nifti(tmp_path / "a.nii")
    blob = bytearray(plain.read_bytes())
    struct.pack_into("<3h", blob, 42, 30_000, 30_000, 30_000)  # dim[1..3], NIfTI-1 header
    path = tmp_path / "a.nii.gz"
    path.write_bytes(zipped(bytes(blob)))
    assert "refused as impossible" in refusal(path)
    plain.write_bytes(bytes(blob))
    assert "cut short" in refusal(plain)


def test_a_zipped_file_of_zeros_is_no_lie(tmp_path):
    # Zeros shrink about a thousandfold, the most that deflate can do.
    path = nifti(tmp_path / "a.nii.gz", volume=np.zeros((60, 90, 100), np.uint16))
    assert opened(path).read().sum() == 0


def test_a_wrong_length_in_the_gzip_trailer_is_refused(tmp_path):
    path = nifti(tmp_path / "a.nii.gz")
    blob = bytearray(path.read_bytes())
    struct.pack_into("<I", blob, len(blob) - 4, 12)
    path.write_bytes(bytes(blob))
    with pytest.raises((OSError, EOFError)), gzip.open(path) as file:
        file.read()
    assert "a.nii.gz" in refusal(path)


@pytest.mark.filterwarnings("ignore")
@pytest.mark.parametrize("ending", [".nii", ".nii.gz"])
def test_damaged_files_are_refused_or_read_never_worse(tmp_path, ending):
    path = nifti(tmp_path / f"a{ending}")
    blob, read = path.read_bytes(), 0
    for seed in range(60):
        path.write_bytes(mutated(blob, seed))
        try:
            stack = opened(path, spacing_um=SPACING_UM, spacing_override_reason="test")
            voxels = stack.read()
        except UnusableInputError as refused:
            assert "\n" not in str(refused)  # noqa: PT017 - either outcome is right
            continue
        assert isinstance(stack, Stack)
        assert voxels.shape == stack.shape
        read += 1
    assert read < 60


@pytest.mark.skipif(not VOLUMES.is_dir(), reason="the folder of real volumes is absent")
def test_real_headers_say_what_their_description_says():
    # Source: the README of the volumes: shapes x, y, z and voxels in mm.
    report = describe(VOLUMES / "mra_head.nii.gz", settings=InputSettings())
    assert report.shape == (120, 256, 200)
    assert report.spacing_um == pytest.approx((650, 520.8, 520.8), rel=1e-4)
    assert report.header["oblique"] == "True"
    report = describe(VOLUMES / "xra_head_aneurysm.nii.gz", settings=InputSettings())
    assert report.spacing_um is None
    assert any("--spacing-um" in problem for problem in report.problems)
