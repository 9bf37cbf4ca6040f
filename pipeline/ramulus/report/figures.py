"""All figures of a report as PNG bytes, the same bytes for the same results."""

import gc
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import partial
from typing import TYPE_CHECKING, Literal

from . import charts
from .canvas import own_settings, png_bytes
from .content import ReportContent
from .views import image_views

if TYPE_CHECKING:
    from matplotlib.figure import Figure

__all__ = ["figures"]

Maker = Callable[[ReportContent], "Figure | str"]

_MAKERS: dict[str, Maker] = {
    "image_graph.png": partial(image_views, with_graph=True),
    "image.png": partial(image_views, with_graph=False),
    "planes.png": charts.planes,
    "thickness.png": charts.thickness,
    "radii.png": charts.radii,
    "radius_methods.png": charts.radius_methods,
    "twin.png": charts.twin_errors,
    "order_numbers.png": partial(
        charts.order_chart, column="n_elements", title="Number of elements", y="elements",
        ratio="branching_ratio",
    ),
    "order_diameters.png": partial(
        charts.order_chart, column="diameter_um_mean", title="Diameter", y="diameter in µm",
        spread="diameter_um_sd", ratio="diameter_ratio",
    ),
    "order_lengths.png": partial(
        charts.order_chart, column="element_length_um_mean", title="Length of elements",
        y="length in µm", spread="element_length_um_sd", ratio="length_ratio",
    ),
    "order_cross_sections.png": partial(
        charts.order_chart, column="cross_section_um2", title="Total cross-section",
        y="cross-section in µm²",
    ),
    "cube_law.png": charts.cube_law,
    "cube_residuals.png": charts.cube_residuals,
    "pressure.png": charts.pressures,
    "resistance.png": charts.resistances,
    "resistance_share.png": charts.dominance,
}  # fmt: skip
_COLOURS: dict[str, Literal["grey", "all"]] = {"image_graph.png": "all", "image.png": "grey"}


def figures(content: ReportContent) -> tuple[dict[str, bytes], dict[str, str]]:
    """Draw a report's figures.

    Parameters
    ----------
    content : ReportContent
        The sample's results.

    Returns
    -------
    drawn : dict of str to bytes
        PNG files by name.
    left_out : dict of str to str
        Why a figure is not among them.
    """
    drawn, left_out = {}, {}
    with own_settings(), _without_collecting():
        for name, make in _MAKERS.items():
            made = make(content)
            if isinstance(made, str):
                left_out[name] = made
            else:
                drawn[name] = png_bytes(made, colours=_COLOURS.get(name, "few"))
    return drawn, left_out


@contextmanager
def _without_collecting() -> Iterator[None]:
    """Hold the garbage collector: among a figure's many objects it costs a sixth of the time."""
    running = gc.isenabled()
    gc.disable()
    try:
        yield
    finally:
        if running:
            gc.enable()
