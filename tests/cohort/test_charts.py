"""The drawings: places, marks, words."""

import math
import re
from xml.etree import ElementTree as ET

import pytest
from hypothesis import given
from hypothesis import strategies as st

from ramulus.cohort.charts import COLOURS, Dot, Line, legend, line_chart, number, strip_chart

NO = math.nan


def drawn(svg):
    return ET.fromstring(svg)  # noqa: S314 - our own drawing


def dot(name, value, *, low=NO, high=NO, compared=True):
    return Dot(name, value, low, high, compared)


def strip(groups, *, scale="linear", centres=None):
    centres = centres or [(NO, NO, NO)] * len(groups)
    return drawn(strip_chart(groups, centres, title="T", unit="µm", scale=scale))


def marks(svg):
    """Return the words and the place of every mark."""
    found = {}
    for path in svg.iter("path"):
        if path.get("class") == "mark":
            x, y = map(float, re.findall(r"[-\d.]+", path.get("transform")))
            found[path.find("title").text.split(":")[0]] = (x, y, path.get("fill"))
    return found


def test_every_sample_is_a_dot_above_its_group():
    svg = strip([("a", [dot("s1", 1.0), dot("s2", 2.0)]), ("b", [dot("s3", 3.0)])])
    found = marks(svg)
    assert sorted(found) == ["s1", "s2", "s3"]
    assert found["s1"][1] > found["s2"][1] > found["s3"][1]  # upwards
    assert found["s3"][0] > found["s1"][0]
    assert [found[name][2] for name in ("s1", "s3")] == [COLOURS[0], COLOURS[1]]


def test_equal_samples_do_not_cover_one_another():
    found = marks(strip([("a", [dot(f"s{k}", 1.0) for k in range(5)])]))
    places = [place[:2] for place in found.values()]
    assert all(math.dist(one, other) > 6 for k, one in enumerate(places) for other in places[:k])


def test_samples_that_were_not_compared_are_hollow_and_say_so():
    svg = strip([("a", [dot("s1", 1.0, compared=False), dot("s2", 2.0)])])
    assert marks(svg)["s1"][2] == "#fff"
    assert "not compared" in ET.tostring(svg, encoding="unicode")


def test_a_log_axis_spaces_ratios_evenly():
    svg = strip([("a", [dot("s1", 1.0), dot("s2", 10.0), dot("s3", 100.0)])], scale="log")
    y = [marks(svg)[name][1] for name in ("s1", "s2", "s3")]
    assert y[0] - y[1] == pytest.approx(y[1] - y[2], abs=0.2)


def test_intervals_and_means_are_drawn_where_they_are_known():
    svg = strip([("a", [dot("s1", 2.0, low=1.0, high=3.0)])], centres=[(2.0, 1.5, 2.5)])
    kinds = [path.get("class") for path in svg.iter("path")]
    assert kinds.count("whisker") == 1
    assert kinds.count("centre") == 2


def test_one_huge_interval_does_not_press_the_dots_together():
    dots = [dot("s1", 1.0), dot("s2", 2.0, low=-1e6, high=1e6), dot("s3", 3.0)]
    found = marks(strip([("a", dots)]))
    # The axis spans the values' range of 2 and as much again on either side.
    assert found["s1"][1] - found["s3"][1] == pytest.approx((190 - 34 - 18) / 3 / 1.12, rel=0.02)


def test_names_are_escaped_everywhere():
    nasty = '<script>alert("x")</script>'
    for svg in (
        strip_chart(
            [(nasty, [dot(nasty, 1.0)])], [(NO, NO, NO)], title=nasty, unit="", scale="log"
        ),
        line_chart(
            [Line(nasty, [1], [1.0], 0)], title=nasty, unit="", scale="log", x_label="order"
        ),
        legend([nasty]),
    ):
        assert "<script" not in svg


@pytest.mark.parametrize("values", [[], [5.0], [0.0, 0.0], [-1.0, 1.0], [1e-30, 1e30], [NO, 3.0]])
@pytest.mark.parametrize("scale", ["log", "linear"])
def test_any_values_give_a_whole_drawing(values, scale):
    shown = [v for v in values if not math.isnan(v) and (scale == "linear" or v > 0)]
    strip([("a", [dot(f"s{k}", v) for k, v in enumerate(shown)])], scale=scale)
    line = Line("s", list(range(1, len(values) + 1)), values, 0)
    svg = line_chart([line], title="T", unit="", scale=scale, x_label="order")
    assert "nan" not in svg
    drawn(svg)


@given(
    st.floats(allow_nan=False, allow_infinity=False, width=32),
    st.floats(min_value=1e-6, max_value=1e6),
)
def test_ticks_lie_inside_and_are_few(start, width):
    values = [start, start + width * max(1.0, abs(start))]
    svg = strip([("a", [dot(f"s{k}", v) for k, v in enumerate(values)])])
    ticks = [path for path in svg.iter("path") if path.get("class") == "grid"]
    assert 2 <= len(ticks) <= 12


def test_ticks_are_written_out_without_idle_zeros():
    svg = strip([("a", [dot("s1", 0.0475), dot("s2", 0.056)])])
    words = [text.text for text in svg.iter("text") if text.get("text-anchor") == "end"]
    assert words == ["0.048", "0.05", "0.052", "0.054", "0.056"]


def test_group_lines_lie_over_sample_lines():
    lines = [
        Line("mean", [1, 2], [1.0, 2.0], 0, strong=True),
        Line("s1", [1, 2], [1.1, 2.2], 0),
    ]
    svg = drawn(line_chart(lines, title="T", unit="", scale="log", x_label="order"))
    kinds = [p.get("class") for p in svg.iter("path") if p.get("class") in ("thin", "strong")]
    assert kinds == ["thin", "strong"]


@pytest.mark.parametrize(
    ("value", "words"),
    [
        (0.0, "0"),
        (3.14159, "3.14"),
        (-0.5, "\N{MINUS SIGN}0.500"),
        (99999.0, "1.00 \N{MULTIPLICATION SIGN} 10⁵"),
        (12345.0, "12,345"),
        (4.074e-9, "4.07 \N{MULTIPLICATION SIGN} 10⁻⁹"),
        (9.999, "10.0"),
        (math.inf, "\N{EN DASH}"),
    ],
)
def test_numbers_read_well(value, words):
    assert number(value) == words
