"""An invented sample's results, from which the tests make reports."""

import numpy as np
import pandas as pd
from small_graphs import random_tree

from ramulus.network.graph import NODE_KINDS, CentrelineGraph
from ramulus.report.content import ReportContent
from ramulus.trust.flags import raise_flags

SPACING_UM = (2.0, 1.0, 1.0)
NAMES = ("nodes", "segments", "junctions", "orders", "connectivity", "resistance")


def bare_graph(content, graph, **changes):
    """Return the content of a sample that is nothing but a graph: no tables, no figures."""
    return changed(content, graph=graph, tables={}, summary={}, projections={}, profiles={},
                   twin=None, edits=(), flags=(), **changes)  # fmt: skip


def changed(content, **changes):
    """Return the content with some fields changed."""
    fields = {name: getattr(content, name) for name in ReportContent.__slots__}
    return ReportContent(**{**fields, **changes})


def one_tube(radius_um=5.0, *, ends=((20, 20, 10), (20, 20, 50))):
    """Return a graph of one straight vessel."""
    line = np.linspace(*np.array(ends, dtype=float), 9)
    return CentrelineGraph.from_polylines(
        line[[0, -1]], [[0, 1]], [line], [np.full(9, radius_um)], spacing_um=SPACING_UM,
        extent_um=(40.0, 40.0, 60.0),
    )  # fmt: skip


def made_graph(n_segments=40, seed=3):
    """Return a tree inside an image, directed away from its inlet."""
    tree = random_tree(n_segments, seed=seed)
    low = tree.point_position_um.min(axis=0) - 12
    kind = tree.node_kind.copy()
    kind[0] = NODE_KINDS.index("inlet")
    resolved = np.arange(n_segments) % 9 > 0
    return tree.replace(
        node_position_um=tree.node_position_um - low, node_kind=kind,
        point_position_um=tree.point_position_um - low, segment_resolved=resolved,
        point_radius_map_um=0.9 * tree.point_radius_um, spacing_um=SPACING_UM,
        extent_um=tuple((tree.point_position_um.max(axis=0) - low + 12).tolist()),
    )  # fmt: skip


def made_content(n_segments=40, seed=3, **changes):
    """Return all that a report can show, on an invented tree."""
    graph = made_graph(n_segments, seed)
    rng = np.random.default_rng(seed)
    shape = [int(np.ceil(e / s)) for e, s in zip(graph.extent_um, SPACING_UM, strict=True)]
    summary = _summary(graph, shape)
    content = ReportContent(
        title="sample 7", graph=graph, tables=_tables(graph, rng), summary=summary,
        flags=raise_flags(summary["image"]),
        projections={
            "z": rng.random(shape[1:]), "y": rng.random((shape[0], shape[2])),
            "x": rng.random(shape[:2]),
        },
        profiles={
            "contrast_by_plane": np.linspace(30, 12, shape[0]).tolist(),
            "mean_by_plane": np.linspace(9, 5, shape[0]).tolist(),
        },
        twin=_TWIN, edits=_EDITS, settings="[gauge]\nrecentre = true\n",
        provenance={"input": "sample_7.ome.tif", "sha256": "0123abcd", "ramulus": "0.1.0"},
    )  # fmt: skip
    return changed(content, **changes)


def _tables(graph, rng):
    frames = graph.to_frames()
    nodes, segments = frames["nodes"], frames["segments"]
    m = graph.n_segments
    nodes["pressure_pa"] = np.linspace(5000, 2000, len(nodes))
    radius = segments["radius_um"]
    order = pd.Series(1 + (radius.rank(pct=True) * 2.999).astype(int), dtype="Int64")
    share = np.where(np.arange(m) == 2, np.nan, rng.random(m) ** 4)
    segments = segments.assign(
        tortuosity=segments["length_um"] / segments["chord_um"], radius_um_low=0.9 * radius,
        radius_um_high=1.1 * radius, voxels_across=2 * radius / 2.0, strahler=order, order=order,
        generation=np.arange(m), flow_um3_per_s=rng.random(m) * 1e6,
        velocity_um_per_s=rng.random(m) * 1e3, wall_shear_stress_pa=rng.random(m) * 10,
        resistance_share=share / np.nansum(share), in_loop=False,
    )  # fmt: skip
    segments.loc[2, ["flow_um3_per_s", "wall_shear_stress_pa"]] = np.nan
    segments.loc[5, "review"] = "bridged"
    orders = pd.DataFrame({
        "order": [1, 2, 3], "n_segments": [28, 10, 2], "n_elements": [24, 8, 1],
        "diameter_um_mean": [4.0, 7.0, 12.0], "diameter_um_sd": [1.0, 1.2, np.nan],
        "element_length_um_mean": [20.0, 45.0, 90.0], "element_length_um_sd": [8.0, 20.0, np.nan],
        "cross_section_um2": [300.0, 307.0, 113.0], "pressure_in_pa": [3000.0, 4000.0, 5000.0],
        "pressure_out_pa": [2100.0, 3100.0, 4200.0],
    })  # fmt: skip
    return {"nodes": nodes, "segments": segments, "orders": orders,
            "junctions": _junctions(graph, segments), "resistance": _RESISTANCE,
            "connectivity": pd.DataFrame({"order_1": [0.1]})}  # fmt: skip


def _junctions(graph, segments):
    """Return every fork with two daughters or more, measured from the radii."""
    rows = []
    radius = segments["radius_um"].to_numpy()
    for node in np.flatnonzero(graph.node_degree() >= 3):
        parent = np.flatnonzero(graph.segment_nodes[:, 1] == node)
        daughters = np.flatnonzero(graph.segment_nodes[:, 0] == node)
        if len(parent) and len(daughters) > 1:
            cubes = (radius[daughters] ** 3).sum()
            ratio = cubes / radius[parent[0]] ** 3
            rows.append((node, parent[0], radius[parent[0]], ratio - 1, np.log(ratio)))
    names = [
        "node_id", "parent_segment", "parent_radius_um", "cube_residual", "cube_residual_log",
    ]  # fmt: skip
    table = pd.DataFrame(rows, columns=names)
    return table.assign(used=np.arange(len(table)) % 4 > 0, reason="")


def _summary(graph, shape):
    interval = {"value": 2.9, "low": 2.7, "high": 3.1, "level": 0.95}
    return {
        "sample": "sample 7", "shape": shape, "spacing_um": list(SPACING_UM),
        "spacing_origin": ["header", "header", "user"], "segments": graph.n_segments,
        "junctions": 12, "ends": 20, "border_ends": 3, "components": 1, "loops": 0,
        "total_length_um": float(graph.segment_length_um().sum()), "radius_median_um": 3.2,
        "length_density_per_mm2": 812.0, "vessel_volume_fraction": 0.031, "orders": 3,
        "branching_ratio": {"value": 4.9, "low": 3.1, "high": 7.7, "level": 0.95},
        "diameter_ratio": {"value": 1.73, "low": 1.5, "high": 2.0, "level": 0.95},
        "length_ratio": {"value": None, "reason": "only two orders are complete"},
        "segments_per_element": 1.2, "ordered_fraction": 1.0, "junction_exponent": interval,
        "junction_exponent_plain": interval, "junctions_used": 9, "junctions_unsolvable": 0.1,
        "cube_residual_median": {"value": -0.02, "low": -0.05, "high": 0.01, "level": 0.95},
        "network_hindrance_per_um3": {"value": 0.248, "low": 0.24, "high": 0.26, "level": 0.95},
        "network_resistance_pa_s_per_m3":
            {"value": 8.69e14, "low": 8.4e14, "high": 9.0e14, "level": 0.95},
        "inlet_flow_um3_per_s": 3.4e6, "dominant_segments": [5, 1, 30], "effective_segments": 6.5,
        "smallest_resolved_radius_um": 1.1, "murray_cost_excess": 0.03,
        "outlet_rule": "every free end but the inlet is an outlet at one pressure",
        "order_note": "the iteration ended after 7 rounds",
        "junctions_not_used": {"a vessel is not resolved": 3},
        "image": {"anisotropy": 6.0, "bridged": 1.0, "loops_in_tree": 0.0, "noise_sd": 2.0},
    }  # fmt: skip


_RESISTANCE = pd.DataFrame({
    "outlet_rule": ["all_ends", "border_ends"], "viscosity": ["constant", "pries_1994"],
    "n_outlets": [19, 3], "hindrance_per_um3": [0.25, 0.5],
    "hindrance_per_um3_low": [0.24, 0.45], "hindrance_per_um3_high": [0.26, 0.55],
    "resistance_pa_s_per_m3": [1e15, 133.322387415e13],
    "resistance_pa_s_per_m3_low": [0.9e15, 1e15],
    "resistance_pa_s_per_m3_high": [1.1e15, 1.6e15],
    "resistance_pa_s_per_m3_common_low": [0.8e15, np.nan],
    "resistance_pa_s_per_m3_common_high": [1.2e15, np.nan],
})  # fmt: skip
_TWIN = {
    "radius_classes": [
        {"low_voxels": 1.2, "high_voxels": 2.0, "n": 30.0, "median": 0.05, "p90_absolute": 0.2},
        {"low_voxels": 8.0, "high_voxels": 1e9, "n": 90.0, "median": 0.001, "p90_absolute": 0.02},
    ],
    "radius_bias": 0.004, "radius_spread": 0.05, "length_ratio": 0.98, "junction_recall": 1.0,
    "junction_precision": None, "draws": 2, "shape": [64, 96, 96], "reason": "",
}  # fmt: skip
_EDITS = [
    {"op": "remove", "reason": "spur", "author": "auto", "position_um": [1, 2, 3]},
    {"op": "remove", "reason": "spur", "author": "auto", "position_um": [4, 2, 3]},
    {"op": "join", "reason": "gap", "author": "AB", "position_um": [4, 9, 3]},
]
