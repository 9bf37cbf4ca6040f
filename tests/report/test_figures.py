import io

import matplotlib as mpl
import numpy as np
import pytest
from made_report import made_content
from matplotlib.colors import to_rgb
from PIL import Image

from ramulus.report.canvas import BLUE, GREEN, ORANGE, readable
from ramulus.report.figures import figures


@pytest.fixture(scope="module")
def drawn():
    return figures(made_content())


def test_all_figures_are_drawn_for_a_full_sample(drawn):
    assert drawn[1] == {}
    assert len(drawn[0]) == 16


def test_the_same_results_give_the_same_bytes_whatever_the_users_settings(drawn):
    with mpl.rc_context({"font.size": 20, "axes.facecolor": "red", "lines.linewidth": 9}):
        again, _ = figures(made_content())
        assert mpl.rcParams["font.size"] == 20
    assert again == drawn[0]


def test_files_hold_no_date_and_no_version(drawn):
    for name, png in drawn[0].items():
        with Image.open(io.BytesIO(png)) as picture:
            picture.load()
            assert picture.format == "PNG", name
            assert not picture.text, name
            assert min(picture.size) > 200, name


def test_charts_are_on_the_pages_own_white(drawn):
    with Image.open(io.BytesIO(drawn[0]["radii.png"])) as picture:
        assert picture.convert("RGB").getpixel((2, 2)) == (255, 255, 255)


def test_the_colours_differ_in_lightness_and_in_the_blue_yellow_direction():
    # Colour-blind safe: Okabe & Ito 2008. Red-green blindness leaves blue against yellow and
    # lightness; every pair must differ in one of them (CIE relative luminance, sRGB weights).
    def luminance(colour):
        linear = [
            c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in to_rgb(colour)
        ]
        return float(np.dot([0.2126, 0.7152, 0.0722], linear))

    for a, b in ((BLUE, ORANGE), (BLUE, GREEN), (ORANGE, GREEN)):
        yellow = [sum(to_rgb(c)[:2]) / 2 - to_rgb(c)[2] for c in (a, b)]
        assert abs(luminance(a) - luminance(b)) > 0.1 or abs(yellow[0] - yellow[1]) > 0.25


@pytest.mark.parametrize(
    ("value", "expected"),
    [
        (0, "0"), (1, "1"), (12.5, "12.5"), (99999, "99,999"), (1234567, "1,234,567"),
        (1e5, "10⁵"), (123456.0, "1.23 \N{MULTIPLICATION SIGN} 10⁵"), (0.001, "0.001"),
        (0.00099, "9.9 \N{MULTIPLICATION SIGN} 10⁻⁴"), (-2.5, "\N{MINUS SIGN}2.5"),
        (-1e-7, "\N{MINUS SIGN}10⁻⁷"), (0.9999, "1"), (float("nan"), "\N{EN DASH}"),
        (None, "\N{EN DASH}"), (np.float32(2.0), "2"),
    ],
)  # fmt: skip
def test_numbers_are_written_for_reading(value, expected):
    assert readable(value) == expected
