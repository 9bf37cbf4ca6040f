"""The look that all figures share, and their way into PNG bytes that repeat."""

import io
from collections.abc import Iterator
from contextlib import contextmanager
from math import floor, isfinite, log10
from typing import TYPE_CHECKING, Any, Literal

import numpy as np

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure
    from matplotlib.lines import Line2D
    from PIL.Image import Image

__all__ = [
    "BLUE", "GREEN", "INK", "ORANGE", "RULE", "SOFT", "blank", "chart", "key", "length_unit",
    "log_ticks", "own_settings", "png_bytes", "readable",
]  # fmt: skip

# Okabe & Ito 2008, Color Universal Design: told apart with every common colour vision.
BLUE, ORANGE, GREEN = "#0072B2", "#D55E00", "#009E73"
INK, SOFT, RULE = "#1d2326", "#525c62", "#d5dadd"
_LOOK: dict[str, Any] = {
    "axes.axisbelow": True, "axes.edgecolor": SOFT, "axes.grid": True, "axes.labelcolor": INK,
    "axes.labelsize": 9, "axes.spines.right": False, "axes.spines.top": False,
    "axes.titlecolor": INK, "axes.titlesize": 9.5, "grid.color": "#e9ecee", "grid.linewidth": 0.7,
    "text.color": INK, "xtick.color": SOFT, "xtick.labelcolor": INK, "xtick.labelsize": 8.5,
    "ytick.color": SOFT, "ytick.labelcolor": INK, "ytick.labelsize": 8.5,
}  # fmt: skip
_DPI = 120
_MOST_BYTES = 900_000
_MINUS = "\N{MINUS SIGN}"
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@contextmanager
def own_settings() -> Iterator[None]:
    """Draw in the report's own look, whatever the user's configuration file says.

    Axes that are made within it need no styling of their own, which would make all ticks anew.
    """
    from matplotlib import rc_context, rcParamsDefault  # noqa: PLC0415 - heavy to import

    kept: Any = {k: v for k, v in rcParamsDefault.items() if not k.startswith("backend")}
    with rc_context(kept | _LOOK):
        yield


def blank(width_in: float, height_in: float) -> "Figure":
    """Return an empty figure without any state that is shared with others."""
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415 - heavy to import
    from matplotlib.figure import Figure  # noqa: PLC0415

    figure = Figure(figsize=(width_in, height_in), dpi=_DPI, facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def chart(title: str, *, x: str, y: str, log: str = "") -> tuple["Figure", "Axes"]:
    """Return a figure with one pair of axes; `log` names those that are logarithmic."""
    figure = blank(4.9, 3.3)
    axes = figure.add_axes((0.17, 0.16, 0.8, 0.7))
    # Fixed places spare matplotlib the search for some that clear everything else.
    axes.set_title(title, loc="left", y=1.09)
    axes.set_xlabel(x)
    axes.xaxis.set_label_coords(0.5, -0.12)
    axes.set_ylabel(y)
    axes.yaxis.set_label_coords(-0.15, 0.5)
    if "x" in log:
        axes.set_xscale("log")
    if "y" in log:
        axes.set_yscale("log")
    return figure, axes


def key(axes: "Axes") -> None:
    """Write what was labelled in one row above the axes, where it covers no data."""
    renderer = axes.figure.canvas.get_renderer()  # type: ignore[attr-defined]
    place, width = 0.0, axes.get_window_extent().width
    for handle, label in zip(*axes.get_legend_handles_labels(), strict=True):
        sign, colour = _sign(handle)
        text = axes.text(
            place, 1.03, f"{sign} {label}", transform=axes.transAxes, color=colour, fontsize=8
        )
        place += text.get_window_extent(renderer).width / width + 0.035


def _sign(handle: Any) -> tuple[str, Any]:
    """Return a sign and a colour that stand for what was drawn."""
    from matplotlib.collections import LineCollection  # noqa: PLC0415 - heavy to import
    from matplotlib.lines import Line2D  # noqa: PLC0415

    drawn = handle[0] if isinstance(handle, tuple) else handle  # the first of bars, or a bar's dot
    if isinstance(drawn, Line2D):
        return _sign_of_line(drawn), drawn.get_color()
    fill = drawn.get_color() if isinstance(drawn, LineCollection) else drawn.get_facecolor()
    return "\N{BLACK RECTANGLE}", np.ravel(fill)[:3].tolist()


def _sign_of_line(line: "Line2D") -> str:
    if line.get_marker() == "o":
        return "\N{WHITE CIRCLE}" if line.get_markerfacecolor() == "none" else "\N{BLACK CIRCLE}"
    if line.get_marker() == "s":
        return "\N{BLACK SQUARE}"
    return "\N{EN DASH}\N{EN DASH}" if line.is_dashed() else "\N{EM DASH}"


def length_unit(span_um: float) -> tuple[str, float]:
    """Return the unit to label an axis of positions with, and how many micrometres it has.

    Examples
    --------
    >>> length_unit(500.0), length_unit(1.5e5)
    (('µm', 1.0), ('mm', 1000.0))
    """
    return ("mm", 1000.0) if span_um > 2e4 else ("µm", 1.0)


def log_ticks(axes: "Axes", which: str) -> None:
    """Label a logarithmic axis with plain numbers, as many as it takes to read it."""
    from matplotlib.ticker import FuncFormatter, LogLocator, NullLocator  # noqa: PLC0415

    axis = axes.xaxis if which == "x" else axes.yaxis
    low, high = sorted(axis.get_view_interval())
    decades = log10(high / low)
    subs: tuple[float, ...] = (1.0, 2.0, 5.0) if decades < 2.2 else (1.0,)
    if decades < 0.7:
        subs = (1.0, 1.5, 2.0, 3.0, 4.0, 5.0, 7.0)
    axis.set_major_locator(LogLocator(subs=subs, numticks=8))
    axis.set_major_formatter(FuncFormatter(lambda value, _: readable(value)))
    axis.set_minor_locator(NullLocator())


def readable(value: Any, digits: int = 3, *, zeros: bool = False) -> str:
    r"""Return a number for reading: plain from 0.001 to 100,000, else with a power of ten.

    Integers are written in full. `zeros` keeps those that end a number which is not whole, as
    beside its interval.

    Examples
    --------
    >>> readable(1234.5), readable(0.02468), readable(12)
    ('1,234', '0.0247', '12')
    >>> readable(2.9), readable(2.9, zeros=True), readable(4, zeros=True)
    ('2.9', '2.90', '4')
    >>> readable(4.07e9).encode("ascii", "backslashreplace")
    b'4.07 \\xd7 10\\u2079'
    """
    if value is None or not isfinite(value):
        return "\N{EN DASH}"
    if value == 0:
        return "0"
    if isinstance(value, int):
        return f"{value:,}".replace("-", _MINUS)
    power = floor(log10(abs(float(f"{value:.{digits - 1}e}"))))
    if -4 < power < 5:
        decimals = 0 if value == int(value) else max(0, digits - 1 - power)
        text = f"{value:,.{decimals}f}"
        short = text.rstrip("0").rstrip(".") if decimals and not zeros else text
        return short.replace("-", _MINUS)
    raised = f"10{str(power).translate(_SUPERSCRIPT)}"
    mantissa = f"{value / 10.0**power:.{digits - 1}f}"
    mantissa = mantissa if zeros else mantissa.rstrip("0").rstrip(".")
    if mantissa in ("1", "-1"):
        return f"{mantissa[:-1]}{raised}".replace("-", _MINUS)
    return f"{mantissa} \N{MULTIPLICATION SIGN} {raised}".replace("-", _MINUS)


def png_bytes(figure: "Figure", *, colours: Literal["few", "grey", "all"]) -> bytes:
    """Return the figure as PNG without date or version: the same bytes each time.

    A chart needs few colours (256 that are chosen from it) and then takes a third of the bytes; so
    do pictures that would be too large for the page in all colours.
    """
    from PIL import Image  # noqa: PLC0415 - comes with matplotlib

    figure.canvas.draw()
    buffer = np.asarray(figure.canvas.buffer_rgba())  # type: ignore[attr-defined]
    pixels = Image.fromarray(buffer[..., :3].copy())
    if colours == "few":
        return _saved(_with_few_colours(pixels))
    png = _saved(pixels.convert("L") if colours == "grey" else pixels)
    return png if len(png) <= _MOST_BYTES else _saved(_with_few_colours(pixels))


def _with_few_colours(pixels: "Image") -> "Image":
    from PIL.Image import Dither, Quantize  # noqa: PLC0415 - comes with matplotlib

    few = pixels.quantize(256, method=Quantize.FASTOCTREE, dither=Dither.NONE)
    # The mean colour of the octree's lightest cell is not quite the page's white.
    few.putpalette([255 if level > 250 else level for level in few.getpalette() or []])
    return few


def _saved(pixels: "Image") -> bytes:
    out = io.BytesIO()
    pixels.save(out, format="PNG", compress_level=3)
    return out.getvalue()
