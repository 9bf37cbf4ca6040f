"""The image seen along z, y and x, bare and with the graph over it at true vessel width."""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np

from ..network.graph import NODE_KINDS, CentrelineGraph
from .canvas import INK, ORANGE, RULE, SOFT, blank, length_unit, readable
from .content import ReportContent

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

__all__ = ["MOST_SEGMENTS", "image_views", "shown_segments"]

_WIDTH_IN, _LEFT_IN, _RIGHT_IN, _TOP_IN, _BOTTOM_IN, _GAP_IN = 9.2, 0.62, 0.1, 0.28, 0.8, 0.1
_MOST_HEIGHT_IN = 11.0
MOST_SEGMENTS = 12_000
_MOST_POINTS = 60_000
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
    drawn = _drawn(content.graph) if with_graph else None
    if drawn is not None and not len(drawn.segments):
        return "no segment has a radius"
    box = _box(content)
    figure = blank(_WIDTH_IN, box.height_in)
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
    from matplotlib.ticker import MaxNLocator, NullLocator  # noqa: PLC0415 - heavy to import

    across, down = _VIEWS[view]
    unit, um = length_unit(float(box.size_um.max()))
    high = box.low_um + box.size_um
    axes.set_xlim(box.low_um[across], high[across])
    axes.set_ylim(high[down], box.low_um[down])
    axes.grid(visible=False)
    for axis, k, labelled in ((axes.xaxis, across, view != "z"), (axes.yaxis, down, view != "x")):
        if not labelled:
            axis.set_major_locator(NullLocator())
            continue
        axis.set_major_locator(MaxNLocator(nbins=max(1, int(box.size_um[k] * box.scale / 0.7))))
        axis.set_major_formatter(lambda value, _: readable(value / um, 4))
    # Fixed places spare matplotlib the search for some that clear the numbers.
    if view != "z":
        axes.set_xlabel(f"{'zyx'[across]} in {unit}")
        axes.xaxis.set_label_coords(0.5, -0.26 / float(box.size_um[down] * box.scale))
    if view != "x":
        axes.set_ylabel(f"{'zyx'[down]} in {unit}")
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
class _Drawn:
    """The segments that are drawn, wide ones first: mean radius, and where their points start."""

    segments: np.ndarray
    radius_um: np.ndarray
    points: np.ndarray
    starts: np.ndarray


def _drawn(graph: CentrelineGraph) -> _Drawn:
    """Choose the segments, and no more of their points than a picture can show."""
    segments = shown_segments(graph, MOST_SEGMENTS)
    start, per = graph.point_offsets[segments], graph.points_per_segment[segments]
    every = max(1, int(np.ceil(int(per.sum()) / _MOST_POINTS)))
    counts = (per - 2) // every + 2
    starts = np.concatenate(([0], np.cumsum(counts))).astype(np.int64)
    owner = np.repeat(np.arange(len(segments)), counts)
    within = np.arange(len(owner)) - starts[owner]
    last = within == counts[owner] - 1
    points = start[owner] + np.where(last, per[owner] - 1, within * every)
    return _Drawn(segments, graph.segment_radius_um()[segments], points, starts)


def shown_segments(graph: CentrelineGraph, most: int) -> np.ndarray:
    """Return the segments with a radius, the widest first, at most so many."""
    radius = graph.segment_radius_um()
    order = np.argsort(-np.nan_to_num(radius), kind="stable")
    known: np.ndarray = order[np.isfinite(radius[order])]
    return known[:most]


def _vessels(axes: "Axes", view: str, content: ReportContent, drawn: _Drawn) -> None:
    """Draw each vessel as a light band between its two sides; many vessels as finer ones."""
    from matplotlib.collections import LineCollection, PolyCollection  # noqa: PLC0415

    left, right = _sides(content.graph, view, drawn)
    colours = _colours(drawn.radius_um, dark=bool(content.projections))
    many = len(drawn.segments) > 800
    faces = colours.copy()
    faces[:, 3] = 0.12 if many else 0.25
    bands = [np.concatenate([a, b[::-1]]) for a, b in zip(left, right, strict=True)]
    axes.add_collection(PolyCollection(bands, facecolors=faces, edgecolors="none"))
    resolved = content.graph.segment_resolved[drawn.segments]
    for chosen, style in ((resolved, "solid"), (~resolved, (0, (2, 1.5)))):
        picked = np.flatnonzero(chosen).tolist()
        if picked:
            lines = [side[k] for k in picked for side in (left, right)]
            edges = np.repeat(colours[picked], 2, axis=0)
            axes.add_collection(
                LineCollection(
                    lines, colors=edges, linewidths=0.6 if many else 1.0, linestyles=[style]
                )
            )
    _nodes(axes, view, content)


def _sides(
    graph: CentrelineGraph, view: str, drawn: _Drawn
) -> tuple[list[np.ndarray], list[np.ndarray]]:
    """Return each vessel's two sides: its centreline's projection, a radius to either side.

    A vessel along the line of sight has no such sides; it is a disc.
    """
    across, down = _VIEWS[view]
    line = graph.point_position_um[drawn.points][:, [across, down]]
    first, last = drawn.starts[:-1], drawn.starts[1:] - 1
    counts = np.diff(drawn.starts)
    radius = graph.point_radius_um[drawn.points]
    radius = np.where(np.isfinite(radius), radius, np.repeat(drawn.radius_um, counts))
    step = np.linalg.norm(np.diff(line, axis=0, prepend=line[:1]), axis=1)
    step[first] = 0.0
    tangent = _tangents(line, step, radius, np.repeat(first, counts), np.repeat(last, counts))
    side = radius[:, None] * tangent[:, ::-1] * (-1.0, 1.0)
    left, right = (np.split(s, drawn.starts[1:-1]) for s in (line + side, line - side))
    seen = np.add.reduceat(step, first) if len(first) else step
    turn = np.linspace(0, np.pi, 13)
    half = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    for k in np.flatnonzero(seen < 2 * drawn.radius_um).tolist():
        middle = line[first[k] : last[k] + 1].mean(axis=0)
        left[k] = middle + drawn.radius_um[k] * half
        right[k] = middle + drawn.radius_um[k] * half * (1.0, -1.0)
    return left, right


def _tangents(
    line: np.ndarray, step: np.ndarray, radius: np.ndarray, first: np.ndarray, last: np.ndarray
) -> np.ndarray:
    """Return directions over a radius of length to either side, so that short turns do not show.

    `first` and `last` are each point's segment's end points.
    """
    arc, here = np.cumsum(step), np.arange(len(line))
    before = np.searchsorted(arc, arc - radius)
    before = np.clip(before, first, np.maximum(here - 1, first))
    after = np.searchsorted(arc, arc + radius, side="right") - 1
    after = np.clip(after, np.minimum(here + 1, last), last)
    tangent = line[after] - line[before]
    length = np.linalg.norm(tangent, axis=1, keepdims=True)
    return np.divide(tangent, length, out=np.zeros_like(tangent), where=length > 0)


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


def _legend(figure: "Figure", box: _Box, content: ReportContent, drawn: _Drawn) -> None:
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
    bar.outline.set_edgecolor(RULE)
    figure.text(0.61, 0.38 / tall, "radius in µm", ha="right", va="center", fontsize=9)
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
