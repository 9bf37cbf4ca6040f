"""From a graph with radii to all tables: orders, junctions and flow joined in one place."""

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import pandas as pd

from .errors import UnusableInputError
from .flow.boundary import OUTLET_RULES, BoundaryConditions, boundary_conditions
from .flow.cost import murray_cost
from .flow.hindrance import hindrance_radius_um, segment_hindrance_per_um3
from .flow.sensitivity import effective_segments, log_resistance_common, log_resistance_sd
from .flow.solve import FlowSolution, network_hindrance_per_um3, solve
from .flow.viscosity import ViscositySettings, viscosity_mpa_s
from .network.graph import NODE_KINDS, RADIUS_METHODS, CentrelineGraph
from .quantities import Estimate, Undefined, hindrance_to_resistance_pa_s_per_m3
from .tree.diameter_orders import DiameterOrders, diameter_orders
from .tree.elements import Elements, connectivity, elements, order_table
from .tree.horton import horton_fit
from .tree.junction_law import JunctionSummary, find_junctions, junction_table, summarise_junctions
from .tree.root import Inlets, Rooting, choose_inlets, components, direct, on_loops
from .tree.strahler import topological_orders, walking_order
from .tree.taper import trunk_taper

if TYPE_CHECKING:
    from .line import LineSettings

__all__ = ["Analysis", "analyse_network"]

_Z = 1.959963984540054
_BLOOD_KG_PER_M3 = 1055.0  # common practice, no source


@dataclass(frozen=True, slots=True)
class Analysis:
    """Everything that follows from a graph with radii."""

    graph: CentrelineGraph
    tables: dict[str, pd.DataFrame]
    summary: dict[str, Any]
    facts: dict[str, Any]
    flow_settings: dict[str, Any]


@dataclass(frozen=True, slots=True)
class SegmentRadii:
    """Mean radius of each segment with its random and its shared standard error."""

    mean_um: np.ndarray
    se_um: np.ndarray
    common_um: np.ndarray
    sd_um: np.ndarray


def analyse_network(
    graph: CentrelineGraph, settings: "LineSettings", *, blur_um: float
) -> Analysis:
    """Root, order, and solve the network; return all tables and summary figures.

    Segments without a radius are left out of ordering and flow (their cells are empty).

    Parameters
    ----------
    graph : CentrelineGraph
        With radii.
    blur_um : float
        SD of the image's blur; vessels thinner than it (as a radius) are not resolved. 0: unknown.
    """
    graph = graph.replace(segment_resolved=graph.segment_resolved & _resolved(graph, blur_um))
    radii = segment_radii(graph)
    inlets = choose_inlets(graph, settings=settings.root)
    length = graph.segment_length_um()
    in_loop = on_loops(graph)
    loop_share = float(length[in_loop].sum() / max(length.sum(), 1e-12))
    conditions, flow, no_flow = _flow(graph, inlets, loop_share, settings)
    rooting = _rooting(graph, inlets, flow)
    graph, rooting, flow = _turned_downstream(graph, rooting, flow)
    radii = segment_radii(graph)
    mesh = loop_share > settings.boundary.mesh_share
    order, topological, diameter, found = _orders(rooting, radii, length, settings, mesh)
    junctions = find_junctions(
        graph, rooting, radii.mean_um, np.nan_to_num(radii.se_um), common_um=radii.common_um
    )
    pooled = summarise_junctions(junctions, settings=settings.junctions)
    graph = _with_kinds(graph, conditions, inlets)
    resistance = _resistance_table(graph, inlets, radii, settings)
    tables = {
        "nodes": _nodes(graph, flow),
        "segments": _segments(graph, rooting, radii, order, topological, found, flow),
        "points": _points(graph),
        "junctions": junction_table(graph, rooting, junctions, settings=settings.junctions),
        "orders": _orders_joined(found, order, length, radii, rooting, flow),
        "connectivity": _connectivity(found),
        "resistance": resistance,
    }
    summary = _summary(graph, rooting, radii, order, diameter, found, tables, pooled, conditions, flow, no_flow,
                       blur_um, settings)  # fmt: skip
    facts = _facts(graph, rooting, radii, diameter, tables, pooled, flow, blur_um, loop_share)
    flow_settings = {"inlet_rule": inlets.rule, "viscosity": settings.viscosity.model_dump()}
    flow_settings |= conditions.to_json() if conditions else {"reason": no_flow}
    return Analysis(graph, tables, summary, facts, flow_settings)


def segment_radii(graph: CentrelineGraph) -> SegmentRadii:
    """Mean radii outside the junctions' zones with standard errors.

    Points within one diameter of length share their errors; so many independent measurements of the
    points' own standard error stand behind a mean.
    """
    mean = graph.segment_radius_um()
    weight = graph.point_weight_um() * np.isfinite(graph.point_radius_um)
    outside = weight * ~graph.point_in_zone
    whole = np.repeat(graph.segment_sum(outside) <= 0, graph.points_per_segment)
    weight = np.where(whole, weight, outside)
    total = np.maximum(graph.segment_sum(weight), 1e-12)
    square = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_se_um) ** 2) / total
    known = graph.segment_sum(weight * np.isfinite(graph.point_radius_se_um)) > 0
    independent = np.maximum(1.0, total / np.maximum(2 * np.nan_to_num(mean), 1e-12))
    common = graph.segment_sum(weight * np.nan_to_num(graph.point_radius_common_um)) / total
    left = graph.point_radius_um - np.repeat(mean, graph.points_per_segment)
    sd = np.sqrt(graph.segment_sum(weight * np.nan_to_num(left) ** 2) / total)
    return SegmentRadii(mean, np.where(known, np.sqrt(square / independent), np.nan), common, sd)


def _resolved(graph: CentrelineGraph, blur_um: float) -> np.ndarray:
    radius = np.nan_to_num(graph.segment_radius_um())
    if blur_um <= 0:
        return radius > 0
    return (radius >= blur_um) & (radius > 0)


def _flow(graph, inlets: Inlets, loop_share, settings):  # noqa: ANN001, ANN202
    """Conditions and solution, or the reason why there is no flow."""
    try:
        conditions = boundary_conditions(
            graph, inlets.nodes, loop_share=loop_share, settings=settings.boundary
        )
        diameter = 2 * hindrance_radius_um(
            graph.segment_length_um(), segment_hindrance_per_um3(graph)
        )
        return (
            conditions,
            solve(graph, conditions, viscosity_mpa_s=_viscosity(diameter, settings.viscosity)),
            "",
        )
    except UnusableInputError as refused:
        if "boundary." in str(refused) and "expected more than" in str(refused):
            raise
        return None, None, str(refused)


def _viscosity(diameter_um: np.ndarray, settings: ViscositySettings) -> np.ndarray:
    # Below the narrowest vessel that a red cell passes the laws have no meaning: held at 2.7 um
    # (recalled from memory: the cylindrical limit of a rat's red cell).
    known = np.isfinite(diameter_um)
    safe = np.maximum(np.where(known, diameter_um, 10.0), 2.7)
    return np.where(known, viscosity_mpa_s(safe, settings=settings), np.nan)


def _rooting(graph: CentrelineGraph, inlets: Inlets, flow: FlowSolution | None) -> Rooting:
    if flow is not None:
        rooting = direct(graph, inlets, flow_um3_per_s=flow.flow_um3_per_s)
        try:
            walking_order(rooting.parent)
        except UnusableInputError:
            # Equal pressures can leave a ring of parents; the walk from the inlet has none.
            return direct(graph, inlets)
        return rooting
    return direct(graph, inlets)


def _turned_downstream(graph, rooting, flow):  # noqa: ANN001, ANN202
    """Turn segments so that node_a is upstream; the flow's signs follow."""
    turn = rooting.upstream == graph.segment_nodes[:, 1]
    turn &= graph.segment_nodes[:, 0] != graph.segment_nodes[:, 1]
    graph = graph.with_directions(turn)
    if flow is not None:
        sign = np.where(turn, -1.0, 1.0)
        flow = FlowSolution(
            flow.pressure_pa, flow.flow_um3_per_s * sign + 0.0, flow.viscosity_mpa_s, flow.hindrance_per_um3,
            flow.resistance_pa_s_per_m3, flow.resistance_share, flow.inlet_flow_um3_per_s,
            flow.network_resistance_pa_s_per_m3, flow.mass_balance_error, flow.unreached_segments,
        )  # fmt: skip
    return graph, rooting, flow


def _orders(rooting, radii, length, settings, mesh):  # noqa: ANN001, ANN202
    """Orders of all segments with a radius; in a mesh those on loops have order 0."""
    m = len(length)
    ordered = np.isfinite(radii.mean_um) & (radii.mean_um > 0)
    if mesh:
        ordered &= ~rooting.in_loop
    index = np.flatnonzero(ordered)
    number = np.full(m + 1, -1, np.int64)
    number[index] = np.arange(len(index))
    parent = number[rooting.parent[index]]
    order, topological, element = (
        np.zeros(m, np.int64),
        np.zeros(m, np.int64),
        np.full(m, -1, np.int64),
    )
    if not len(index):
        empty = np.zeros(0)
        none = DiameterOrders(
            np.zeros(0, np.int64), empty, empty, empty, 0, True, "no segment to order"
        )
        return (
            order,
            topological,
            none,
            Elements(element, np.zeros(0, np.int64), empty, empty, empty, np.zeros(0, np.int64)),
        )
    diameter = diameter_orders(parent, 2 * radii.mean_um[index], settings=settings.orders)
    order[index] = diameter.order
    topological[index] = topological_orders(parent).strahler
    found = elements(parent, diameter.order, length[index], 2 * radii.mean_um[index])
    element[index] = found.element_of_segment
    found = Elements(
        element, found.order, found.n_segments, found.length_um, found.diameter_um, found.parent
    )
    return order, topological, diameter, found


def _with_kinds(
    graph: CentrelineGraph, conditions: BoundaryConditions | None, inlets: Inlets
) -> CentrelineGraph:
    kind = graph.node_kind.copy()
    if conditions is not None:
        kind[conditions.outlets] = NODE_KINDS.index("outlet")
    kind[inlets.nodes] = NODE_KINDS.index("inlet")
    return graph.replace(node_kind=kind)


def _nodes(graph: CentrelineGraph, flow: FlowSolution | None) -> pd.DataFrame:
    frame = graph.to_frames()["nodes"]
    widest = np.full(graph.n_nodes, np.nan)
    for at, node in ((graph.point_offsets[:-1], 0), (graph.point_offsets[1:] - 1, 1)):
        np.fmax.at(widest, graph.segment_nodes[:, node], graph.point_radius_um[at])
    frame["radius_um"] = widest
    frame["pressure_pa"] = flow.pressure_pa if flow else np.nan
    return frame


def _segments(graph, rooting, radii, order, topological, found, flow):  # noqa: ANN001, ANN202
    length, chord = graph.segment_length_um(), graph.segment_chord_um()
    hindrance = segment_hindrance_per_um3(graph)
    total = np.sqrt(np.nan_to_num(radii.se_um) ** 2 + radii.common_um**2)
    known = np.isfinite(radii.se_um)
    m = graph.n_segments
    nothing = np.full(m, np.nan)
    q = flow.flow_um3_per_s if flow else nothing
    mu = flow.viscosity_mpa_s if flow else nothing
    coarsest = max(graph.spacing_um)
    with np.errstate(divide="ignore", invalid="ignore"):
        velocity = q / (np.pi * radii.mean_um**2)
        shear = 4e-3 * mu * np.abs(q) / (np.pi * radii.mean_um**3)
        tortuosity = np.where(chord > 0, length / chord, np.nan)
    return pd.DataFrame({
        "segment_id": np.arange(m), "node_a": graph.segment_nodes[:, 0], "node_b": graph.segment_nodes[:, 1],
        "length_um": length, "chord_um": chord, "tortuosity": tortuosity, "radius_um": radii.mean_um,
        "radius_um_low": np.where(known, np.maximum(radii.mean_um - _Z * total, 0), np.nan),
        "radius_um_high": np.where(known, radii.mean_um + _Z * total, np.nan),
        "radius_sd_um": radii.sd_um, "radius_hindrance_um": hindrance_radius_um(length, hindrance),
        "voxels_across": 2 * radii.mean_um / coarsest if coarsest > 0 else nothing,
        "resolved": graph.segment_resolved, "strahler": topological, "order": order,
        "generation": rooting.generation, "element_id": _maybe(found.element_of_segment),
        "in_loop": rooting.in_loop, "hindrance_per_um3": hindrance,
        "resistance_pa_s_per_m3": flow.resistance_pa_s_per_m3 if flow else nothing,
        "flow_um3_per_s": q, "velocity_um_per_s": velocity, "wall_shear_stress_pa": shear, "viscosity_mpa_s": mu,
        "resistance_share": flow.resistance_share if flow else nothing, "review": _review(graph, radii),
    })  # fmt: skip


def _maybe(values: np.ndarray) -> Any:
    """Integers with the negative ones empty."""
    return pd.Series(values, dtype="Int64").where(pd.Series(values >= 0))


def _review(graph: CentrelineGraph, radii: SegmentRadii) -> list[str]:
    poor = np.nan_to_num(radii.se_um) > 0.15 * np.nan_to_num(radii.mean_um)
    out = []
    for text, resolved, bad in zip(
        graph.segment_review.tolist(), graph.segment_resolved.tolist(), poor.tolist(), strict=True
    ):
        parts = [text] if text else []
        if not resolved:
            parts.append("too thin to size")
        elif bad:
            parts.append("uncertain radius")
        out.append("; ".join(parts))
    return out


def _points(graph: CentrelineGraph) -> pd.DataFrame:
    frame = graph.to_frames()["points"]
    total = np.sqrt(graph.point_radius_se_um**2 + graph.point_radius_common_um**2)
    frame = frame.drop(columns="radius_method")
    frame["radius_um_low"] = np.maximum(graph.point_radius_um - _Z * total, 0)
    frame["radius_um_high"] = graph.point_radius_um + _Z * total
    frame["radius_method"] = np.array(RADIUS_METHODS, dtype=object)[graph.point_method].astype(str)
    # Beyond the contract's columns: what the distance map says, and the junctions' zones.
    frame["radius_map_um"] = graph.point_radius_map_um
    frame["in_zone"] = graph.point_in_zone
    return frame


def _orders_joined(found, order, length, radii, rooting, flow):  # noqa: ANN001, ANN202
    table = order_table(found, order, length, 2 * np.nan_to_num(radii.mean_um))
    extra: dict[str, list[float]] = {name: [] for name in (
        "velocity_um_per_s", "pressure_in_pa", "pressure_out_pa", "resistance_share", "wall_shear_stress_pa_mean"
    )}  # fmt: skip
    for k in table["order"].tolist():
        mine = order == k
        values = [np.nan] * 5
        if flow is not None:
            q, mu, r = (
                a[mine] for a in (np.abs(flow.flow_um3_per_s), flow.viscosity_mpa_s, radii.mean_um)
            )
            moving = np.isfinite(q) & (q > 0)
            area = np.pi * r**2
            # The mean velocity is that of the blood: flow over area, both summed over the order's vessels.
            values[0] = float(q[moving].sum() / area[moving].sum()) if moving.any() else np.nan
            entry, leave = (
                flow.pressure_pa[rooting.upstream[mine]],
                flow.pressure_pa[rooting.downstream[mine]],
            )
            values[1] = float(np.mean(entry[moving])) if moving.any() else np.nan
            values[2] = float(np.mean(leave[moving])) if moving.any() else np.nan
            values[3] = float(np.nansum(flow.resistance_share[mine]))
            values[4] = (
                float(np.mean((4e-3 * mu * q / (np.pi * r**3))[moving])) if moving.any() else np.nan
            )
        for name, value in zip(extra, values, strict=True):
            extra[name].append(value)
    return table.assign(**extra)


def _connectivity(found: Elements) -> pd.DataFrame:
    matrix = connectivity(found)
    top = matrix.mean.shape[0]
    frame = pd.DataFrame(matrix.mean, columns=[f"order_{n}" for n in range(1, top + 1)])
    frame.insert(0, "daughter_order", np.arange(1, top + 1))
    for n in range(top):
        frame[f"order_{n + 1}_se"] = matrix.se[:, n]
    return frame


def _resistance_table(graph, inlets, radii, settings):  # noqa: ANN001, ANN202
    """The hindrance and resistance under each outlet rule and viscosity law, with both intervals."""
    rows = []
    diameter = 2 * hindrance_radius_um(graph.segment_length_um(), segment_hindrance_per_um3(graph))
    with np.errstate(divide="ignore", invalid="ignore"):
        relative, shared = radii.se_um / radii.mean_um, radii.common_um / radii.mean_um
    for rule in OUTLET_RULES:
        try:
            chosen = settings.boundary.model_copy(update={"outlets": rule})
            conditions = boundary_conditions(graph, inlets.nodes, loop_share=0.0, settings=chosen)
            geometric = solve(graph, conditions, viscosity_mpa_s=np.ones(graph.n_segments))
        except UnusableInputError:
            continue
        hindrance = geometric.network_resistance_pa_s_per_m3 / 1e15
        for law in ("constant", "pries_1992", "pries_1994"):
            viscosity = _viscosity(diameter, settings.viscosity.model_copy(update={"law": law}))
            solved = solve(graph, conditions, viscosity_mpa_s=viscosity)
            rows.append(
                {"outlet_rule": rule, "viscosity": law, "n_outlets": len(conditions.outlets)}
                | _with_intervals("hindrance_per_um3", hindrance, geometric.resistance_share, relative, shared)
                | _with_intervals("resistance_pa_s_per_m3", solved.network_resistance_pa_s_per_m3,
                                  solved.resistance_share, relative, shared)
            )  # fmt: skip
    columns = ["outlet_rule", "viscosity", "n_outlets"]
    for name in ("hindrance_per_um3", "resistance_pa_s_per_m3"):
        columns += [
            name,
            f"{name}_low",
            f"{name}_high",
            f"{name}_common_low",
            f"{name}_common_high",
        ]
    return pd.DataFrame(rows, columns=columns)


def _with_intervals(name, value, share, relative, shared):  # noqa: ANN001, ANN202
    random = (
        np.exp(_Z * log_resistance_sd(share, relative)) if np.isfinite(relative).any() else np.nan
    )
    common = (
        np.exp(_Z * log_resistance_common(share, shared)) if np.isfinite(relative).any() else np.nan
    )
    return {
        name: value, f"{name}_low": value / random, f"{name}_high": value * random,
        f"{name}_common_low": value / common, f"{name}_common_high": value * common,
    }  # fmt: skip


def _summary(graph, rooting, radii, order, diameter, found, tables, pooled, conditions, flow, no_flow, blur_um,
             settings):  # noqa: ANN001  # fmt: skip
    length = graph.segment_length_um()
    degree = graph.node_degree()
    tips = degree == 1
    orders = tables["orders"]
    per_order = orders["order"].to_numpy() if len(orders) else np.zeros(0)
    fits = {
        "branching_ratio": horton_fit(per_order, orders["n_elements"].to_numpy()),
        "diameter_ratio": horton_fit(per_order, orders["diameter_um_mean"].to_numpy()),
        "length_ratio": horton_fit(per_order, orders["element_length_um_mean"].to_numpy()),
    }
    ordered = order > 0
    summary: dict[str, Any] = {
        "total_length_um": float(length.sum()), "segments": graph.n_segments,
        "junctions": int(((degree >= 3) | (np.isin(np.arange(graph.n_nodes), rooting.roots) & (degree >= 2))).sum()), "ends": int(tips.sum()),
        "border_ends": int((tips & _at_border(graph)).sum()), "components": rooting.n_parts,
        "loops": rooting.n_loops, "loop_share": rooting.loop_share,
        "radius_median_um": float(np.nanmedian(radii.mean_um)),
        "orders": int(order.max()) if len(order) else 0,
        **{name: fit.ratio.to_json() for name, fit in fits.items()},
        "segments_per_element": float(ordered.sum() / max(len(found.order), 1)) if ordered.any() else None,
        "ordered_fraction": float(length[ordered].sum() / max(length.sum(), 1e-12)),
        "order_note": diameter.note, "order_cuts_um": diameter.cuts_um.tolist(),
        **_junction_figures(pooled, tables["junctions"]),
        "radius_correction": None, "smallest_resolved_radius_um": blur_um or None,
        "trunk_taper_b": trunk_taper(graph, rooting, int(rooting.roots[0])).to_json(),
    }  # fmt: skip
    return summary | _flow_figures(graph, radii, tables, conditions, flow, no_flow, settings)


def _junction_figures(pooled: JunctionSummary, table: pd.DataFrame) -> dict[str, Any]:
    return {
        "cube_residual_median": pooled.residual_median.to_json(), "junction_exponent": pooled.exponent.to_json(),
        "junction_exponent_plain": pooled.exponent_plain.to_json(), "junctions_used": pooled.used,
        "junctions_unsolvable": _finite(pooled.unsolvable),
        "junctions_unsolvable_expected": _finite(pooled.unsolvable_expected),
        "area_ratio_median": pooled.area_ratio_median.to_json(),
        "cube_law_p": _finite(pooled.p_cube_law), "junction_scatter": _finite(pooled.scatter),
        "junctions_not_used": table.loc[~table["used"].astype(bool), "reason"].value_counts().sort_index().to_dict()
        if len(table) else {},
    }  # fmt: skip


def _flow_figures(graph, radii, tables, conditions, flow, no_flow, settings):  # noqa: ANN001, ANN202
    if flow is None:
        none = Undefined(no_flow).to_json()
        return {
            "network_hindrance_per_um3": none, "network_resistance_pa_s_per_m3": none,
            "inlet_flow_um3_per_s": None, "dominant_segments": [], "effective_segments": None,
            "murray_cost_excess": None, "outlet_rule": None,
        }  # fmt: skip
    with np.errstate(divide="ignore", invalid="ignore"):
        relative, shared = radii.se_um / radii.mean_um, radii.common_um / radii.mean_um
    geometric = network_hindrance_per_um3(graph, conditions)
    share = flow.resistance_share
    cost = murray_cost(flow.flow_um3_per_s, radii.mean_um, graph.segment_length_um(), flow.viscosity_mpa_s,
                       settings=settings.cost)  # fmt: skip
    top = np.argsort(-np.nan_to_num(share), kind="stable")[:10]
    q, r = np.abs(flow.flow_um3_per_s), radii.mean_um
    with np.errstate(divide="ignore", invalid="ignore"):
        reynolds = _BLOOD_KG_PER_M3 * 2 * q / (np.pi * r) * 1e-12 / (flow.viscosity_mpa_s * 1e-3)
    return {
        "network_hindrance_per_um3": _estimate(geometric, share, relative, shared),
        "network_resistance_pa_s_per_m3": _estimate(flow.network_resistance_pa_s_per_m3, share, relative, shared),
        "network_resistance_at_1_mpa_s_pa_s_per_m3": hindrance_to_resistance_pa_s_per_m3(geometric, 1.0),
        "log_resistance_sd": _finite(log_resistance_sd(share, relative)),
        "log_resistance_common": _finite(log_resistance_common(share, shared)),
        "inlet_flow_um3_per_s": flow.inlet_flow_um3_per_s,
        "dominant_segments": [int(k) for k in top if share[k] > 0],
        "effective_segments": _finite(effective_segments(share)),
        "murray_cost_excess": _finite(cost.excess), "murray_metabolic_w_per_m3": _finite(cost.metabolic_w_per_m3),
        "outlet_rule": conditions.sentence, "mass_balance_error": flow.mass_balance_error,
        "segments_without_flow": flow.unreached_segments, "reynolds_max": _finite(float(np.nanmax(reynolds))),
    }  # fmt: skip


def _estimate(value, share, relative, shared):  # noqa: ANN001, ANN202
    if not np.isfinite(relative).any():
        return {
            "value": value,
            "low": None,
            "high": None,
            "level": 0.95,
            "reason": "the radii carry no standard errors",
        }
    spread = np.hypot(log_resistance_sd(share, relative), log_resistance_common(share, shared))
    return Estimate(
        value, float(value * np.exp(-_Z * spread)), float(value * np.exp(_Z * spread))
    ).to_json()


def _facts(graph, rooting, radii, diameter, tables, pooled, flow, blur_um, loop_share):  # noqa: ANN001, ANN202
    length = graph.segment_length_um()
    degree = graph.node_degree()
    part, _ = components(graph)
    per_part = np.bincount(part[graph.segment_nodes[:, 0]], weights=length)
    tips = degree == 1
    border = tips & _at_border(graph)
    poor = ~graph.segment_resolved | np.array(
        [bool(t) for t in graph.segment_review.tolist()], dtype=bool
    )
    facts: dict[str, Any] = {
        "unresolved_share": float(length[~graph.segment_resolved].sum() / max(length.sum(), 1e-12)) if blur_um else None,
        "largest_part_share": float(per_part.max() / max(length.sum(), 1e-12)),
        "blind_end_share": float((tips & ~border).sum() / max(graph.n_segments, 1)) if any(graph.extent_um) else None,
        "border_end_share": float(border.sum() / max(tips.sum(), 1)) if any(graph.extent_um) else None,
        "crossing_share": float((degree >= 4).sum() / max((degree >= 3).sum(), 1)),
        "loop_share": loop_share, "junctions_used": float(pooled.used),
        "loops_in_tree": float(rooting.n_loops) if loop_share <= 0.2 else None,
        "junctions_unsolvable": _finite(pooled.unsolvable),
        "orders_not_converged": float(not diameter.converged),
    }  # fmt: skip
    resistance = tables["resistance"]
    values = (
        resistance.loc[resistance["viscosity"] == "constant", "hindrance_per_um3"].to_numpy()
        if len(resistance)
        else np.zeros(0)
    )
    if len(values) > 1:
        facts["outlet_rule_ratio"] = float(values.max() / values.min())
    if flow is not None:
        share = np.nan_to_num(flow.resistance_share)
        with np.errstate(divide="ignore", invalid="ignore"):
            facts["log_resistance_sd"] = log_resistance_sd(share, radii.se_um / radii.mean_um)
            reynolds = (
                _BLOOD_KG_PER_M3
                * 2
                * np.abs(flow.flow_um3_per_s)
                / (np.pi * radii.mean_um)
                * 1e-12
                / (flow.viscosity_mpa_s * 1e-3)
            )
        facts["effective_segments"] = _finite(effective_segments(share))
        facts["poor_resistance_share"] = float(share[poor].sum())
        facts["reynolds_max"] = _finite(float(np.nanmax(reynolds)))
    return facts


def _at_border(graph: CentrelineGraph) -> np.ndarray:
    """(n,) whether a node lies at a face of the volume."""
    if not any(graph.extent_um):
        return graph.node_kind == NODE_KINDS.index("border")
    spacing, extent = np.asarray(graph.spacing_um), np.asarray(graph.extent_um)
    gap = np.minimum(
        graph.node_position_um + spacing / 2, extent - spacing / 2 - graph.node_position_um
    )
    return (gap <= 1.5 * spacing).any(axis=1)


def _finite(value: float) -> float | None:
    return float(value) if np.isfinite(value) else None
