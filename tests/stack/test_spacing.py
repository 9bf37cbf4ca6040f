"""Spacing: read, given, or refused; never guessed."""

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramulus.errors import SpacingError
from ramulus.stack.spacing import AxisSpacing, combined_spacing


def header(z, y, x, *, unit="um", source="the header"):
    return {axis: [AxisSpacing(v, unit, source)] for axis, v in zip("zyx", (z, y, x), strict=True)}


def combined(found, user=None, **more):
    return combined_spacing(found, user_um=user, name="a.tif", **more)


def test_a_header_with_units_is_believed():
    assert combined(header(5, 1, 0.5)) == ((5.0, 1.0, 0.5), ("header",) * 3)


@pytest.mark.parametrize(
    ("unit", "um"),
    [("nm", 1e-3), ("um", 1), ("µm", 1), ("μm", 1), ("micron", 1), ("mm", 1e3), ("cm", 1e4),
     ("m", 1e6), ("inch", 25400)],
)  # fmt: skip
def test_units_of_length_become_um(unit, um):
    # International System of Units; the inch is 25.4 mm by definition.
    spacing, _ = combined(header(2, 2, 2, unit=unit))
    assert spacing == pytest.approx((2 * um,) * 3)


def test_without_any_spacing_it_refuses_and_says_how_to_give_it():
    with pytest.raises(
        SpacingError, match=r"a\.tif: the z spacing is not known.*--spacing-um Z Y X"
    ):
        combined({})


@pytest.mark.parametrize("unit", ["", "pixel", "furlong"])
def test_a_number_without_a_known_unit_is_no_spacing(unit):
    with pytest.raises(SpacingError, match="without a known unit"):
        combined(header(1, 1, 1, unit=unit))
    assert combined(header(1, 1, 1, unit=unit), (3, 2, 1)) == ((3.0, 2.0, 1.0), ("user",) * 3)


def test_a_missing_axis_is_named():
    found = header(5, 1, 0.5)
    del found["z"]
    with pytest.raises(SpacingError, match="the z spacing"):
        combined(found)


@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), float("inf")])
def test_an_impossible_header_is_refused_and_may_be_replaced(value):
    with pytest.raises(SpacingError, match="the y spacing"):
        combined(header(5, value, 0.5))
    assert combined(header(5, value, 0.5), (5, 1, 0.5))[0] == (5.0, 1.0, 0.5)


@pytest.mark.parametrize("value", [0.0, -1.0, float("nan"), float("inf")])
def test_an_impossible_spacing_by_the_user_is_refused(value):
    with pytest.raises(SpacingError, match="--spacing-um: the x spacing"):
        combined({}, (1, 1, value))


def test_two_sources_that_contradict_one_another_are_refused():
    found = header(5, 1, 0.5)
    found["x"].append(AxisSpacing(0.6, "um", "the tag XResolution"))
    with pytest.raises(SpacingError, match=r"0\.5 um in the header but 0\.6 um in the tag XRes"):
        combined(found)
    found["x"][1] = AxisSpacing(502.0, "nm", "the tag XResolution")
    assert combined(found)[0][2] == 0.5


def test_a_user_who_contradicts_the_header_must_say_why():
    with pytest.raises(SpacingError, match=r"input\.spacing_override_reason"):
        combined(header(5, 1, 1), (5, 1, 2))
    spacing, origin = combined(header(5, 1, 1), (5, 1, 2), override="wrong objective noted")
    assert spacing == (5.0, 1.0, 2.0)
    assert origin == ("user",) * 3


def test_a_user_who_agrees_needs_no_reason():
    assert combined(header(5, 1, 1), (5, 1, 1.005))[1] == ("user",) * 3


sizes = st.floats(1e-3, 1e4)


@given(sizes, sizes, sizes)
def test_any_header_in_any_unit_gives_the_same_spacing(z, y, x):
    found = {
        "z": [AxisSpacing(z * 1e3, "nm", "a"), AxisSpacing(z, "um", "b")],
        "y": [AxisSpacing(y / 1e3, "mm", "a")],
        "x": [AxisSpacing(x, "um", "a"), AxisSpacing(x, "", "no unit")],
    }
    assert combined(found)[0] == pytest.approx((z, y, x))
