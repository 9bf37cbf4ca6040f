"""Where blood enters and leaves, and at which pressure: what the flow is solved under."""

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ..network.graph import NODE_KINDS, CentrelineGraph

__all__ = [
    "OUTLET_RULES",
    "BoundaryConditions",
    "BoundarySettings",
    "boundary_conditions",
    "outlet_nodes",
]

OUTLET_RULES = ("all_ends", "border_ends")


class BoundarySettings(Settings):
    """Settings of the boundary conditions."""

    outlets: Literal["automatic", "all_ends", "border_ends"] = setting(
        "automatic",
        "which ends are outlets: every free end but the inlet (all_ends) or those the volume's"
        " edge cuts"
        " (border_ends); automatic takes all_ends in a tree-like network, border_ends in a mesh",
    )
    mesh_share: float = setting(
        0.2, "share of the length that lies on loops from which a network counts as a mesh",
        gt=0, lt=1, source="data contract",
    )  # fmt: skip
    inlet_pressure_pa: float = setting(
        5000.0, "pressure at the inlet", unit="Pa", source="judgement: about 37 mmHg, arteriolar"
    )
    outlet_pressure_pa: float = setting(
        2000.0, "pressure at every outlet", unit="Pa", source="judgement: about 15 mmHg"
    )
    inlet_flow_um3_per_s: float | None = setting(
        None, "total flow through the inlets, in place of their pressure", unit="um3/s", gt=0
    )


@dataclass(frozen=True, slots=True)
class BoundaryConditions:
    """Fixed pressures at inlets and outlets, and the rule that chose them."""

    inlets: np.ndarray
    outlets: np.ndarray
    inlet_pressure_pa: float
    outlet_pressure_pa: float
    inlet_flow_um3_per_s: float | None
    rule: str
    sentence: str

    def to_json(self) -> dict[str, Any]:
        """Return the record for flow_settings.json, node by node."""
        inlet: dict[str, Any] = {"type": "pressure", "value_pa": self.inlet_pressure_pa}
        if self.inlet_flow_um3_per_s is not None:
            inlet = {"type": "flow", "value_um3_per_s": self.inlet_flow_um3_per_s}
        outlet = {"type": "pressure", "value_pa": self.outlet_pressure_pa}
        return {
            "outlet_rule": self.rule, "explanation": self.sentence,
            "nodes": [
                *({"node_id": int(n), "kind": "inlet", **inlet} for n in self.inlets),
                *({"node_id": int(n), "kind": "outlet", **outlet} for n in self.outlets),
            ],
        }  # fmt: skip


def boundary_conditions(
    graph: CentrelineGraph, inlets: np.ndarray, *, loop_share: float, settings: BoundarySettings
) -> BoundaryConditions:
    """Return the conditions for one graph.

    Parameters
    ----------
    inlets : (k,) int array
        Inlet nodes.
    loop_share : float
        Share of the length that lies on loops (2-core).

    Raises
    ------
    UnusableInputError
        If the inlet's pressure does not exceed the outlets'.
    """
    if (
        settings.inlet_flow_um3_per_s is None
        and settings.inlet_pressure_pa <= settings.outlet_pressure_pa
    ):
        msg = (
            f"boundary.inlet_pressure_pa: found {settings.inlet_pressure_pa} Pa, expected more than"
            f" outlet_pressure_pa = {settings.outlet_pressure_pa} Pa"
        )
        raise UnusableInputError(msg)
    mesh = loop_share > settings.mesh_share
    rule = settings.outlets
    if rule == "automatic":
        rule = "border_ends" if mesh else "all_ends"
    outlets = outlet_nodes(graph, inlets, rule)
    why = (
        f"{100 * loop_share:.0f} % of the length lies on loops: {'a mesh' if mesh else 'tree-like'}"
    )
    if not len(outlets) and settings.outlets == "automatic":
        rule = "all_ends"
        outlets = outlet_nodes(graph, inlets, rule)
        why += "; no end is cut by the volume's edge, so every free end is an outlet"
    text = {
        "all_ends": "every free end but the inlet is an outlet at one pressure",
        "border_ends": "ends cut by the volume's edge, but the inlet, are outlets at one"
        " pressure; blind"
        " ends carry no flow",
    }[rule]
    return BoundaryConditions(
        np.asarray(inlets, dtype=np.int64), outlets, settings.inlet_pressure_pa,
        settings.outlet_pressure_pa, settings.inlet_flow_um3_per_s, rule, f"{text} ({why})",
    )  # fmt: skip


def outlet_nodes(graph: CentrelineGraph, inlets: np.ndarray, rule: str) -> np.ndarray:
    """Return the outlet nodes under a rule of `OUTLET_RULES`."""
    free = graph.node_degree() == 1
    if rule == "border_ends":
        free &= graph.node_kind == NODE_KINDS.index("border")
    free[np.asarray(inlets, dtype=np.int64)] = False
    return np.flatnonzero(free)
