"""The image seen along z, y and x, bare and with the graph over it at true vessel width."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..network.graph import NODE_KINDS, CentrelineGraph
from .canvas import INK, ORANGE, RULE, SOFT, blank, length_unit, readable
from .content import ReportContent

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["image_views", "outlines", "shown_segments"]

_WIDTH_IN, _LEFT_IN, _RIGHT_IN, _TOP_IN, _BOTTOM_IN, _GAP_IN = 9.2, 0.62, 0.1, 0.28, 0.8, 0.1
_MOST_HEIGHT_IN = 11.0
_MOST_SEGMENTS = 12_000
_MOST_POINTS = 120_000
_MOST_DOTS = 600
# Axis of view, then the axes across and down.
_VIEWS = {"z": (2, 1), "y": (2, 0), "x": (0, 1)}


@dataclass(frozen=True, slots=True)
class _Box:
    """Where the three views lie on the sheet: extent in um, scale in inches per um."""

    low_um: np.ndarray
    size_um: np.ndarray
    scale: float

    @property
    def height_in(self) -> float:
        tall = (self.size_um[1] + self.size_um[0]) * self.scale
        return float(tall) + _TOP_IN + _BOTTOM_IN + _GAP_IN

    def place(self, view: str) -> tuple[float, float, float, float]:
        """Return left, bottom, width, height of a view as shares of the sheet."""
        z, y, x = self.size_um * self.scale
        width, height = {"z": (x, y), "y": (x, z), "x": (z, y)}[view]
        left = _LEFT_IN + (x + _GAP_IN if view == "x" else 0.0)
        bottom = _BOTTOM_IN + (0.0 if view == "y" else z + _GAP_IN)
        tall = self.height_in
        return left / _WIDTH_IN, bottom / tall, width / _WIDTH_IN, height / tall


def image_views(content: ReportContent, *, with_graph: bool) -> "Figure | str":
    """Draw the three projections on one scale: along z, along y below it, along x beside it.

    Parameters
    ----------
    content : ReportContent
        Without projections, the graph is drawn on white.
    with_graph : bool
        Draw each vessel's outline at its measured width, coloured by radius.

    Returns
    -------
    Figure or str
        The reason where there is nothing to show.
    """
    if not content.projections and not with_graph:
        return "there is no image: the input was a graph"
    if not content.graph.n_segments:
        return "the graph has no segment"
    box = _box(content)
    figure = blank(_WIDTH_IN, box.height_in)
    drawn = outlines(content.graph) if with_graph else None
    for view in _VIEWS:
        axes = figure.add_axes(box.place(view))
        _frame(axes, view, box)
        _image(axes, view, content)
        _name(axes, view, box, content)
        if drawn is not None:
            _vessels(axes, view, content, drawn)
    if drawn is not None:
        _legend(figure, box, content, drawn)
    return figure


def _box(content: ReportContent) -> _Box:
    graph, images = content.graph, content.projections
    spacing = np.asarray(graph.spacing_um)
    if len(images) == len(_VIEWS) and spacing.all():
        shape = np.array([images["y"].shape[0], *images["z"].shape])
        low, size = -0.5 * spacing, shape * spacing
    else:
        margin = float(np.nanmax(np.append(graph.point_radius_um, 0.0)))
        low = graph.point_position_um.min(axis=0) - margin
        size = graph.point_position_um.max(axis=0) + margin - low
    size = np.maximum(size, 1e-3 * max(float(size.max()), 1e-9))
    room = _WIDTH_IN - _LEFT_IN - _RIGHT_IN - _GAP_IN
    tall = _MOST_HEIGHT_IN - _TOP_IN - _BOTTOM_IN - _GAP_IN
    scale = min(room / (size[2] + size[0]), tall / (size[1] + size[0]))
    return _Box(low, size, float(scale))


def _frame(axes: "Axes", view: str, box: _Box) -> None:
    """Set limits to the volume, y and z downwards as in an image, and label the outer sides."""
    from matplotlib.ticker import MaxNLocator  # noqa: PLC0415 - heavy to import

    across, down = _VIEWS[view]
    unit, um = length_unit(float(box.size_um.max()))
    high = box.low_um + box.size_um
    axes.set_xlim(box.low_um[across], high[across])
    axes.set_ylim(high[down], box.low_um[down])
    for spine in axes.spines.values():
        spine.set_color(RULE)
    axes.tick_params(colors=SOFT, labelcolor=INK, labelsize=8)
    for axis, k in ((axes.xaxis, across), (axes.yaxis, down)):
        axis.set_major_locator(MaxNLocator(nbins=max(1, int(box.size_um[k] * box.scale / 0.7))))
        axis.set_major_formatter(lambda value, _: readable(value / um, 4))
    axes.tick_params(labelbottom=view != "z", labelleft=view != "x")
    # Fixed places spare matplotlib the search for some that clear the numbers.
    if view != "z":
        axes.set_xlabel(f"{'zyx'[across]} in {unit}", fontsize=8.5, color=INK)
        axes.xaxis.set_label_coords(0.5, -0.26 / float(box.size_um[down] * box.scale))
    if view != "x":
        axes.set_ylabel(f"{'zyx'[down]} in {unit}", fontsize=8.5, color=INK)
        axes.yaxis.set_label_coords(-0.42 / float(box.size_um[across] * box.scale), 0.5)


def _name(axes: "Axes", view: str, box: _Box, content: ReportContent) -> None:
    across, down = _VIEWS[view]
    if min(box.size_um[across], box.size_um[down]) * box.scale > 0.6:
        axes.text(
            0.06 / (box.size_um[across] * box.scale), 1 - 0.07 / (box.size_um[down] * box.scale),
            f"along {view}", transform=axes.transAxes, va="top", fontsize=8.5, zorder=6,
            color="white" if content.projections else SOFT,
        )  # fmt: skip


def _image(axes: "Axes", view: str, content: ReportContent) -> None:
    """Show a projection, resampled here to the sheet's own pixels: that is many times faster."""
    from PIL import Image  # noqa: PLC0415 - comes with matplotlib

    image = content.projections.get(view)
    if image is None:
        return
    axes.set_facecolor("black")
    across, down = _VIEWS[view]
    spacing = content.graph.spacing_um
    seen = image.T if view == "x" else image  # stored as (z, y), seen as (y, z)
    rows, columns = seen.shape
    dark, bright = np.percentile(image, [1, 99.7])
    grey = np.clip((seen - dark) / max(bright - dark, 1e-9), 0, 1)
    frame = axes.get_window_extent()
    size = (max(1, round(frame.width)), max(1, round(frame.height)))
    pixels = Image.fromarray(np.rint(255 * grey).astype(np.uint8)).resize(
        size, Image.Resampling.BOX
    )
    edges = (
        -0.5 * spacing[across], (columns - 0.5) * spacing[across],
        (rows - 0.5) * spacing[down], -0.5 * spacing[down],
    )  # fmt: skip
    axes.imshow(pixels.convert("RGB"), extent=edges, aspect="auto", interpolation="nearest")


@dataclass(frozen=True, slots=True)
class _Outlines:
    """The segments that are drawn, wide ones first, and their points."""

    segments: np.ndarray
    radius_um: np.ndarray
    points: list[np.ndarray]


def outlines(graph: CentrelineGraph) -> _Outlines:
    """Choose the segments to draw, and at most as many of their points as a picture can show."""
    segments = shown_segments(graph, _MOST_SEGMENTS)
    radius = graph.segment_radius_um()[segments]
    total = int(graph.points_per_segment[segments].sum())
    every = max(1, int(np.ceil(total / _MOST_POINTS)))
    points = []
    for segment in segments.tolist():
        whole = graph.points_of(segment)
        index = np.arange(whole.start, whole.stop, every)
        points.append(index if index[-1] == whole.stop - 1 else np.append(index, whole.stop - 1))
    return _Outlines(segments, radius, points)


def shown_segments(graph: CentrelineGraph, most: int) -> np.ndarray:
    """Return the segments with a radius, the widest first, at most so many."""
    radius = graph.segment_radius_um()
    order = np.argsort(-np.nan_to_num(radius), kind="stable")
    known: np.ndarray = order[np.isfinite(radius[order])]
    return known[:most]


def _vessels(axes: "Axes", view: str, content: ReportContent, drawn: _Outlines) -> None:
    from matplotlib.collections import PolyCollection  # noqa: PLC0415 - heavy to import

    graph = content.graph
    resolved = graph.segment_resolved[drawn.segments]
    shapes = list(_shapes(graph, view, drawn))
    colours = _colours(drawn.radius_um, dark=bool(content.projections))
    for chosen, style in ((resolved, "solid"), (~resolved, (0, (2, 1.5)))):
        picked = np.flatnonzero(chosen)
        if not len(picked):
            continue
        faces = colours[picked].copy()
        faces[:, 3] = 0.22
        axes.add_collection(
            PolyCollection(
                [shapes[k] for k in picked], facecolors=faces, edgecolors=colours[picked],
                linewidths=0.9, linestyles=[style],
            )
        )  # fmt: skip
    _nodes(axes, view, content)


def _shapes(graph: CentrelineGraph, view: str, drawn: _Outlines) -> Iterator[np.ndarray]:
    """Yield each vessel's outline: its centreline's projection, a radius to either side."""
    across, down = _VIEWS[view]
    turn = np.linspace(0, 2 * np.pi, 24, endpoint=False)
    disc = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    for index, mean_um in zip(drawn.points, drawn.radius_um.tolist(), strict=True):
        line = graph.point_position_um[index][:, [across, down]]
        radius = graph.point_radius_um[index]
        radius = np.where(np.isfinite(radius), radius, mean_um)
        if np.linalg.norm(np.diff(line, axis=0), axis=1).sum() < mean_um:
            yield line.mean(axis=0) + mean_um * disc  # it runs along the line of sight
            continue
        tangent = np.gradient(line, axis=0)
        length = np.linalg.norm(tangent, axis=1, keepdims=True)
        tangent = np.divide(tangent, length, out=np.zeros_like(tangent), where=length > 0)
        side = radius[:, None] * tangent[:, ::-1] * (-1.0, 1.0)
        yield np.concatenate([line + side, (line - side)[::-1]])


def _colours(radius_um: np.ndarray, *, dark: bool) -> np.ndarray:
    """(n, 4) colours, logarithmic in radius: bright ones on a dark image, dark ones on white."""
    norm, palette = _scale(radius_um, dark=dark)
    return np.asarray(palette(norm(radius_um)))


def _scale(radius_um: np.ndarray, *, dark: bool) -> tuple[Any, Any]:
    from matplotlib import colormaps  # noqa: PLC0415 - heavy to import
    from matplotlib.colors import ListedColormap, LogNorm  # noqa: PLC0415

    ends = (0.3, 1.0) if dark else (0.0, 0.85)
    palette = ListedColormap(colormaps["viridis"](np.linspace(*ends, 256)))
    low, high = np.percentile(radius_um, [1, 99]) if len(radius_um) else (1.0, 2.0)
    return LogNorm(max(low * 0.98, 1e-9), max(high * 1.02, 1e-9), clip=True), palette


def _nodes(axes: "Axes", view: str, content: ReportContent) -> None:
    across, down = _VIEWS[view]
    graph = content.graph
    ink = "white" if content.projections else INK
    junctions = np.flatnonzero(graph.node_degree() >= 3)
    if len(junctions) <= _MOST_DOTS:
        place = graph.node_position_um[junctions]
        axes.plot(place[:, across], place[:, down], "o", color=ink, markersize=1.8)
    inlets = graph.node_position_um[graph.node_kind == NODE_KINDS.index("inlet")]
    axes.plot(
        inlets[:, across], inlets[:, down], "s", color=ORANGE, markersize=6,
        markeredgecolor=ink, markeredgewidth=0.8, clip_on=False, zorder=5,
    )  # fmt: skip


def _legend(figure: "Figure", box: _Box, content: ReportContent, drawn: _Outlines) -> None:
    """Explain colour and marks in the free strip below the views."""
    from matplotlib.cm import ScalarMappable  # noqa: PLC0415 - heavy to import
    from matplotlib.lines import Line2D  # noqa: PLC0415

    tall = box.height_in
    axes = figure.add_axes((0.62, 0.33 / tall, 0.36, 0.1 / tall))
    norm, palette = _scale(drawn.radius_um, dark=bool(content.projections))
    bar = figure.colorbar(ScalarMappable(norm, palette), cax=axes, orientation="horizontal")
    ticks = np.geomspace(norm.vmin, norm.vmax, 5)
    bar.set_ticks(ticks.tolist(), labels=[readable(t, 2) for t in ticks], minor=False)
    bar.ax.minorticks_off()
    bar.ax.tick_params(labelsize=8, colors=SOFT, labelcolor=INK)
    bar.outline.set_edgecolor(RULE)
    figure.text(0.61, 0.38 / tall, "radius in µm", ha="right", va="center", fontsize=8.5, color=INK)
    marks: list[Any] = [
        Line2D([], [], marker="s", color=ORANGE, linestyle="", markersize=6, label="inlet")
    ]
    if not content.graph.segment_resolved[drawn.segments].all():
        dashed: Any = (0, (2, 1.5))
        marks.append(
            Line2D([], [], color=SOFT, linewidth=0.9, linestyle=dashed, label="too thin to size")
        )
    figure.legend(
        handles=marks, loc="lower left", bbox_to_anchor=(0.05, 0.02 / tall), ncols=2, fontsize=8.5,
        frameon=False, handletextpad=0.4, borderpad=0.1,
    )  # fmt: skip
