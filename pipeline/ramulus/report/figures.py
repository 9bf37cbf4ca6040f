"""The report's figures as PNG bytes, the same bytes for the same results."""

import io
from typing import TYPE_CHECKING, Any

import numpy as np

if TYPE_CHECKING:
    from matplotlib.figure import Figure

    from ..line import Results

__all__ = ["figures"]

_INK, _QUIET, _ACCENT, _SECOND = "#1f2933", "#7b8794", "#0b6e99", "#c05621"
_DPI = 110
_MOST_SEGMENTS = 20_000


def figures(results: "Results", summary: dict[str, Any]) -> dict[str, bytes]:
    """Return the figures by file name; one that has nothing to show is left out."""
    made: dict[str, Figure | None] = {
        "projections.png": _projections(results),
        "radii.png": _radii(results, summary),
        "orders.png": _orders(results),
        "cube_law.png": _cube_law(results, summary),
        "flow.png": _flow(results),
        "planes.png": _planes(results),
    }
    return {name: _png(figure) for name, figure in made.items() if figure is not None}


def _new(width: float, height: float, columns: int = 1) -> tuple["Figure", list[Any]]:
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415 - heavy to import
    from matplotlib.figure import Figure  # noqa: PLC0415

    figure = Figure(figsize=(width, height), dpi=_DPI, layout="constrained")
    FigureCanvasAgg(figure)
    axes = [figure.add_subplot(1, columns, k + 1) for k in range(columns)]
    for axis in axes:
        axis.spines[["top", "right"]].set_visible(False)  # noqa: FBT003
        axis.spines[["left", "bottom"]].set_color(_QUIET)
        axis.tick_params(colors=_INK, labelsize=8)
    return figure, axes


def _png(figure: "Figure") -> bytes:
    out = io.BytesIO()
    figure.savefig(out, format="png", metadata={"Software": None})
    return out.getvalue()


def _projections(results: "Results") -> "Figure | None":
    """The image and the image with the graph over it at true width, seen along z, y and x."""
    from matplotlib.collections import LineCollection  # noqa: PLC0415 - heavy to import

    graph = results.graph
    extent = np.asarray(graph.extent_um)
    if not graph.n_segments:
        return None
    low = np.zeros(3) if extent.any() else graph.point_position_um.min(axis=0)
    high = extent if extent.any() else graph.point_position_um.max(axis=0)
    views = [("z", 1, 2), ("y", 0, 2), ("x", 0, 1)]
    heights = [max(high[a] - low[a], 1e-9) / max(high[b] - low[b], 1e-9) for _, a, b in views]
    keep = [k for k in range(3) if heights[k] > 0.08]
    width = 10.5
    figure, _ = _new(width, float(np.clip(sum(min(heights[k], 1.6) for k in keep) * width / 2 + 0.6, 3, 22)), 1)
    figure.clear()
    grid = figure.add_gridspec(len(keep), 2, height_ratios=[min(heights[k], 1.6) for k in keep])
    lines, sizes = _thick_lines(graph)
    radius = np.nan_to_num(graph.point_radius_um)
    top = float(np.percentile(radius[radius > 0], 98)) if (radius > 0).any() else 1.0
    for row, k in enumerate(keep):
        name, a, b = views[k]
        for column in (0, 1):
            axis = figure.add_subplot(grid[row, column])
            axis.set_facecolor("black")
            image = results.projections.get(name)
            half_a, half_b = 0.5 * graph.spacing_um[a], 0.5 * graph.spacing_um[b]
            if image is not None:
                dark, bright = np.percentile(image, [1, 99.7])
                box = (low[b] - half_b, high[b] - half_b, high[a] - half_a, low[a] - half_a)
                axis.imshow(image, cmap="gray", vmin=dark, vmax=max(bright, dark + 1e-9), extent=box, interpolation="nearest", aspect="equal")
            axis.set_xlim(low[b] - half_b, high[b] - half_b)
            axis.set_ylim(high[a] - half_a, low[a] - half_a)
            axis.set_aspect("equal")
            axis.tick_params(labelsize=7)
            axis.set_xlabel(f"{'zyx'[b]} in um", fontsize=8)
            axis.set_ylabel(f"{'zyx'[a]} in um", fontsize=8)
            if column == 1:
                drawn = LineCollection(
                    [line[:, [b, a]] for line in lines], array=sizes, cmap="viridis", clim=(0, top),
                    alpha=0.75, capstyle="round",
                )  # fmt: skip
                axis.add_collection(drawn)
                figure.canvas.draw_idle()
                drawn.set_linewidths(_widths(axis, figure, sizes, high[b] - low[b], width / 2))
                if row == 0:
                    bar = figure.colorbar(drawn, ax=axis, fraction=0.035, pad=0.01)
                    bar.set_label("radius in um", fontsize=8)
                    bar.ax.tick_params(labelsize=7)
                nodes = graph.node_position_um[graph.node_degree() >= 3]
                axis.plot(nodes[:, b], nodes[:, a], ".", color="#f6ad55", markersize=2.5)
            axis.set_title(f"along {name}" + ("" if column == 0 else ", with the graph"), fontsize=9, loc="left")
    return figure


def _widths(axis: Any, figure: "Figure", sizes: np.ndarray, span_um: float, inches: float) -> np.ndarray:
    """Line widths in points that show the true diameters."""
    del axis, figure
    points_per_um = inches * 0.8 * 72 / max(span_um, 1e-9)
    return np.maximum(2 * sizes * points_per_um, 0.4)


def _thick_lines(graph: Any) -> tuple[list[np.ndarray], np.ndarray]:
    """Pieces of the centrelines with their mean radius; long graphs are thinned."""
    every = max(1, graph.n_segments // _MOST_SEGMENTS)
    pieces, sizes = [], []
    for segment in range(0, graph.n_segments, every):
        points = graph.points_of(segment)
        line, radius = graph.point_position_um[points], np.nan_to_num(graph.point_radius_um[points])
        cut = max(2, min(len(line), 8 if graph.n_segments < 2000 else len(line)))
        for start in range(0, len(line) - 1, cut - 1):
            pieces.append(line[start : start + cut])
            sizes.append(float(radius[start : start + cut].mean()))
    return pieces, np.array(sizes)


def _radii(results: "Results", summary: dict[str, Any]) -> "Figure | None":
    graph = results.graph
    radius = graph.point_radius_um
    use = np.isfinite(radius) & ~graph.point_in_zone
    if not use.any():
        return None
    figure, (axis, second) = _new(9, 3, 2)
    weight = graph.point_weight_um()
    edges = np.geomspace(max(radius[use].min() * 0.98, 1e-6), radius[use].max() * 1.02, 31)
    axis.hist(radius[use], bins=edges, weights=weight[use] / 1000, color=_ACCENT)
    axis.set_xscale("log")
    axis.set_xlabel("radius in um", fontsize=8)
    axis.set_ylabel("length in mm", fontsize=8)
    limit = summary.get("smallest_resolved_radius_um")
    if limit:
        axis.axvline(limit, color=_SECOND, linewidth=1.2)
        axis.set_title("vertical line: the smallest radius that this image can size", fontsize=8, loc="left", color=_SECOND)
    both = use & np.isfinite(graph.point_radius_map_um)
    if both.any():
        pick = np.flatnonzero(both)[:: max(1, int(both.sum()) // 4000)]
        second.plot(radius[pick], graph.point_radius_map_um[pick], ".", color=_ACCENT, markersize=2, alpha=0.4)
        top = float(radius[pick].max())
        second.plot([0, top], [0, top], color=_QUIET, linewidth=1)
        second.set_xlabel("radius from the grey values in um", fontsize=8)
        second.set_ylabel("distance map's radius in um", fontsize=8)
    else:
        second.set_axis_off()
    return figure


def _orders(results: "Results") -> "Figure | None":
    table = results.tables["orders"]
    if len(table) < 2:
        return None
    figure, axes = _new(11, 2.8, 4)
    panels = (
        ("n_elements", "elements"), ("diameter_um_mean", "diameter in um"),
        ("element_length_um_mean", "element length in um"), ("cross_section_um2", "total cross-section in um2"),
    )  # fmt: skip
    order = table["order"].to_numpy(dtype=float)
    for axis, (column, label) in zip(axes, panels, strict=True):
        value = table[column].to_numpy(dtype=float)
        axis.plot(order, value, "o", color=_ACCENT, markersize=4)
        use = np.isfinite(value) & (value > 0)
        if use.sum() >= 2 and column != "cross_section_um2":
            slope, start = np.polyfit(order[use], np.log10(value[use]), 1)
            axis.plot(order, 10 ** (start + slope * order), color=_SECOND, linewidth=1)
            axis.set_title(f"ratio {10 ** abs(slope):.3g}", fontsize=8, loc="left", color=_SECOND)
        axis.set_yscale("log")
        axis.set_xlabel("order (diameter-defined)", fontsize=8)
        axis.set_ylabel(label, fontsize=8)
        axis.set_xticks(order)
    return figure


def _cube_law(results: "Results", summary: dict[str, Any]) -> "Figure | None":
    table = results.tables["junctions"]
    table = table[table["cube_residual"].notna()] if len(table) else table
    if not len(table):
        return None
    figure, (axis, second) = _new(9, 3.4, 2)
    parent = table["parent_radius_um"].to_numpy(dtype=float) ** 3
    total = parent * (1 + table["cube_residual"].to_numpy(dtype=float))
    used = table["used"].to_numpy(dtype=bool)
    axis.plot(parent[used], total[used], "o", color=_ACCENT, markersize=4, alpha=0.8, label="used")
    axis.plot(parent[~used], total[~used], "o", markerfacecolor="none", color=_QUIET, markersize=4, label="not used")
    span = np.array([parent.min() * 0.8, parent.max() * 1.25])
    axis.plot(span, span, color=_INK, linewidth=1, label="exponent 3")
    fitted = summary["junction_exponent"]
    if fitted["value"]:
        # Equal daughters under exponent g carry 2**(1 - 3 / g) of the parent's cube.
        factor = [2 ** (1 - 3 / max(g, 0.1)) for g in (fitted["value"], fitted["low"], fitted["high"])]
        axis.plot(span, factor[0] * span, color=_SECOND, linewidth=1, label=f"exponent {fitted['value']:.2f} (equal daughters)")
        axis.fill_between(span, factor[1] * span, factor[2] * span, color=_SECOND, alpha=0.15, linewidth=0)
    axis.set_xscale("log")
    axis.set_yscale("log")
    axis.set_xlabel("cube of the parent's radius in um3", fontsize=8)
    axis.set_ylabel("sum of the daughters' cubes in um3", fontsize=8)
    axis.legend(fontsize=7, frameon=False)
    segments = results.tables["segments"]
    order = segments["order"].to_numpy()[table["parent_segment"].to_numpy(dtype=int)]
    jitter = (np.arange(len(order)) % 7 - 3) * 0.04
    second.axhline(0, color=_INK, linewidth=1)
    second.plot(order[used] + jitter[used], table["cube_residual_log"].to_numpy(dtype=float)[used], "o", color=_ACCENT, markersize=3.5, alpha=0.7)
    second.set_xlabel("order of the parent", fontsize=8)
    second.set_ylabel("ln of the cube ratio", fontsize=8)
    second.set_xticks(np.unique(order))
    return figure


def _flow(results: "Results") -> "Figure | None":
    table = results.tables["segments"]
    if table["flow_um3_per_s"].notna().sum() == 0:
        return None
    figure, (axis, second) = _new(9, 3, 2)
    orders = results.tables["orders"]
    if len(orders):
        axis.plot(orders["order"], orders["pressure_in_pa"], "o-", color=_ACCENT, markersize=4, linewidth=1, label="upstream end")
        axis.plot(orders["order"], orders["pressure_out_pa"], "s-", color=_SECOND, markersize=4, linewidth=1, label="downstream end")
        axis.set_xticks(orders["order"])
        axis.invert_xaxis()
        axis.set_xlabel("order (inlet on the left)", fontsize=8)
        axis.set_ylabel("mean pressure in Pa", fontsize=8)
        axis.legend(fontsize=7, frameon=False)
    else:
        axis.set_axis_off()
    share = np.sort(table["resistance_share"].fillna(0).to_numpy(dtype=float))[::-1]
    second.plot(np.arange(1, len(share) + 1), np.cumsum(share), color=_ACCENT, linewidth=1.5)
    second.set_xscale("log")
    second.set_ylim(0, 1.02)
    second.set_xlabel("segments, those that matter most first", fontsize=8)
    second.set_ylabel("share of the resistance", fontsize=8)
    return figure


def _planes(results: "Results") -> "Figure | None":
    contrast = results.profiles.get("contrast_by_plane")
    if not contrast or len(contrast) < 3:
        return None
    figure, (axis, second) = _new(9, 2.4, 2)
    z = np.arange(len(contrast)) * results.graph.spacing_um[0]
    axis.plot(z, contrast, color=_ACCENT, linewidth=1.2)
    axis.set_ylim(0, None)
    axis.set_xlabel("z in um", fontsize=8)
    axis.set_ylabel("vessel contrast", fontsize=8)
    mean = results.profiles["mean_by_plane"]
    second.plot(np.arange(len(mean)) * results.graph.spacing_um[0], mean, color=_ACCENT, linewidth=1.2)
    second.set_xlabel("z in um", fontsize=8)
    second.set_ylabel("mean grey value of the plane", fontsize=8)
    return figure
