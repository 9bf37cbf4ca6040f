"""TIFF stacks: pixels and spacing against tifffile and SimpleITK, and what is refused."""

import struct

import numpy as np
import pytest
import tifffile
from hypothesis import given, settings
from hypothesis import strategies as st
from stack_files import SPACING_UM, VOLUME, imagej, mutated, ome, opened, refusal

from ramulus.errors import UnusableInputError
from ramulus.stack.open import InputSettings, describe
from ramulus.stack.stack import Stack


def test_ome_tiff_is_read_with_its_spacing(tmp_path):
    stack = opened(ome(tmp_path / "a.ome.tif"))
    np.testing.assert_array_equal(stack.read(), VOLUME)
    assert stack.read().dtype == VOLUME.dtype
    assert stack.spacing_um == pytest.approx(SPACING_UM)
    assert stack.spacing_origin == ("header",) * 3
    assert stack.name == "a"


def test_ome_spacing_is_that_of_tifffiles_own_metadata(tmp_path):
    path = ome(tmp_path / "a.ome.tif")
    with tifffile.TiffFile(path) as file:
        pixels = tifffile.xml2dict(file.ome_metadata)["OME"]["Image"]["Pixels"]
    expected = [pixels[f"PhysicalSize{axis}"] for axis in "ZYX"]
    assert list(opened(path).spacing_um) == pytest.approx(expected)


@pytest.mark.parametrize(("unit", "um"), [("nm", 1e-3), ("mm", 1e3), ("m", 1e6), ("µm", 1.0)])
def test_ome_units_are_obeyed(tmp_path, unit, um):
    path = ome(tmp_path / "a.ome.tif", unit=unit, spacing_um=tuple(s / um for s in SPACING_UM))
    assert opened(path).spacing_um == pytest.approx(SPACING_UM)


def test_imagej_tiff_is_read_with_its_spacing(tmp_path):
    stack = opened(imagej(tmp_path / "a.tif"))
    np.testing.assert_array_equal(stack.read(), VOLUME)
    assert stack.spacing_um == pytest.approx(SPACING_UM, rel=1e-5)
    assert stack.provenance.format == "ImageJ TIFF"


@pytest.mark.parametrize("unit", ["micron", "\\u00B5m", "um"])
def test_imagejs_ways_to_write_micrometres(tmp_path, unit):
    # An ImageJ description is ASCII: the micro sign stands there escaped.
    path = imagej(tmp_path / "a.tif", unit=unit)
    assert opened(path).spacing_um == pytest.approx(SPACING_UM, rel=1e-5)


def test_pixels_are_those_of_simpleitk(tmp_path):
    sitk = pytest.importorskip("SimpleITK")
    path = ome(tmp_path / "a.ome.tif")
    np.testing.assert_array_equal(
        sitk.GetArrayFromImage(sitk.ReadImage(str(path))), opened(path).read()
    )


@pytest.mark.parametrize(
    "more",
    [{}, {"bigtiff": True}, {"compression": "zlib"}, {"byteorder": ">"}, {"rowsperstrip": 2},
     {"tile": (16, 16)}],
    ids=["plain", "big", "zlib", "big-endian", "strips", "tiles"],
)  # fmt: skip
@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int16", "float32"])
def test_every_layout_gives_the_same_pixels(tmp_path, more, dtype):
    path = tmp_path / "a.tif"
    volume = (VOLUME % 200).astype(dtype)
    tifffile.imwrite(path, volume, photometric="minisblack", metadata=None, **more)
    stack = opened(path, spacing_um=SPACING_UM)
    np.testing.assert_array_equal(stack.read(), volume)
    np.testing.assert_array_equal(stack.read(), tifffile.imread(path))
    assert stack.spacing_origin == ("user",) * 3


def test_one_channel_of_several_is_chosen_by_number_or_name(tmp_path):
    both = np.stack([VOLUME, VOLUME + 1], axis=1)
    path = ome(
        tmp_path / "a.ome.tif", volume=both, axes="ZCYX",
        metadata={"Channel": {"Name": ["dye", "cells"]}},
    )  # fmt: skip
    assert "2 channels (dye, cells)" in refusal(path)
    np.testing.assert_array_equal(opened(path, channel="cells").read(), VOLUME + 1)
    np.testing.assert_array_equal(opened(path, channel="0").read(), VOLUME)
    assert opened(path, channel="cells").provenance.channel == "cells"
    assert "input.channel" in refusal(path, channel="2")


def test_channels_of_an_imagej_hyperstack(tmp_path):
    both = np.stack([VOLUME, VOLUME + 1], axis=1)
    path = imagej(tmp_path / "a.tif", volume=both, axes="ZCYX")
    np.testing.assert_array_equal(opened(path, channel="1").read(), VOLUME + 1)


def test_one_time_point_of_several_is_chosen(tmp_path):
    both = np.stack([VOLUME, VOLUME + 7])
    path = ome(tmp_path / "a.ome.tif", volume=both, axes="TZYX")
    np.testing.assert_array_equal(opened(path).read(), VOLUME)
    np.testing.assert_array_equal(opened(path, time_point=1).read(), VOLUME + 7)
    assert "input.time_point" in refusal(path, time_point=2)


def test_planes_saved_as_time_points_are_pointed_out(tmp_path):
    path = imagej(tmp_path / "a.tif", axes="TYX", spacing_um=SPACING_UM)
    report = describe(path, settings=InputSettings())
    assert any("swapped" in problem for problem in report.problems)


# ---------------------------------------------------------------- refusals


def test_without_spacing_it_refuses(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, VOLUME, photometric="minisblack", metadata=None)
    assert "--spacing-um Z Y X" in refusal(path)


def test_resolution_in_inches_of_a_plain_tiff_is_no_voxel_spacing(tmp_path):
    # Programs write 72 dpi into every file: a print resolution says nothing of the specimen.
    path = tmp_path / "a.tif"
    tifffile.imwrite(
        path, VOLUME, photometric="minisblack", metadata=None, resolution=(72, 72),
        resolutionunit="INCH",
    )  # fmt: skip
    assert "not known" in refusal(path)


def test_an_imagej_stack_in_pixels_has_no_spacing(tmp_path):
    assert "not known" in refusal(imagej(tmp_path / "a.tif", unit="pixel"))


def test_an_imagej_stack_without_depth_is_not_taken_for_isotropic(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(
        path, VOLUME, imagej=True, resolution=(2, 2), metadata={"axes": "ZYX", "unit": "um"}
    )
    assert "the z spacing is not known" in refusal(path)


def test_a_contradiction_with_the_user_is_refused(tmp_path):
    path = ome(tmp_path / "a.ome.tif")
    assert "spacing_override_reason" in refusal(path, spacing_um=(1, 1, 1))


@pytest.mark.parametrize("value", ["0", "-1", "NaN", "inf", "words", ""])
def test_an_impossible_spacing_in_ome_xml_is_refused(tmp_path, value):
    path = with_xml(tmp_path, lambda xml: xml.replace('SizeZ="2.5"', f'SizeZ="{value}"'))
    assert "the z spacing" in refusal(path)


def test_an_unknown_unit_in_ome_xml_is_refused(tmp_path):
    assert "without a known unit" in refusal(ome(tmp_path / "a.ome.tif", unit="reference frame"))


def test_a_colour_photograph_is_refused(tmp_path):
    path = tmp_path / "photo.tif"
    tifffile.imwrite(path, np.zeros((32, 32, 3), np.uint8), photometric="rgb")
    assert "a colour image" in refusal(path, spacing_um=(1, 1, 1))


def test_a_palette_image_is_refused(tmp_path):
    path = tmp_path / "photo.tif"
    colours = np.zeros((3, 256), np.uint16)
    tifffile.imwrite(path, np.zeros((32, 32), np.uint8), photometric="palette", colormap=colours)
    assert "a colour image" in refusal(path, spacing_um=(1, 1, 1))


def test_complex_values_are_refused(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, VOLUME.astype(np.complex64), photometric="minisblack")
    assert "dtype" in refusal(path, spacing_um=(1, 1, 1))


@pytest.mark.parametrize("share", [0.02, 0.3, 0.9, 0.995])
@pytest.mark.parametrize("writer", [ome, imagej])
def test_a_truncated_file_is_refused(tmp_path, writer, share):
    path = writer(tmp_path / "a.ome.tif", volume=np.tile(VOLUME, (2, 3, 3)))
    blob = path.read_bytes()
    path.write_bytes(blob[: int(share * len(blob))])
    assert path.name in refusal(path, spacing_um=SPACING_UM)


def test_an_empty_file_and_one_of_text_are_refused(tmp_path):
    path = tmp_path / "a.tif"
    path.write_bytes(b"")
    assert "empty" in refusal(path)
    path.write_text("not an image")
    assert "not a readable TIFF" in refusal(path)


# ---------------------------------------------------------------- OME-XML


def with_xml(tmp_path, change):
    """Write an OME-TIFF whose XML was changed."""
    source = ome(tmp_path / "source.ome.tif")
    with tifffile.TiffFile(source) as file:
        xml = file.ome_metadata
    path = tmp_path / "changed.ome.tif"
    tifffile.imwrite(
        path, VOLUME, photometric="minisblack", metadata=None, description=change(xml).encode()
    )
    return path


ENTITIES = '<!DOCTYPE x [<!ENTITY a "aaaaaaaa"><!ENTITY b "&a;&a;&a;&a;">]>'


def test_entity_declarations_are_refused(tmp_path):
    def declare(xml):
        head, rest = xml.split("?>", 1)
        return f"{head}?>{ENTITIES}{rest}"

    assert "declares entities" in refusal(with_xml(tmp_path, declare), spacing_um=SPACING_UM)


def test_broken_xml_is_refused_or_read_without_it(tmp_path):
    path = with_xml(tmp_path, lambda xml: xml.replace("</Pixels>", ""))
    assert path.name in refusal(path)


def test_changed_xml_is_what_the_tests_believe_it_is(tmp_path):
    assert opened(with_xml(tmp_path, lambda xml: xml)).spacing_um == pytest.approx(SPACING_UM)


# ---------------------------------------------------------------- damage


def test_a_header_that_promises_more_than_the_file_holds_is_refused(tmp_path):
    path = tmp_path / "a.tif"
    tifffile.imwrite(path, VOLUME[0], photometric="minisblack", metadata=None)
    blob = bytearray(path.read_bytes())
    with tifffile.TiffFile(path) as file:
        tags = [file.pages[0].tags[n] for n in ("ImageWidth", "ImageLength")]
        places = [(tag.valueoffset, tag.dtype) for tag in tags]
    for offset, _ in places:
        struct.pack_into("<H", blob, offset, 60_000)
    path.write_bytes(bytes(blob))
    assert "a.tif" in refusal(path, spacing_um=SPACING_UM)


@pytest.mark.filterwarnings("ignore")
@pytest.mark.parametrize("kind", ["ome", "imagej", "zlib"])
def test_damaged_files_are_refused_or_read_never_worse(tmp_path, kind):
    path = tmp_path / "a.ome.tif"
    if kind == "imagej":
        imagej(path)
    else:
        ome(path, **({"compression": "zlib"} if kind == "zlib" else {}))
    blob, read = path.read_bytes(), 0
    for seed in range(100):
        path.write_bytes(mutated(blob, seed))
        try:
            stack = opened(path, spacing_um=SPACING_UM, spacing_override_reason="test")
            voxels = stack.read()
        except UnusableInputError as refused:
            assert "\n" not in str(refused)  # noqa: PT017 - either outcome is right
            continue
        assert isinstance(stack, Stack)
        assert voxels.ndim == 3
        assert voxels.shape == stack.shape
        read += 1
    assert 5 < read < 100


@settings(max_examples=20, deadline=None)
@given(st.tuples(*[st.floats(0.01, 900)] * 3))
def test_any_spacing_survives_a_round_trip(tmp_path_factory, spacing):
    path = ome(tmp_path_factory.mktemp("round") / "a.ome.tif", spacing_um=spacing)
    assert opened(path).spacing_um == pytest.approx(spacing)
