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

__all__ = [
    "BLUE", "GREEN", "INK", "ORANGE", "RULE", "SOFT", "blank", "chart", "length_unit", "log_ticks",
    "own_settings", "png_bytes", "readable",
]  # fmt: skip

# Okabe & Ito 2008, Color Universal Design: told apart with every common colour vision.
BLUE, ORANGE, GREEN = "#0072B2", "#D55E00", "#009E73"
INK, SOFT, RULE = "#1d2326", "#525c62", "#d5dadd"
_DPI = 120
_MINUS = "\N{MINUS SIGN}"
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")


@contextmanager
def own_settings() -> Iterator[None]:
    """Draw with matplotlib's own defaults, whatever the user's configuration file says."""
    from matplotlib import rc_context, rcParamsDefault  # noqa: PLC0415 - heavy to import

    kept = {k: v for k, v in rcParamsDefault.items() if not k.startswith("backend")}
    with rc_context(kept):
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
    axes = figure.add_axes((0.17, 0.16, 0.8, 0.73))
    # Fixed places spare matplotlib the search for some that clear everything else.
    axes.set_title(title, fontsize=9.5, loc="left", color=INK, y=1.02)
    axes.set_xlabel(x, fontsize=9, color=INK)
    axes.xaxis.set_label_coords(0.5, -0.115)
    axes.set_ylabel(y, fontsize=9, color=INK)
    axes.yaxis.set_label_coords(-0.15, 0.5)
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(SOFT)
    axes.tick_params(which="both", colors=SOFT, labelcolor=INK, labelsize=8.5)
    axes.set_axisbelow(True)
    axes.grid(visible=True, color="#e9ecee", linewidth=0.7)
    if "x" in log:
        axes.set_xscale("log")
    if "y" in log:
        axes.set_yscale("log")
    return figure, axes


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

    A chart needs few colours (256 that are chosen from it) and then takes a third of the bytes.
    """
    from PIL import Image  # noqa: PLC0415 - comes with matplotlib

    figure.canvas.draw()
    pixels = Image.fromarray(np.asarray(figure.canvas.buffer_rgba())[..., :3].copy())  # type: ignore[attr-defined]
    if colours == "few":
        pixels = pixels.quantize(256, method=Image.Quantize.FASTOCTREE, dither=Image.Dither.NONE)
        # The mean colour of the octree's lightest cell is not quite the page's white.
        pixels.putpalette([255 if level > 250 else level for level in pixels.getpalette() or []])
    if colours == "grey":
        pixels = pixels.convert("L")
    out = io.BytesIO()
    pixels.save(out, format="PNG", compress_level=3)
    return out.getvalue()
